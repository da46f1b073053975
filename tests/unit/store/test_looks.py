"""One look a pass, and the newest of them, whatever the history."""

from collections.abc import Iterator, Sequence
from datetime import UTC, datetime, timedelta

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.store.looks import Observed, Places, newest_looks, one_per_pass
from service.store.sessions import Sessions, migrate, open_engine
from tests.unit.store.histories import (
    BORDER,
    LAYOUTS,
    PARCELS,
    PASS,
    NewestLooks,
    Pictured,
    best_of_passes,
    by_hand,
    empty,
    post,
)

START = datetime(2024, 6, 3, 10, tzinfo=UTC)
PLACES = Places(by_column={"clear.valid_share": 0}, rule="clear", harmonised=False)


def observed(
    *,
    minutes: float,
    share: float,
    scene: int,
    write: int,
    platform: str = "sentinel-2a",
    baseline: str = "05.10",
) -> Observed:
    return Observed(
        parcel_id=1,
        acquired_at=START + timedelta(minutes=minutes),
        write_id=write,
        scene_id=scene,
        scene_ref=f"s{scene}",
        sensor="sentinel-2-l2a",
        platform=platform,
        processing_baseline=baseline,
        places=PLACES,
        figures=np.array([share], dtype=np.float32),
    )


@st.composite
def histories(draw: st.DrawFn) -> list[Observed]:
    """Some scenes, most of them close together, each with one to three writes."""
    rows: list[Observed] = []
    for scene in range(draw(st.integers(1, 8))):
        minutes = draw(st.sampled_from([0, 1, 5, 9, 10, 11, 15, 20, 21, 30, 600, 1440]))
        platform = draw(st.sampled_from(["sentinel-2a", "sentinel-2b"]))
        baseline = draw(st.sampled_from(["04.00", "05.10"]))
        rows += [
            observed(
                minutes=minutes,
                share=draw(st.sampled_from([0.0, 0.3, 0.6, 0.9, 1.0])),
                scene=scene,
                write=100 * again + scene,
                platform=platform,
                baseline=baseline,
            )
            for again in range(draw(st.integers(1, 3)))
        ]
    return rows


def writes(rows: Sequence[Observed]) -> list[int]:
    return [row.write_id for row in rows]


@given(rows=histories(), data=st.data())
def test_the_order_in_which_observations_come_does_not_matter(
    rows: list[Observed], data: st.DataObject
) -> None:
    shuffled = data.draw(st.permutations(rows))
    assert writes(one_per_pass(shuffled)) == writes(one_per_pass(rows))


@given(rows=histories())
def test_of_each_scene_the_newest_write_alone_can_be_chosen(rows: list[Observed]) -> None:
    newest = {
        scene: max(r.write_id for r in rows if r.scene_id == scene)
        for scene in range(8)
        if any(r.scene_id == scene for r in rows)
    }
    assert all(row.write_id == newest[row.scene_id] for row in one_per_pass(rows))
    current = [row for row in rows if row.write_id == newest[row.scene_id]]
    assert writes(one_per_pass(rows)) == writes(one_per_pass(current))


@given(rows=histories())
def test_a_pass_has_one_look_and_whatever_was_left_out_saw_no_more(rows: list[Observed]) -> None:
    chosen = one_per_pass(rows)
    assert [row.acquired_at for row in chosen] == sorted(row.acquired_at for row in chosen)
    assert sorted(writes(chosen)) == sorted(writes(best_of_passes(rows, "ndvi")))
    newest = {row.scene_id: row for row in sorted(rows, key=lambda row: row.write_id)}
    for row in newest.values():
        rivals = [
            look
            for look in chosen
            if look.platform == row.platform and abs(look.acquired_at - row.acquired_at) <= PASS
        ]
        assert max(look.figures[0] for look in rivals) >= row.figures[0]


@given(rows=histories())
def test_platforms_never_stand_in_each_others_way(rows: list[Observed]) -> None:
    apart = [
        look
        for platform in ("sentinel-2a", "sentinel-2b")
        for look in one_per_pass(row for row in rows if row.platform == platform)
    ]
    assert sorted(writes(apart)) == sorted(writes(one_per_pass(rows)))


def test_ten_minutes_are_one_pass_and_a_moment_more_are_two() -> None:
    first = observed(minutes=0, share=0.7, scene=1, write=1)
    last = observed(minutes=10, share=0.9, scene=2, write=2)
    after = observed(minutes=10 + 1e-6, share=0.9, scene=2, write=2)
    assert writes(one_per_pass([first, last])) == [2]
    assert writes(one_per_pass([first, after])) == [1, 2]


def test_equal_shares_are_decided_by_the_newer_processing_and_then_whichever_came_first() -> None:
    older = observed(minutes=0, share=0.9, scene=9, write=9, baseline="04.00")
    newer = observed(minutes=3, share=0.9, scene=2, write=7, baseline="05.10")
    other = observed(minutes=5, share=0.9, scene=3, write=3, baseline="05.10")
    assert writes(one_per_pass([older, newer])) == [7]
    assert writes(one_per_pass([older, newer, other])) == [3]
    assert writes(one_per_pass([older, other])) == [3]


