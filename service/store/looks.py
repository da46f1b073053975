"""Reading observations: one figure per scene, one look per pass.

Here is the only place that unpacks an observation.
"""

from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from datetime import UTC, datetime, timedelta
from itertools import groupby
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Select, and_, func, or_, select
from sqlalchemy.orm import Session

from service.store.batches import in_batches
from service.store.tables import Layout, Observation, Scene, Write

PASS_GAP: Final = timedelta(minutes=10)
"""Scenes of one platform this close together are one pass."""
LOOK_SHARE: Final = 0.6
"""A pass is a look at a parcel when at least this share of it was usable."""
Rows = Select[*tuple[Any, ...]]
_BUCKET: Final = timedelta(days=90)
_EPOCH: Final = datetime(1970, 1, 1, tzinfo=UTC)


def bucket_of(acquired_at: datetime) -> int:
    """Return the stretch of 90 days since 1970 that holds an instant."""
    return (acquired_at - _EPOCH) // _BUCKET


@dataclass(frozen=True, slots=True, kw_only=True)
class Places:
    """Where each figure stands in the observations of one layout.

    `rule` is the quality rule of the look, `own_rules` those of measures that are not read
    by it.
    """

    by_column: Mapping[str, int]
    rule: str
    harmonised: bool
    own_rules: Mapping[str, str] = field(default_factory=dict)

    def rule_of(self, measure: str) -> str:
        """Return the quality rule that a measure was read by."""
        return self.own_rules.get(measure, self.rule)

    def has(self, measure: str) -> bool:
        """Whether observations of this layout hold a measure."""
        return f"{measure}.mean" in self.by_column

    @property
    def measures(self) -> list[str]:
        """The measures that observations of this layout hold."""
        means = (column for column in self.by_column if column.endswith(".mean"))
        return [column.removesuffix(".mean") for column in means]


@dataclass(frozen=True, slots=True, kw_only=True)
class Observed:
    """One observation with what its write tells of it; figures are NaN where unknown."""

    parcel_id: int
    acquired_at: datetime
    write_id: int
    scene_id: int
    scene_ref: str
    sensor: str
    platform: str
    processing_baseline: str
    places: Places
    figures: NDArray[np.float32]

    def figure(self, column: str) -> float | None:
        """Return one figure, None where unknown; the stored float32 in its shortest decimals."""
        place = self.places.by_column.get(column)
        if place is None:
            return None
        value = self.figures[place]
        return None if np.isnan(value) else float(str(value))

    def of_look(self, figure: str) -> float:
        """Return a figure of the look itself, such as its valid share."""
        return self.figure(f"{self.places.rule}.{figure}") or 0.0

    def share_of(self, measure: str | None) -> float:
        """Return the valid share by the rule of a measure, by that of the look without one."""
        if measure is None:
            return self.of_look("valid_share")
        return self.figure(f"{self.places.rule_of(measure)}.valid_share") or 0.0

    def of_measure(self, measure: str, stat: str) -> float | None:
        """Return a statistic of a measure; a band's pixels are the look's."""
        if stat == "valid_share":
            return self.share_of(measure)
        if stat == "pixels" and f"{measure}.pixels" not in self.places.by_column:
            return self.figure(f"{self.places.rule}.pixels")
        return self.figure(f"{measure}.{stat}")


def observations(
    session: Session,
    parcel_ids: Sequence[int],
    *,
    since: datetime | None = None,
    until: datetime | None = None,
    as_of: datetime | None = None,
    sensor: str | None = None,
    is_judged: bool | None = None,
) -> Iterator[Observed]:
    """Yield observations by parcel and acquisition; `since` and `until` are included.

    Those of current writes, or of the writes that were current at `as_of`.
    """
    buckets = _buckets(session, since, until)
    layouts: dict[int, Places] = {}
    for some in in_batches(parcel_ids):
        query = _query().where(
            Observation.bucket.in_(buckets), Observation.parcel_id.in_(some), _known(as_of)
        )
        if since is not None:
            query = query.where(Observation.acquired_at >= since)
        if until is not None:
            query = query.where(Observation.acquired_at <= until)
        if sensor is not None:
            query = query.where(Scene.sensor == sensor)
        if is_judged is not None:
            query = query.where(Scene.is_judged == is_judged)
        query = query.order_by(Observation.parcel_id, Observation.acquired_at, Observation.write_id)
        yield from _unpacked(session, query, layouts)


