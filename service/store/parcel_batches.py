"""Parcels put in a batch: all or nothing, or the good ones, whichever way they come.

A request's body and a file, small or as a job, end here: what is checked, kept and told is
the same.
"""

from collections.abc import Callable, Collection, Mapping
from contextlib import nullcontext
from dataclasses import dataclass, field
from datetime import datetime
from typing import Any, Final

import shapely
from sqlalchemy.orm import Session

from service.errors import MAX_ERRORS, Fault, Faults, RejectedInput, pointer_of
from service.store.holdings import moving_axes
from service.store.judging import want_judging_of_crops
from service.store.overlaps import overlap_warnings
from service.store.parcels import (
    ParcelChange,
    ParcelsChanged,
    is_within,
    parcels_by_ref,
    upsert_parcels,
)
from service.store.scenes import SceneState, remeasure
from service.store.seasons import put_crop_of_day, season_of_day, seasons_of
from service.store.sessions import serialise
from service.store.tables import Parcel

MAX_VERTICES_A_CALL: Final = 250_000
MAX_REPAIRED_VERTICES_A_CALL: Final = 5_000


@dataclass(frozen=True, slots=True, kw_only=True)
class Places:
    """Where features and their members stand in what was sent, for pointers.

    `members` says what a member is called there, if otherwise; None if it does not stand there.
    """

    features: str = "/features"
    members: Mapping[str, str | None] = field(default_factory=dict)

    def feature(self, item: int) -> str:
        """Return the pointer of a feature."""
        return f"{self.features}/{item}"

    def geometry(self, item: int) -> str:
        """Return the pointer of a feature's geometry."""
        return f"{self.feature(item)}/geometry"

    def member(self, item: int, name: str) -> str:
        """Return the pointer of a feature's member, or the feature's own without it."""
        there = self.members.get(name, name)
        tail = "" if there is None else pointer_of(["properties", there])
        return self.feature(item) + tail


@dataclass(frozen=True, slots=True, kw_only=True)
class Limits:
    """How many vertices a batch may have in all, and in outlines to be mended."""

    vertices: int = MAX_VERTICES_A_CALL
    repaired: int = MAX_REPAIRED_VERTICES_A_CALL


@dataclass(slots=True, kw_only=True)
class ParcelBatch:
    """Parcels checked one by one: what can be kept by its place, what is wrong, what to say."""

    places: Places
    limits: Limits
    faults: Faults = field(default_factory=Faults)
    changes: dict[int, ParcelChange] = field(default_factory=dict)
    warnings: list[dict[str, str]] = field(default_factory=list)
    vertices: int = 0
    repaired: int = 0
    _seen: dict[str, int] = field(default_factory=dict)

    def take(self, item: int, check: Callable[[], ParcelChange]) -> None:
        """Add the parcel that a check gives, or note what it rejects.

        Raises
        ------
        RejectedInput
            The batch is over its limits.
        """
        change = self.faults.collect(item, check)
        if change is None:
            return
        count = int(shapely.get_num_coordinates(change.outline.geometry))
        self.vertices += count
        if change.outline.was_repaired:
            self.repaired += count
            detail = f"Mended here; it now covers {change.outline.area_ha:.2f} ha."
            self.warn(self.places.geometry(item), detail)
        self._check_limits()
        first = self._seen.setdefault(change.ref, item)
        if first != item:
            detail = f"Feature {first} has the same ref; send each parcel once."
            self.faults.add(item, Fault(pointer=self.places.member(item, "ref"), detail=detail))
            return
        self.changes[item] = change

    def warn(self, pointer: str, detail: str) -> None:
        """Note what is accepted but worth a look."""
        self.warnings.append({"pointer": pointer, "detail": detail})

    def kept(self) -> dict[int, ParcelChange]:
        """Return the parcels that nothing was found wrong with."""
        rejected = self.faults.rejected
        return {item: change for item, change in self.changes.items() if item not in rejected}

    def _check_limits(self) -> None:
        limits = self.limits
        if self.vertices > limits.vertices or self.repaired > limits.repaired:
            raise RejectedInput.at(
                self.places.features,
                f"A call takes outlines of up to {limits.vertices:,} vertices together, and mends "
                f"up to {limits.repaired:,}. Send them in several calls.",
            )


