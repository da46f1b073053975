"""Histories of scenes written through the store, and what follows from them by hand.

A history is told in minutes from a border between two buckets of 90 days, so that passes
straddle it.
"""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from itertools import groupby

import numpy as np
from sqlalchemy import delete, select
from sqlalchemy.orm import Session

from service.store.looks import Observed, observations
from service.store.observations import Measured, record
from service.store.tables import Base, Latest, Parcel, Scene

BORDER = datetime(1970, 1, 1, tzinfo=UTC) + 219 * timedelta(days=90)
PASS = timedelta(minutes=10)
RECORDED = datetime(2024, 7, 1, tzinfo=UTC)
PARCELS = 3
LAYOUTS: Mapping[str, tuple[str, ...]] = {
    "both": ("ndvi", "ndmi"),
    "first": ("ndvi",),
    "second": ("ndmi",),
    "apart": ("ndvi", "ndmi"),
}
APART = "apart"
"""The layout in which NDMI was read by a quality rule of its own."""
OTHER_SHARES: Mapping[float, float] = {0.0: 0.8, 0.5: 1.0, 0.6: 0.5, 0.7: 0.0, 0.8: 0.9, 1.0: 0.6}
"""The valid share by the other rule, by that of the look; of other shares the same."""
NewestLooks = dict[tuple[int, str], tuple[datetime, int]]
"""Instant and write of the newest look, by parcel and measure."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Pictured:
    """A scene as told: when, by what, which measures, and which share of each parcel it saw.

    A share of None: the parcel is not in its footprint.
    """

    minutes: int
    platform: str
    layout: str
    shares: tuple[float | None, ...]

    @property
    def acquired_at(self) -> datetime:
        return BORDER + timedelta(minutes=self.minutes)


def empty(session: Session) -> None:
    """Leave nothing but the parcels 1, 2 …"""
    for table in reversed(Base.metadata.sorted_tables):
        session.execute(delete(table))
    session.add_all(
        Parcel(
            id=number + 1,
            ref=f"p{number + 1}",
            name=None,
            holding_id=None,
            created_at=BORDER,
            retired_at=None,
            revision=0,
        )
        for number in range(PARCELS)
    )
    session.flush()


def add_scene(session: Session, told: Pictured, number: int) -> Scene:
    scene = Scene(
        ref=f"s{number}",
        kind="measured",
        is_judged=True,
        sensor="sentinel-2-l2a",
        platform=told.platform,
        acquired_at=told.acquired_at,
        processing_baseline="05.10",
        details={},
        digest=f"{number:064d}",
        generation=1,
        state="running",
        progress=0.0,
        received_at=RECORDED,
        changed_at=RECORDED,
    )
    session.add(scene)
    session.flush()
    return scene


def measured(told: Pictured, *, first_value: float = 0.0) -> Measured:
    """Return figures whose means tell parcel and scene apart; NaN where nothing was seen."""
    seen = [(n + 1, share) for n, share in enumerate(told.shares) if share is not None]
    means = [
        [
            np.nan if share == 0 else first_value + parcel_id / 10 + place / 100
            for parcel_id, share in seen
        ]
        for place, _ in enumerate(LAYOUTS[told.layout])
    ]
    is_apart = told.layout == APART
    shares = [[share for _, share in seen]]
    if is_apart:
        shares.append([OTHER_SHARES.get(share, share) for _, share in seen])
    columns = [
        *[f"{rule}.valid_share" for rule in ("clear", "surface")[: len(shares)]],
        *(f"{measure}.mean" for measure in LAYOUTS[told.layout]),
    ]
    figures = np.array([*shares, *means], dtype=np.float32).T
    return Measured(
        parcel_ids=[parcel_id for parcel_id, _ in seen],
        boundary_ids=[parcel_id for parcel_id, _ in seen],
        columns=columns,
        figures=figures.reshape(len(seen), len(columns)),
        recipe={"rule": "clear", **({"rules": {"ndmi": "surface"}} if is_apart else {})},
        scaling={},
    )


def post(session: Session, told: Pictured, number: int) -> Scene:
    """Add a scene and record what it saw."""
    scene = add_scene(session, told, number)
    record(session, scene, measured(told, first_value=number), at=RECORDED)
    return scene


def by_hand(
    session: Session, measures: Iterable[str], *, until: datetime | None = None
) -> NewestLooks:
    """Find the newest looks the slow way: all history of each parcel, measure by measure."""
    found: NewestLooks = {}
    rows = list(observations(session, list(range(1, PARCELS + 1)), until=until))
    for parcel_id, of_parcel in groupby(rows, key=lambda row: row.parcel_id):
        kept = list(of_parcel)
        for measure in measures:
            looks = [
                look
                for look in best_of_passes(
                    [row for row in kept if row.places.has(measure)], measure
                )
                if share_of(look, measure) >= 0.6
            ]
            if looks:
                newest = max(looks, key=lambda look: (look.acquired_at, look.write_id))
                found[parcel_id, measure] = newest.acquired_at, newest.write_id
    return found


def share_of(row: Observed, measure: str) -> float:
    """Return the valid share by the rule that a measure was read by."""
    own = row.figure("surface.valid_share") if measure == "ndmi" else None
    return (row.figure("clear.valid_share") or 0.0) if own is None else own


def best_of_passes(rows: Sequence[Observed], measure: str) -> list[Observed]:
    """Take from each pass the row with the largest valid share, of each scene its last write."""
    last = {row.scene_id: row for row in sorted(rows, key=lambda row: row.write_id)}
    waiting = sorted(last.values(), key=lambda row: row.acquired_at)
    chosen: list[Observed] = []
    while waiting:
        first = waiting[0]
        one_pass = [
            row
            for row in waiting
            if row.platform == first.platform and row.acquired_at <= first.acquired_at + PASS
        ]
        waiting = [row for row in waiting if row not in one_pass]
        chosen.append(
            max(
                one_pass,
                key=lambda row: (
                    share_of(row, measure),
                    row.processing_baseline,
                    row.scene_ref,
                ),
            )
        )
    return chosen


def kept_latest(session: Session) -> NewestLooks:
    """Return what the table of newest looks says."""
    return {
        (row.parcel_id, row.measure): (row.acquired_at, row.write_id)
        for row in session.scalars(select(Latest))
    }