def observations_of_scene(session: Session, scene_id: int) -> Iterator[Observed]:
    """Yield the newest current observation of each parcel in a scene, by parcel."""
    rows = all_observations_of_scene(session, scene_id)
    for _, of_parcel in groupby(rows, key=lambda row: row.parcel_id):
        yield list(of_parcel)[-1]


def all_observations_of_scene(session: Session, scene_id: int) -> Iterator[Observed]:
    """Yield the current observations of a scene, by parcel and then in order of writing."""
    query = _query().where(Write.scene_id == scene_id, Write.closed_at.is_(None))
    query = query.order_by(Observation.parcel_id, Observation.write_id)
    return _unpacked(session, query, {})


def _query() -> Rows:
    query: Rows = (
        select(
            Observation.parcel_id,
            Observation.acquired_at,
            Observation.write_id,
            Observation.figures,
            Write.layout_id,
            Write.scene_id,
            Scene.ref,
            Scene.sensor,
            Scene.platform,
            Scene.processing_baseline,
        )
        .join(Write, Write.id == Observation.write_id)
        .join(Scene, Scene.id == Write.scene_id)
    )
    return query


def _known(as_of: datetime | None) -> Any:
    if as_of is None:
        return Write.closed_at.is_(None)
    return and_(Write.recorded_at <= as_of, or_(Write.closed_at.is_(None), Write.closed_at > as_of))


def _buckets(session: Session, since: datetime | None, until: datetime | None) -> list[int]:
    """Return the buckets that can hold anything: the key begins with them."""
    first = session.scalar(select(func.min(Scene.acquired_at)))
    last = session.scalar(select(func.max(Scene.acquired_at)))
    if first is None or last is None:
        return []
    begin = max(first, since) if since else first
    end = min(last, until) if until else last
    return list(range(bucket_of(begin), bucket_of(end) + 1))


def _unpacked(session: Session, query: Rows, layouts: dict[int, Places]) -> Iterator[Observed]:
    for row in session.execute(query.execution_options(yield_per=2_000)):
        if row.layout_id not in layouts:
            layouts[row.layout_id] = places_of(session.get_one(Layout, row.layout_id))
        yield Observed(
            parcel_id=row.parcel_id,
            acquired_at=row.acquired_at,
            write_id=row.write_id,
            scene_id=row.scene_id,
            scene_ref=row.ref,
            sensor=row.sensor,
            platform=row.platform or row.sensor,
            processing_baseline=row.processing_baseline or "",
            places=layouts[row.layout_id],
            figures=row.figures,
        )


def places_of(layout: Layout) -> Places:
    """Return where each figure stands in observations of a layout."""
    return Places(
        by_column={column: place for place, column in enumerate(layout.columns)},
        rule=layout.recipe["rule"],
        harmonised=bool(layout.recipe.get("harmonised")),
        own_rules=layout.recipe.get("rules", {}),
    )


def one_per_pass(rows: Iterable[Observed], measure: str | None = None) -> list[Observed]:
    """Choose among one parcel's observations, in order of acquisition.

    Of each scene the newest write; of each pass (scenes of one platform within 10 minutes of
    the first) the one with the larger valid share (by the rule of a measure, if one is
    named), then the newer processing, then, whichever came first, by ref. The others are
    duplicates, which step in when the chosen one is withdrawn.
    """
    of_scene: dict[int, Observed] = {}
    for row in rows:
        kept = of_scene.get(row.scene_id)
        if kept is None or row.write_id > kept.write_id:
            of_scene[row.scene_id] = row
    chosen: list[Observed] = []
    by_platform = sorted(of_scene.values(), key=lambda row: (row.platform, row.acquired_at))
    for _, of_platform in groupby(by_platform, key=lambda row: row.platform):
        chosen += [
            max(one_pass, key=lambda row: _worth(row, measure)) for one_pass in _passes(of_platform)
        ]
    return sorted(chosen, key=lambda row: (row.acquired_at, row.write_id))


def _passes(rows: Iterable[Observed]) -> list[list[Observed]]:
    passes: list[list[Observed]] = []
    for row in rows:
        if passes and row.acquired_at - passes[-1][0].acquired_at <= PASS_GAP:
            passes[-1].append(row)
        else:
            passes.append([row])
    return passes


