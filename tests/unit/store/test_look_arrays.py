"""Looks read as arrays are those that are found observation by observation."""

from collections.abc import Iterator, Sequence
from datetime import datetime, timedelta
from itertools import groupby

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sqlalchemy.orm import Session

from service.store.look_arrays import read_looks
from service.store.looks import PASS_GAP, Observed, observations, one_per_pass
from service.store.sessions import Sessions, migrate, open_engine
from service.store.tables import Scene
from tests.unit.store.histories import BORDER, PARCELS, Pictured, empty, post
from tests.unit.store.test_latest import DEEDS, Step, steps

MEASURES = ("ndmi", "ndvi", "nbr")
Told = dict[tuple[int, datetime, str], tuple[float, list[float]]]
"""Valid share and means, by parcel, instant and scene."""
UNTIL = BORDER + timedelta(minutes=150_000)


def one_by_one(session: Session, parcel_ids: Sequence[int], since: datetime | None) -> Told:
    """Find the looks the slow way, as a person would explain them."""
    rows = observations(
        session, parcel_ids, since=since - PASS_GAP if since else None, until=UNTIL + PASS_GAP
    )
    found: Told = {}
    for parcel_id, of_parcel in groupby(rows, key=lambda row: row.parcel_id):
        by_scene: dict[int, list[Observed]] = {}
        for row in of_parcel:
            by_scene.setdefault(row.scene_id, []).append(row)
        for look in one_per_pass(_telling(rows) for rows in by_scene.values()):
            if (since is None or look.acquired_at >= since) and look.acquired_at < UNTIL:
                key = parcel_id, look.acquired_at, look.scene_ref
                figures = _figures(by_scene[look.scene_id])
                found[key] = float(np.float32(look.of_look("valid_share"))), figures
    return found


def _telling(rows: Sequence[Observed]) -> Observed:
    """Return the row with the least valid share among those that hold the newest of a measure."""
    newest = {
        measure: row
        for row in sorted(rows, key=lambda row: row.write_id)
        for measure in row.places.measures
    }
    return min(newest.values(), key=lambda row: (row.of_look("valid_share"), -row.write_id))


def _figures(rows: Sequence[Observed]) -> list[float]:
    figures = dict.fromkeys(MEASURES, float("nan"))
    for row in sorted(rows, key=lambda row: row.write_id):
        for measure in MEASURES:
            if row.places.has(measure):
                value = row.figure(f"{measure}.mean")
                figures[measure] = float("nan") if value is None else float(np.float32(value))
    return list(figures.values())


def as_arrays(session: Session, parcel_ids: Sequence[int], since: datetime | None) -> Told:
    looks = read_looks(session, parcel_ids, MEASURES, since=since, until=UNTIL)
    return {
        (parcel_id, looks.acquired_at[scene], looks.refs[scene]): (share, values)
        for parcel_id, scene, share, values in zip(
            looks.parcel_ids.tolist(),
            looks.scene.tolist(),
            looks.valid_share.astype(float).tolist(),
            looks.values.tolist(),
            strict=True,
        )
    }


def carry_out(sessions: Sessions, done: Sequence[Step]) -> None:
    posted: list[Scene] = []
    with sessions.writing() as session:
        empty(session)
        for step in done:
            DEEDS[step.do if posted else "post"](session, step, posted)
    with sessions.reading() as session:
        for parcel_ids in (list(range(1, PARCELS + 1)), [2]):
            for since in (None, BORDER, BORDER + timedelta(minutes=2)):
                expected = one_by_one(session, parcel_ids, since)
                found = as_arrays(session, parcel_ids, since)
                assert found.keys() == expected.keys()
                for key, (share, figures) in expected.items():
                    assert found[key][0] == share
                    np.testing.assert_array_equal(found[key][1], figures)


@pytest.fixture(scope="module")
def sqlite(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Sessions]:
    folder = tmp_path_factory.mktemp("arrays")
    engine = open_engine(f"sqlite:///{folder / 'app.sqlite'}")
    migrate(engine, lock_folder=folder)
    yield Sessions(engine)
    engine.dispose()


@settings(max_examples=80)
@given(done=st.lists(steps(), max_size=12))
def test_looks_as_arrays_are_the_looks_one_by_one(sqlite: Sessions, done: list[Step]) -> None:
    carry_out(sqlite, done)


def test_looks_as_arrays_are_the_looks_one_by_one_on_each_database(sessions: Sessions) -> None:
    def step(do: str, minutes: int, layout: str, *shares: float | None, to: int = 0) -> Step:
        told = Pictured(minutes=minutes, platform="sentinel-2a", layout=layout, shares=shares)
        return Step(do=do, told=told, to=to)

    carry_out(
        sessions,
        [
            step("post", 2_000, "both", 1.0, 0.8, 0.5),
            # A chain of scenes that is longer than one pass.
            *(step("post", minutes, "both", 1.0, 0.6, None) for minutes in (-8, 0, 4, 9, 14)),
            step("measure again", 2_000, "second", 0.7, None, 0.0, to=0),
            step("measure again", 2_000, "apart", None, 0.9, 1.0, to=0),
            step("post", 2_005, "first", 0.9, 0.9, None),
            step("replace", 2_000, "both", 0.6, 0.0, 1.0, to=0),
            step("measure again", 2_000, "first", 0.8, None, 0.0, to=0),
            step("withdraw", 4, "first", to=3),
        ],
    )


def test_a_chain_of_scenes_is_cut_into_passes_of_ten_minutes(sqlite: Sessions) -> None:
    with sqlite.writing() as session:
        empty(session)
        for number, minutes in enumerate((0, 6, 11, 12, 20, 22, 40)):
            told = Pictured(
                minutes=minutes, platform="sentinel-2a", layout="first", shares=(1.0, None, None)
            )
            post(session, told, number)
        looks = read_looks(session, [1], MEASURES, since=None, until=UNTIL)
    # Of equals the last by ref: 0 and 6; 11, 12 and 20; 22; 40.
    assert [looks.refs[scene] for scene in looks.scene] == ["s1", "s4", "s5", "s6"]
