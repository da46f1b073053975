"""Judging that goes on from what it remembers ends where judging from the start would.

A season of passes comes in any order, is replaced and withdrawn, and people act on alerts,
with judging in between. Then all of it is judged once more from its start: nothing changes.
"""

from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, replace
from datetime import UTC, date, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st
from sqlalchemy import delete, select
from sqlalchemy.orm import Session

from service.alerts.actions import ActionKind
from service.jobs.assess import judge_wanted
from service.jobs.resources import HeldBaselines, Resources
from service.settings import Settings
from service.store.alert_tables import (
    AlertChange,
    AlertRow,
    ExplainedRow,
    FoldState,
    Judgement,
    NoticeRow,
    SeasonFold,
)
from service.store.alerts import act_on
from service.store.diary import add_entry
from service.store.folds import NEWEST_KEPT
from service.store.judging import (
    want_judging_of,
    want_judging_of_diary,
    want_judging_of_everything,
    want_judging_of_scenes,
)
from service.store.observations import Measured, record
from service.store.scenes import SceneState, retire_figures
from service.store.sessions import Sessions, migrate, open_engine
from service.store.tables import Base, Boundary, CropSeason, Parcel, Scene
from service.tiles.archive import Archive
from service.tiles.plans import Plans
from tests.quiet_seasons import PARCELS, PASSES, PAST, RUNNING, at_pass, spectra
from tests.simulated_seasons import MEASURES, measures_of

RECORDED = datetime(2024, 7, 1, tzinfo=UTC)
STARTS = ("10-01", "04-01")
PLATFORMS = ("low", "high")
Told = Mapping[str, Any]


@dataclass(frozen=True, slots=True, kw_only=True)
class Deed:
    """Something that happens: a pass is sent, replaced or withdrawn, or a person acts."""

    do: str
    number: int
    platform: str
    minutes: int
    is_quiet: bool
    is_judged_then: bool