@dataclass(frozen=True, slots=True, kw_only=True)
class Kept:
    """What became of a batch, and the scenes by id and generation that are measured again."""

    created: int
    updated: int
    unchanged: int
    rejected: int
    errors: list[dict[str, str]]
    warnings: list[dict[str, str]]
    promises: list[tuple[int, int]]

    def told(self) -> dict[str, Any]:
        """Return what the caller is told."""
        names = ("created", "updated", "unchanged", "rejected", "errors", "warnings")
        return {name: getattr(self, name) for name in names}


def keep_parcels(
    session: Session,
    batch: ParcelBatch,
    *,
    holdings: Collection[str] | None,
    season_starts: tuple[str, str],
    is_lenient: bool,
    at: datetime,
) -> Kept:
    """Insert or update the parcels of a batch by ref, within a key's holdings (None: all).

    Raises
    ------
    RejectedInput, Conflict
        Something is wrong with one of them, and good ones are not to land alone.
    """
    batch.faults.refuse(unless_lenient=is_lenient)
    serialise(session, "parcels")
    # Before any parcel's row: judging locks folds and parcels in this order too.
    serialise(session, "judging")
    _check_holdings(session, batch, holdings)
    batch.faults.refuse(unless_lenient=is_lenient)
    kept = batch.kept()
    changes = list(kept.values())
    # Another holding may have another start of its crop year.
    is_moving = any("holding" in change.given for change in changes)
    with moving_axes(session, season_starts) if is_moving else nullcontext():
        result = upsert_parcels(session, changes, at=at)
    _put_crops(session, kept.values(), result, season_starts, at=at)
    scenes = remeasure(session, result.redrawn, at=at)
    _warn_of_revived(batch, kept, result)
    for item, detail in overlap_warnings(session, kept, result, holdings, at=at):
        batch.warn(batch.places.geometry(item), detail)
    return Kept(
        created=len(result.created),
        updated=len(result.updated),
        unchanged=len(result.unchanged),
        rejected=len(batch.faults.rejected),
        errors=batch.faults.listed(),
        warnings=batch.warnings[:MAX_ERRORS],
        promises=[(s.id, s.generation) for s in scenes if s.state == SceneState.QUEUED],
    )


def _check_holdings(session: Session, batch: ParcelBatch, holdings: Collection[str] | None) -> None:
    """Refuse what lies outside a key's holdings, as if it did not exist."""
    if holdings is None:
        return
    rows = parcels_by_ref(session, (change.ref for change in batch.changes.values()))
    for item, change in batch.changes.items():
        _check_holding(item, change, rows.get(change.ref), holdings, batch)


def _check_holding(
    item: int,
    change: ParcelChange,
    row: Parcel | None,
    holdings: Collection[str],
    batch: ParcelBatch,
) -> None:
    if row is not None and not is_within(row, holdings):
        detail = "This ref is taken. Refs are unique in the deployment; choose another."
        fault = Fault(pointer=batch.places.member(item, "ref"), detail=detail)
        batch.faults.add(item, fault, "ref-taken")
        return
    holding = change.given.get("holding", row.holding.ref if row and row.holding else None)
    if holding not in holdings:
        detail = "This key is limited to holdings; name one of them."
        pointer = batch.places.member(item, "holding")
        batch.faults.add(item, Fault(pointer=pointer, detail=detail))


def _warn_of_revived(
    batch: ParcelBatch, kept: Mapping[int, ParcelChange], result: ParcelsChanged
) -> None:
    revived = set(result.revived)
    batch.warnings[:0] = [
        {
            "pointer": batch.places.member(item, "ref"),
            "detail": "This parcel was retired and is measured again from now on.",
        }
        for item, change in kept.items()
        if change.ref in revived
    ]


def _put_crops(
    session: Session,
    changes: Collection[ParcelChange],
    result: ParcelsChanged,
    season_starts: tuple[str, str],
    *,
    at: datetime,
) -> None:
    """Name the crops of the seasons that hold today, where a crop was given."""
    named = [change for change in changes if change.given.get("crop")]
    seasons = seasons_of(session, [result.rows[change.ref].id for change in named])
    today = at.date()
    unchanged = set(result.unchanged)
    labelled = []
    for change in named:
        row = result.rows[change.ref]
        latitude = change.outline.geometry.centroid.y
        sent = season_of_day(row, change.given["crop"], today, latitude, season_starts)
        if not put_crop_of_day(session, sent, seasons.setdefault(row.id, []), today):
            continue
        labelled.append(sent.from_on)
        if change.ref in unchanged:
            unchanged.remove(change.ref)
            result.updated.append(change.ref)
    result.unchanged = [ref for ref in result.unchanged if ref in unchanged]
    want_judging_of_crops(session, labelled, season_starts)
