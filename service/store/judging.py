"""What judging reads: the axes of parcels, their looks by pass, what a person did."""

import hashlib
import io
import json
import zlib
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, date, datetime, time, timedelta
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import func, select
from sqlalchemy.orm import Session

from service.alerts.actions import Action, ActionKind
from service.alerts.diary import DAYS_BEFORE
from service.assess import Prepared, State
from service.seasons.axis import SeasonStart, season_ending_in, season_holding
from service.seasons.baseline import METHOD
from service.store.alert_tables import AlertChange, AlertRow, BaselineRow, SeasonFold
from service.store.folds import want, want_known, want_later
from service.store.looks import PASS_GAP
from service.store.tables import (
    Boundary,
    Holding,
    Observation,
    Parcel,
    Scene,
    Write,
)

SPOILED: Final = ("confirmed", "bad_data")
"""Verdicts that take an alert's looks out of the baselines; no verdict does so too."""
REAL: Final = ("confirmed", "expected")
"""Verdicts by which a replayed alarm is no false one."""


Spell = tuple[int, datetime, datetime]
"""A parcel, and first and last instant of some of its looks."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Axis:
    """A season axis: when its crop years begin, and the parcels on it."""

    id: str
    start: SeasonStart
    refs: Mapping[int, str]

    def season_of(self, instant: datetime) -> int:
        """Return the season that holds an instant, by the year in which it ends."""
        return season_holding(instant.date(), self.start)[1].year

    def begins_at(self, season: int) -> datetime:
        """Return the first moment of a season."""
        return _midnight(season_ending_in(season, self.start)[0])

    def ends_at(self, season: int) -> datetime:
        """Return the first moment after a season."""
        return _midnight(season_ending_in(season, self.start)[1] + timedelta(days=1))

    def day_of(self, instant: datetime) -> int:
        """Return the day of season from 0."""
        return (instant.date() - season_holding(instant.date(), self.start)[0]).days


def _midnight(day: date) -> datetime:
    return datetime.combine(day, time(), tzinfo=UTC)


def axes(session: Session, starts: tuple[str, str]) -> list[Axis]:
    """Return the season axes that have parcels; `starts` are north and south of the equator.

    A holding that has a start of its own is on the axis of that day.
    """
    latitude = func.max(Boundary.south + Boundary.north)
    query = (
        select(Parcel.id, Parcel.ref, latitude, Holding.season_start)
        .join(Boundary, Boundary.parcel_id == Parcel.id)
        .outerjoin(Holding, Holding.id == Parcel.holding_id)
        .where(Boundary.closed_at.is_(None))
        .group_by(Parcel.id, Parcel.ref, Holding.season_start)
    )
    refs: dict[str, dict[int, str]] = {}
    for parcel_id, ref, twice_latitude, own in session.execute(query):
        start = own or (starts[0] if twice_latitude >= 0 else starts[1])
        refs.setdefault(start, {})[parcel_id] = ref
    return [
        Axis(id=start, start=SeasonStart.parse(start), refs=of_axis)
        for start, of_axis in sorted(refs.items())
    ]


def want_judging(session: Session, axis: Axis, season: int) -> None:
    """Promise that all looks of a season are judged, and those of later seasons that were."""
    want(session, axis.id, season)


def want_judging_of(session: Session, alert: AlertRow) -> None:
    """Promise that what a person did with an alert is taken up, at the last look it rests on."""
    at = alert.last_observed_at
    season = season_holding(at.date(), SeasonStart.parse(alert.axis))[1].year
    want_known(session, alert.axis, season, since=at)


def want_judging_of_scenes(
    session: Session, scenes: Iterable[Scene], starts: tuple[str, str]
) -> None:
    """Promise that the looks which scenes touch are judged, and what rests on them.

    A scene that only shapes baselines makes later seasons be judged anew, not its own.
    """
    known = axes(session, starts)
    touched: dict[tuple[str, int], list[Scene]] = {}
    for scene in scenes:
        for axis in axes_of_scene(session, scene, known):
            touched.setdefault((axis.id, axis.season_of(scene.acquired_at)), []).append(scene)
    for (axis_id, season), some in sorted(touched.items(), key=lambda item: item[0]):
        judged = [scene.acquired_at for scene in some if scene.is_judged]
        if judged:
            # Another scene of the pass may have been the look until now.
            want(session, axis_id, season, since=min(judged) - PASS_GAP)
        else:
            want_later(session, axis_id, season)


def want_judging_of_crops(session: Session, days: Iterable[date], starts: tuple[str, str]) -> None:
    """Promise judging anew from the earliest of some days on: labels have changed."""
    first = min(days, default=None)
    if first is None:
        return
    for axis in axes(session, starts):
        want_known(session, axis.id, season_holding(first, axis.start)[1].year)


def want_judging_of_diary(
    session: Session, parcel: Parcel, day: date, starts: tuple[str, str]
) -> None:
    """Promise judging anew from a day on: what is known of a parcel has changed."""
    since = _midnight(day - timedelta(days=DAYS_BEFORE))
    for axis in axes(session, starts):
        if parcel.id in axis.refs:
            want_known(session, axis.id, axis.season_of(since), since=since)


def want_judging_of_rules(session: Session) -> None:
    """Promise that the newest season of each axis is judged anew, by other rules."""
    newest = select(SeasonFold.axis, func.max(SeasonFold.season)).group_by(SeasonFold.axis)
    for axis_id, season in session.execute(newest).all():
        want_known(session, axis_id, season)


def want_judging_of_everything(session: Session) -> None:
    """Promise that all that was ever judged is judged anew."""
    oldest = select(SeasonFold.axis, func.min(SeasonFold.season)).group_by(SeasonFold.axis)
    for axis_id, season in session.execute(oldest).all():
        want_known(session, axis_id, season)


def wanted_folds(session: Session) -> Sequence[SeasonFold]:
    """Return the folds that are promised, in order of time."""
    query = select(SeasonFold).where(SeasonFold.wanted > SeasonFold.done)
    return session.scalars(query.order_by(SeasonFold.season, SeasonFold.axis)).all()


def is_judging_wanted(session: Session) -> bool:
    """Whether any judging is promised."""
    query = select(SeasonFold.season).where(SeasonFold.wanted > SeasonFold.done)
    return session.scalar(query.limit(1)) is not None


def axes_of_scene(session: Session, scene: Scene, known: Sequence[Axis]) -> list[Axis]:
    """Return the axes of the parcels that a scene was ever measured for."""
    query = (
        select(Observation.parcel_id)
        .join(Write, Write.id == Observation.write_id)
        .where(Write.scene_id == scene.id)
        .distinct()
    )
    parcels = set(session.scalars(query))
    return [axis for axis in known if not parcels.isdisjoint(axis.refs)]


@dataclass(frozen=True, slots=True, kw_only=True)
class PastAlert:
    """An alert as far as it matters for the baselines of later seasons.

    Its looks are those of the parcel from `first` to `last`.
    """

    id: str
    parcel_id: int
    opened_at: datetime
    first: datetime
    last: datetime
    verdict: str | None

    @property
    def is_spoiled(self) -> bool:
        """Whether its looks must not shape a baseline."""
        return self.verdict is None or self.verdict in SPOILED

    @property
    def is_real(self) -> bool:
        """Whether a person said that its looks had departed indeed."""
        return self.verdict in REAL

    @property
    def spell(self) -> Spell:
        """Its parcel, and the first and the last of its looks."""
        return self.parcel_id, self.first, self.last


def past_alerts(session: Session, axis: Axis, until: datetime) -> list[PastAlert]:
    """Return the alerts of parcels whose first departed look was before an instant."""
    query = select(AlertRow).where(
        AlertRow.state != "retracted", AlertRow.first_departure_at < until
    )
    return [
        PastAlert(
            id=row.id,
            parcel_id=row.parcel_id,
            opened_at=row.opened_at,
            first=row.first_departure_at,
            last=min(row.closed_at or until, until),
            verdict=row.verdict,
        )
        for row in session.scalars(query.order_by(AlertRow.id))
        if row.parcel_id in axis.refs
    ]


def history_key(
    session: Session,
    axis: Axis,
    season: int,
    alerts: Iterable[PastAlert],
    beside: Sequence[object],
) -> str:
    """Return a hash of what a season's baselines are fitted from.

    Crops are not in it: where labels change, the baselines are outdated there and then
    (`folds.want_known`). `beside` is what else counts, plain members.
    """
    begin = axis.begins_at(season)
    writes = session.execute(
        select(func.count(), func.max(Write.id), func.count(Write.closed_at))
        .join(Scene, Scene.id == Write.scene_id)
        .where(Scene.acquired_at < begin)
    ).one()
    spells = [
        (each.parcel_id, each.first.isoformat(), each.last.isoformat(), each.is_spoiled)
        for each in alerts
        if each.is_spoiled or each.is_real
    ]
    told = [METHOD, *beside, axis.id, season, list(writes), sorted(spells)]
    return hashlib.sha256(json.dumps(told).encode()).hexdigest()


def find_baselines(session: Session, axis_id: str, season: int, history: str) -> int | None:
    """Return the number of the baselines in use for a season, if fitted from a history."""
    query = select(BaselineRow.id, BaselineRow.history).where(
        BaselineRow.axis == axis_id, BaselineRow.season == season
    )
    row = session.execute(query.order_by(BaselineRow.id.desc()).limit(1)).first()
    return row.id if row is not None and row.history == history else None


def find_newest_baselines(
    session: Session, axis_id: str, *, as_of: datetime | None = None
) -> BaselineRow | None:
    """Return the baselines in use, now or then, for the newest season that was judged."""
    query = select(BaselineRow).where(BaselineRow.axis == axis_id)
    if as_of is not None:
        query = query.where(BaselineRow.fitted_at <= as_of)
    newest = query.order_by(BaselineRow.season.desc(), BaselineRow.id.desc())
    return session.scalar(newest.limit(1))


def packed(prepared: Prepared) -> bytes:
    """Return baselines and what replaying the past says as the bytes of a compressed npz file."""
    return _npz(prepared.to_arrays())


def unpacked(arrays: bytes) -> Prepared:
    """Return what `packed` wrote."""
    return Prepared.from_arrays(_arrays(arrays))


def squeezed(states: Mapping[str, State]) -> bytes:
    """Return the states of folds, by rule, as the bytes of a compressed npz file."""
    named = {"rules": np.array(list(states), dtype=np.str_)}
    for at, state in enumerate(states.values()):
        named |= {f"{at}:{name}": array for name, array in state.to_arrays().items()}
    return _npz(named)


def unsqueezed(states: bytes) -> dict[str, State]:
    """Return the states by rule that `squeezed` wrote."""
    arrays = _arrays(states)
    found: dict[int, dict[str, NDArray[Any]]] = {}
    for name, array in arrays.items():
        at, _, member = name.partition(":")
        if member:
            found.setdefault(int(at), {})[member] = array
    rules = arrays["rules"].tolist()
    return {rule: State.from_arrays(found[at]) for at, rule in enumerate(rules)}


def _npz(arrays: Mapping[str, NDArray[Any]]) -> bytes:
    file = io.BytesIO()
    np.savez(file, **arrays)  # type: ignore[arg-type]
    # What little more a higher level saves would take several times as long.
    return zlib.compress(file.getbuffer(), 1)


def _arrays(npz: bytes) -> dict[str, NDArray[Any]]:
    with np.load(io.BytesIO(zlib.decompress(npz)), allow_pickle=False) as file:
        return dict(file)


def actions_in(
    session: Session, axis: Axis, season: int, *, since: datetime | None = None
) -> list[Action]:
    """Return what people did with alerts in a season, in the order in which they did it.

    With `since` only at looks from then on.
    """
    query = (
        select(AlertChange, AlertRow)
        .join(AlertRow, AlertRow.id == AlertChange.alert_id)
        .where(
            AlertRow.axis == axis.id,
            AlertChange.who.is_not(None),
            AlertChange.look_at >= (since or axis.begins_at(season)),
            AlertChange.look_at < axis.ends_at(season),
        )
        .order_by(AlertChange.recorded_at, AlertChange.alert_id, AlertChange.number)
    )
    return [
        Action(
            kind=ActionKind(change.kind),
            parcel=axis.refs[row.parcel_id],
            rule=row.rule,
            at=change.look_at,
            verdict=change.verdict,
        )
        for change, row in session.execute(query)
    ]