def _worth(row: Observed, measure: str | None) -> tuple[float, str, str]:
    return row.share_of(measure), row.processing_baseline, row.scene_ref


def newest_looks(
    session: Session,
    parcel_ids: Sequence[int],
    *,
    until: datetime | None = None,
    measures: Sequence[str] | None = None,
) -> Iterator[tuple[int, dict[str, Observed]]]:
    """Yield each parcel with its newest look by measure, on or before `until`.

    Without `measures` all that the parcel has. History is read backwards, a bucket at a time,
    until nothing is missing.
    """
    missing = set(parcel_ids)
    seen: dict[int, list[Observed]] = {parcel_id: [] for parcel_id in parcel_ids}
    oldest = _oldest(session, measures)
    for bucket in reversed(_buckets(session, None, until)):
        if not missing:
            return
        begin = _EPOCH + bucket * _BUCKET
        end = begin + _BUCKET - timedelta.resolution
        rows = observations(
            session,
            sorted(missing),
            since=begin,
            until=end if until is None else min(end, until),
        )
        older = {measure for measure, since in oldest.items() if since < begin}
        for parcel_id, of_parcel in groupby(rows, key=lambda row: row.parcel_id):
            seen[parcel_id] = [*of_parcel, *seen[parcel_id]]
            found = _newest(seen[parcel_id], measures)
            if older <= found.keys() and _is_settled(found, seen[parcel_id], begin):
                missing.discard(parcel_id)
                del seen[parcel_id]
                if found:
                    yield parcel_id, found
    for parcel_id in sorted(missing):
        if found := _newest(seen[parcel_id], measures):
            yield parcel_id, found


def _oldest(session: Session, measures: Sequence[str] | None) -> dict[str, datetime]:
    """Return since when there are figures by measure, of all parcels together."""
    query = (
        select(Write.layout_id, func.min(Scene.acquired_at, type_=Scene.acquired_at.type))
        .join(Scene, Scene.id == Write.scene_id)
        .where(Write.closed_at.is_(None))
        .group_by(Write.layout_id)
    )
    oldest: dict[str, datetime] = {}
    for layout_id, since in session.execute(query):
        for measure in places_of(session.get_one(Layout, layout_id)).measures:
            oldest[measure] = min(since, oldest.get(measure, since))
    return oldest if measures is None else {m: oldest[m] for m in measures if m in oldest}


def _is_settled(found: Mapping[str, Observed], rows: Sequence[Observed], begin: datetime) -> bool:
    """Whether no history before `begin` can belong to the passes of these looks.

    Passes are counted from the first scene that has none shortly before it, so a row of
    scenes that follow each other closely hangs together.
    """
    looks = {look.write_id: look for look in found.values()}
    return all(_begins(look, rows) >= begin + PASS_GAP for look in looks.values())


def _begins(look: Observed, rows: Sequence[Observed]) -> datetime:
    begun = look.acquired_at
    for row in reversed(rows):
        if row.acquired_at < begun - PASS_GAP:
            break
        if row.platform == look.platform and row.acquired_at < begun:
            begun = row.acquired_at
    return begun


def _newest(rows: Sequence[Observed], measures: Sequence[str] | None) -> dict[str, Observed]:
    """Return the newest look by measure among one parcel's observations."""
    layouts = {id(row.places): row.places for row in rows}
    found: dict[str, Observed] = {}
    # Measures that the same layouts hold, read by the same rules, have the same look.
    chosen: dict[frozenset[tuple[int, str]], Observed | None] = {}
    for measure in measures if measures is not None else _measures(layouts.values()):
        fitting = frozenset(
            (key, places.rule_of(measure)) for key, places in layouts.items() if places.has(measure)
        )
        if fitting not in chosen:
            looks = one_per_pass((row for row in rows if row.places.has(measure)), measure)
            seen = [row for row in looks if row.share_of(measure) >= LOOK_SHARE]
            chosen[fitting] = seen[-1] if seen else None
        if (look := chosen[fitting]) is not None:
            found[measure] = look
    return found


def _measures(layouts: Iterable[Places]) -> list[str]:
    return sorted({measure for places in layouts for measure in places.measures})