class Story:
    """A land whose past is known, and what happens on it."""

    def __init__(self, work: Resources) -> None:
        self.work = work
        self.scenes: dict[tuple[int, str], int] = {}
        self.sent = 0

    def begin(self) -> None:
        """Leave nothing but parcels, crops and the finished seasons."""
        with self.work.sessions.writing() as session:
            for table in reversed(Base.metadata.sorted_tables):
                session.execute(delete(table))
            _settle(session)
            for year in PAST[1:]:
                for number in range(0, PASSES, 2):
                    self._send(session, at_pass(number, year), "past", year, number, quiet=True)

    def tell(self, deed: Deed) -> None:
        """Let something happen, and perhaps judge."""
        with self.work.sessions.writing() as session:
            getattr(self, f"_{deed.do}")(session, deed)
        if deed.is_judged_then:
            judge_wanted(self.work)

    def _post(self, session: Session, deed: Deed) -> None:
        key = deed.number, deed.platform
        if key in self.scenes:
            known = session.get_one(Scene, self.scenes[key])
            if known.state != SceneState.WITHDRAWN:
                self._send_again(session, known, deed)
                return
        at = at_pass(deed.number) + timedelta(minutes=deed.minutes)
        self.scenes[key] = self._send(
            session, at, deed.platform, RUNNING, deed.number, quiet=deed.is_quiet
        )

    def _replace(self, session: Session, deed: Deed) -> None:
        scene = self._scene(session, deed)
        if scene is not None and scene.state != SceneState.WITHDRAWN:
            self._send_again(session, scene, deed)

    def _send_again(self, session: Session, scene: Scene, deed: Deed) -> None:
        scene.generation += 1
        self.sent += 1
        scene.digest = f"{self.sent:064d}"
        session.flush()
        record(session, scene, _measured(RUNNING, deed.number, deed.is_quiet), at=RECORDED)
        want_judging_of_scenes(session, [scene], STARTS)

    def _withdraw(self, session: Session, deed: Deed) -> None:
        scene = self._scene(session, deed)
        if scene is not None and scene.state != SceneState.WITHDRAWN:
            retire_figures(session, scene, SceneState.WITHDRAWN, at=RECORDED)
            want_judging_of_scenes(session, [scene], STARTS)

    def _act(self, session: Session, deed: Deed) -> None:
        """Close what is open, or take a closing back."""
        rows = session.scalars(select(AlertRow).order_by(AlertRow.id)).all()
        acting = [row for row in rows if row.state in ("open", "acknowledged", "closed")]
        if not acting:
            return
        row = acting[deed.number % len(acting)]
        kind = ActionKind.REOPEN if row.state == "closed" else ActionKind.CLOSE
        verdict = "false_alarm" if kind is ActionKind.CLOSE else None
        act_on(session, row, kind, who="Quill", verdict=verdict, note=None, at=RECORDED)
        want_judging_of(session, row)

    def _note(self, session: Session, deed: Deed) -> None:
        parcel = session.get_one(Parcel, deed.number % len(PARCELS) + 1)
        day = at_pass(deed.number).date()
        add_entry(
            session,
            parcel,
            kind="mowing",
            first_on=day,
            last_on=day,
            note=None,
            who="Quill",
            at=RECORDED,
        )
        want_judging_of_diary(session, parcel, day, STARTS)

    def _scene(self, session: Session, deed: Deed) -> Scene | None:
        known = list(self.scenes.values())
        return session.get(Scene, known[deed.number % len(known)]) if known else None

    def _send(
        self, session: Session, at: datetime, platform: str, year: int, number: int, *, quiet: bool
    ) -> int:
        self.sent += 1
        scene = Scene(
            ref=f"s{self.sent}",
            kind="measured",
            is_judged=year == RUNNING,
            sensor="archive-sensor",
            platform=platform,
            acquired_at=at,
            processing_baseline=None,
            details={},
            digest=f"{self.sent:064d}",
            generation=1,
            state="running",
            progress=0.0,
            received_at=RECORDED,
            changed_at=RECORDED,
        )
        session.add(scene)
        session.flush()
        record(session, scene, _measured(year, number, quiet), at=RECORDED)
        want_judging_of_scenes(session, [scene], STARTS)
        return scene.id

    def told(self) -> Told:
        """Return what stands, but for when it was written."""
        with self.work.sessions.reading() as session:
            judgements = session.scalars(select(Judgement)).all()
            return {
                "judgements": {
                    (j.parcel_id, j.acquired_at): (
                        j.crop,
                        j.score,
                        j.p,
                        j.unjudged,
                        j.figures.tobytes(),
                    )
                    for j in judgements
                },
                "alerts": {
                    a.id: (a.state, a.season, a.verdict, a.closed_at, a.details)
                    for a in session.scalars(select(AlertRow))
                    if a.state != "retracted"
                },
                "changes": {
                    (c.alert_id, c.number): (c.kind, c.what)
                    for c in session.scalars(select(AlertChange))
                },
                "notices": {
                    n.id: (n.state, n.shift, n.closed_at)
                    for n in session.scalars(select(NoticeRow))
                },
                "explained": {e.alert_id: e.because for e in session.scalars(select(ExplainedRow))},
            }

    def remembered(self) -> list[int]:
        """Return after how many passes judging may go on."""
        with self.work.sessions.reading() as session:
            return sorted(session.scalars(select(FoldState.number)))

    def is_settled(self) -> bool:
        """Whether nothing is left to judge."""
        with self.work.sessions.reading() as session:
            return all(row.wanted == row.done for row in session.scalars(select(SeasonFold)))


def _settle(session: Session) -> None:
    for at, ref in enumerate(PARCELS):
        west, south = 15 + 0.01 * at, 50.0
        outline = shapely.box(west, south, west + 0.005, south + 0.005)
        session.add(
            Parcel(
                id=at + 1,
                ref=ref,
                name=None,
                holding_id=None,
                created_at=RECORDED,
                retired_at=None,
                revision=0,
            )
        )
        session.flush()
        session.add(
            Boundary(
                parcel_id=at + 1,
                valid_from=None,
                valid_to=None,
                recorded_at=RECORDED,
                closed_at=None,
                wkb=outline.wkb,
                area_ha=1.0,
                **dict(zip(("west", "south", "east", "north"), outline.bounds, strict=True)),
            )
        )
        session.add_all(
            CropSeason(
                parcel_id=at + 1,
                crop=ref.partition("-")[0],
                from_on=date(year - 1, 10, 1),
                until_on=date(year, 9, 30),
                sown_on=None,
                harvested_on=None,
            )
            for year in (*PAST, RUNNING)
        )
    session.flush()