def test_a_duplicate_steps_in_when_the_chosen_one_is_gone() -> None:
    rows = [
        observed(minutes=0, share=0.7, scene=1, write=1),
        observed(minutes=5, share=0.9, scene=2, write=2),
    ]
    assert writes(one_per_pass(rows)) == [2]
    assert writes(one_per_pass(rows[:1])) == [1]


def pictures() -> st.SearchStrategy[Pictured]:
    """Scenes on both sides of a border between buckets, two buckets away, and close together."""
    around = [
        before + minutes
        for before in (0, 2 * 90 * 24 * 60, -90 * 24 * 60)
        for minutes in (-25, -12, -10, -9, -5, -1, 0, 1, 4, 9, 10, 11, 12, 20)
    ]
    return st.builds(
        Pictured,
        minutes=st.sampled_from(around),
        platform=st.sampled_from(["sentinel-2a", "sentinel-2b"]),
        layout=st.sampled_from(sorted(LAYOUTS)),
        shares=st.tuples(*[st.sampled_from([None, 0.0, 0.5, 0.6, 0.8, 1.0])] * PARCELS),
    )


@pytest.fixture(scope="module")
def sqlite(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Sessions]:
    folder = tmp_path_factory.mktemp("looks")
    engine = open_engine(f"sqlite:///{folder / 'app.sqlite'}")
    migrate(engine, lock_folder=folder)
    yield Sessions(engine)
    engine.dispose()


ASKED = [["ndvi", "ndmi"], ["ndvi"], ["ndmi"]]


def found(
    sessions: Sessions, measures: Sequence[str] | None, *, until: datetime | None
) -> NewestLooks:
    with sessions.reading() as session:
        return {
            (parcel_id, measure): (look.acquired_at, look.write_id)
            for parcel_id, looks in newest_looks(
                session, list(range(1, PARCELS + 1)), until=until, measures=measures
            )
            for measure, look in looks.items()
        }


@given(history=st.lists(pictures(), max_size=9), end=pictures())
def test_the_newest_looks_are_those_that_all_history_gives(
    sqlite: Sessions, history: list[Pictured], end: Pictured
) -> None:
    with sqlite.writing() as session:
        empty(session)
        for number, told in enumerate(history):
            post(session, told, number)
    for until in (None, end.acquired_at):
        for measures in ASKED:
            with sqlite.reading() as session:
                expected = by_hand(session, measures, until=until)
            assert found(sqlite, measures, until=until) == expected
        assert found(sqlite, None, until=until) == found(sqlite, ASKED[0], until=until)


def test_scenes_in_close_succession_over_a_border_are_cut_into_passes_from_their_first(
    sqlite: Sessions,
) -> None:
    """The passes are -5 and 4, 12 and 20; without the first they were 4 and 12, 20."""
    shares = {-5: 0.9, 4: 0.8, 12: 0.9, 20: 0.7}
    with sqlite.writing() as session:
        empty(session)
        for number, (minutes, share) in enumerate(shares.items()):
            told = Pictured(minutes=minutes, platform="a", layout="both", shares=(share,))
            post(session, told, number)
        twelve = {(1, measure): (BORDER + timedelta(minutes=12), 3) for measure in ASKED[0]}
        assert by_hand(session, ASKED[0]) == twelve
    assert found(sqlite, ASKED[0], until=None) == twelve


def test_the_newest_looks_are_the_same_on_each_database(sessions: Sessions) -> None:
    def told(minutes: int, layout: str, *shares: float | None, by: str = "a") -> Pictured:
        return Pictured(minutes=minutes, platform=by, layout=layout, shares=shares)

    history = [
        told(-130_000, "both", 1.0, 1.0, 1.0),
        told(-5, "both", 1.0, 0.7, None),
        told(4, "first", 0.8, 0.9, 0.5),
        told(12, "second", 0.9, 0.0, None),
        told(12, "first", None, 0.6, None, by="b"),
    ]
    with sessions.writing() as session:
        empty(session)
        for number, each in enumerate(history):
            post(session, each, number)
    with sessions.reading() as session:
        expected = by_hand(session, ASKED[0])
    at = {
        key: int((when - history[1].acquired_at).total_seconds() / 60) - 5
        for key, (when, _) in expected.items()
    }
    # Parcel 1: of NDVI the pass from -5 to 4 has its best look first; of NDMI the one at 12 is
    # a pass of its own. Parcel 3 was seen well only once, long before.
    assert at == {
        (1, "ndvi"): -5,
        (1, "ndmi"): 12,
        (2, "ndvi"): 12,
        (2, "ndmi"): -5,
        (3, "ndvi"): -130_000,
        (3, "ndmi"): -130_000,
    }
    assert found(sessions, ASKED[0], until=None) == expected
    assert found(sessions, None, until=None) == expected
