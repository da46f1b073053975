"""The kept newest looks are what the history says, after whatever was done to it."""

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sqlalchemy import func, select
from sqlalchemy.orm import Session

from service.store.looks import newest_looks
from service.store.observations import record
from service.store.scenes import SceneState, retire_figures
from service.store.sessions import Sessions, migrate, open_engine
from service.store.tables import Latest, Observation, Scene, Write
from tests.unit.store.histories import (
    LAYOUTS,
    PARCELS,
    RECORDED,
    Pictured,
    by_hand,
    empty,
    kept_latest,
    measured,
    post,
    share_of,
)

MEASURES = ("ndvi", "ndmi")


@dataclass(frozen=True, slots=True, kw_only=True)
class Step:
    """Something done to the history: a new scene, or one of those there, by its place."""

    do: str
    told: Pictured
    to: int


def post_it(session: Session, step: Step, posted: list[Scene]) -> None:
    posted.append(post(session, step.told, len(posted)))


def replace_it(session: Session, step: Step, posted: list[Scene]) -> None:
    """Measure a corrected product: other content, the old figures closed in the same step."""
    scene = session.get_one(Scene, posted[step.to % len(posted)].id)
    if scene.state == SceneState.WITHDRAWN:
        return
    scene.generation += 1
    scene.digest = f"{scene.id:032d}{scene.generation:032d}"
    session.flush()
    record(session, scene, measured(step.told, first_value=scene.generation), at=RECORDED)


def measure_again(session: Session, step: Step, posted: list[Scene]) -> None:
    """Measure the same content for some parcels more, as after a change of outlines."""
    scene = session.get_one(Scene, posted[step.to % len(posted)].id)
    if scene.state == SceneState.WITHDRAWN:
        return
    scene.generation += 1
    session.flush()
    record(session, scene, measured(step.told, first_value=scene.generation), at=RECORDED)


def withdraw_it(session: Session, step: Step, posted: list[Scene]) -> None:
    scene = session.get_one(Scene, posted[step.to % len(posted)].id)
    if scene.state != SceneState.WITHDRAWN:
        retire_figures(session, scene, SceneState.WITHDRAWN, at=RECORDED)


DEEDS: dict[str, Callable[[Session, Step, list[Scene]], None]] = {
    "post": post_it,
    "replace": replace_it,
    "measure again": measure_again,
    "withdraw": withdraw_it,
}


def carry_out(sessions: Sessions, steps: list[Step]) -> None:
    """Do the steps, and after each hold what is kept against what the history says."""
    posted: list[Scene] = []
    with sessions.writing() as session:
        empty(session)
    for step in steps:
        with sessions.writing() as session:
            DEEDS[step.do if posted else "post"](session, step, posted)
        with sessions.reading() as session:
            kept = kept_latest(session)
            assert kept == by_hand(session, MEASURES)
            found = {
                (parcel_id, measure): look
                for parcel_id, looks in newest_looks(session, list(range(1, PARCELS + 1)))
                for measure, look in looks.items()
            }
            assert {key: (look.acquired_at, look.write_id) for key, look in found.items()} == kept
            for row in session.scalars(select(Latest)):
                look = found[row.parcel_id, row.measure]
                assert row.value == look.of_measure(row.measure, "mean")
                assert row.valid_share == share_of(look, row.measure)
    with sessions.reading() as session:
        every = (Observation.parcel_id, Observation.write_id)
        doubled = select(*every).group_by(*every).having(func.count() > 1)
        assert session.execute(doubled).all() == []
        of_scenes = select(Write.scene_id, Write.generation)
        assert len(session.execute(of_scenes).all()) == len({*session.execute(of_scenes).all()})


def steps() -> st.SearchStrategy[Step]:
    pictured = st.builds(
        Pictured,
        # Few instants, so that scenes meet in passes; a border between buckets among them.
        minutes=st.sampled_from([-12, -5, 0, 4, 9, 12, 2_000, 200_000]),
        platform=st.sampled_from(["sentinel-2a", "sentinel-2b"]),
        layout=st.sampled_from(sorted(LAYOUTS)),
        shares=st.tuples(*[st.sampled_from([None, 0.0, 0.5, 0.6, 0.8, 1.0])] * PARCELS),
    )
    do = st.sampled_from(["post", "post", "replace", "measure again", "withdraw"])
    return st.builds(Step, do=do, told=pictured, to=st.integers(0, 20))


@pytest.fixture(scope="module")
def sqlite(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Sessions]:
    folder = tmp_path_factory.mktemp("latest")
    engine = open_engine(f"sqlite:///{folder / 'app.sqlite'}")
    migrate(engine, lock_folder=folder)
    yield Sessions(engine)
    engine.dispose()


@settings(max_examples=60)
@given(done=st.lists(steps(), max_size=8))
def test_what_is_kept_follows_every_post_replacement_remeasurement_and_withdrawal(
    sqlite: Sessions, done: list[Step]
) -> None:
    carry_out(sqlite, done)


def test_what_is_kept_follows_on_each_database(sessions: Sessions) -> None:
    def step(do: str, minutes: int, layout: str, *shares: float | None, to: int = 0) -> Step:
        told = Pictured(minutes=minutes, platform="sentinel-2a", layout=layout, shares=shares)
        return Step(do=do, told=told, to=to)

    carry_out(
        sessions,
        [
            step("post", 2_000, "both", 1.0, 0.8, 0.5),
            step("post", 0, "both", 1.0, 1.0, 1.0),
            step("post", 2_005, "first", 0.9, 0.9, None),
            step("replace", 2_000, "both", 0.6, 0.0, 1.0, to=0),
            step("post", 4_000, "second", 0.0, 0.6, 0.8),
            step("measure again", 4_000, "both", 0.7, None, 0.0, to=3),
            step("withdraw", 2_005, "first", to=2),
            step("replace", 4_000, "first", None, 1.0, None, to=3),
            step("withdraw", 2_000, "both", to=0),
            step("post", 6_000, "apart", 0.5, 0.6, 1.0),
            step("post", 6_005, "both", 0.6, 0.6, 0.6),
            step("withdraw", 6_000, "apart", to=4),
        ],
    )