def _measured(year: int, number: int, is_quiet: bool) -> Measured:  # noqa: FBT001 - a fact told
    bands = spectra(number, year, **({"events": ()} if is_quiet else {}))
    means = measures_of(bands)
    columns = ["clear.valid_share", "clear.water", *(f"{measure}.mean" for measure in MEASURES)]
    shares = np.ones((len(PARCELS), 1)), np.zeros((len(PARCELS), 1))
    ids = list(range(1, len(PARCELS) + 1))
    return Measured(
        parcel_ids=ids,
        boundary_ids=ids,
        columns=columns,
        figures=np.hstack([*shares, means]).astype(np.float32),
        recipe={"rule": "clear"},
        scaling={},
    )


def deeds() -> st.SearchStrategy[Deed]:
    return st.builds(
        Deed,
        do=st.sampled_from(["post"] * 8 + ["replace", "withdraw", "act", "note"]),
        number=st.integers(0, PASSES - 1),
        platform=st.sampled_from(PLATFORMS),
        # Passes of the two platforms interlock.
        minutes=st.sampled_from([0, 0, 4, 8, 30]),
        is_quiet=st.sampled_from([False, False, False, True]),
        is_judged_then=st.booleans(),
    )


def hold(work: Resources, done: list[Deed]) -> tuple[Told, list[int]]:
    """Tell a story, judge it from the start, and hold one against the other.

    Returns what stands, and after how many passes judging could have gone on.
    """
    # Another story's baselines have the same numbers.
    story = Story(replace(work, baselines=HeldBaselines()))
    story.begin()
    for deed in done:
        story.tell(deed)
    work = story.work
    judge_wanted(work)
    assert story.is_settled()
    resumed, remembered = story.told(), story.remembered()
    with work.sessions.writing() as session:
        want_judging_of_everything(session)
    judge_wanted(work)
    whole = story.told()
    for what, said in whole.items():
        assert resumed[what] == said, what
    return whole, remembered


@contextmanager
def working(engine_url: str, folder: Path) -> Iterator[Resources]:
    engine = open_engine(engine_url)
    migrate(engine, lock_folder=folder)
    yield Resources(
        settings=Settings(data=folder, disk_reserve_bytes=0),
        sessions=Sessions(engine),
        archive=Archive(folder),
        plans=Plans(folder / "plans", limit_bytes=0),
    )
    engine.dispose()


@pytest.fixture(scope="module")
def sqlite(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Resources]:
    folder = tmp_path_factory.mktemp("resumed")
    with working(f"sqlite:///{folder / 'app.sqlite'}", folder) as work:
        yield work


@settings(max_examples=12)
@given(done=st.lists(deeds(), min_size=6, max_size=28))
def test_judging_that_goes_on_ends_where_judging_from_the_start_would(
    sqlite: Resources, done: list[Deed]
) -> None:
    hold(sqlite, done)


def test_a_season_in_disorder_raises_the_alerts_of_one_in_order(settings: Settings) -> None:
    def posted(number: int, *, quiet: bool = False, judged: bool = True) -> Deed:
        return Deed(
            do="post",
            number=number,
            platform="low",
            minutes=0,
            is_quiet=quiet,
            is_judged_then=judged,
        )

    def deed(do: str, number: int) -> Deed:
        return Deed(
            do=do, number=number, platform="low", minutes=0, is_quiet=False, is_judged_then=True
        )

    late = [0, 1, 2, 4, 3, 5, 7, 6, 8, 9, 12, 11, 10, 13]
    wrong = [posted(number, quiet=number == 7) for number in late]
    with working(settings.app_url, settings.data) as work:
        in_order, remembered = hold(work, [posted(number) for number in range(PASSES)])
        in_disorder, _ = hold(work, [*wrong, deed("withdraw", late.index(7)), posted(7)])
    assert len(in_order["alerts"]) >= 4
    assert {a: told[0] for a, told in in_order["alerts"].items()} == {
        a: told[0] for a, told in in_disorder["alerts"].items()
    }
    assert remembered == [8, *range(PASSES - NEWEST_KEPT + 1, PASSES + 1)]


def test_two_sources_at_the_very_same_instant_are_judged(sqlite: Resources) -> None:
    first, second = (
        Deed(
            do="post",
            number=7,
            platform=platform,
            minutes=0,
            is_quiet=False,
            is_judged_then=True,
        )
        for platform in PLATFORMS
    )
    both, _ = hold(sqlite, [first, second])
    assert len(both["judgements"]) == len(PARCELS)
    alone, _ = hold(sqlite, [first])
    assert both["judgements"].keys() == alone["judgements"].keys()
