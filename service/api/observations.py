"""Figures measured elsewhere: checked row by row, kept as scenes of kind `imported`."""

from collections.abc import Iterator
from datetime import datetime
from typing import Annotated, Any, Final

from fastapi import Query, Response
from pydantic import BaseModel, Field, FiniteFloat, model_validator
from sqlalchemy.orm import Session

from service.api.batches import Faults, model_of
from service.api.bodies import (
    Bulk,
    BulkBody,
    csv_rows,
    json_items,
    unsupported_media_type,
)
from service.api.context import Caller, Ctx, Ingester
from service.api.once import OnceOnly, json_answer
from service.api.routes import contract_router
from service.api.scene_checks import check_acquired
from service.api.wire import Instant, Ref, Sent, Text
from service.clock import now
from service.errors import Fault, RejectedInput
from service.spectral.indices import INDICES
from service.spectral.roles import BandRole
from service.store.imports import STATS, Figure, import_figures
from service.store.judging import want_judging_of_scenes
from service.store.parcels import boundaries_at, is_within, parcels_by_ref
from service.store.sessions import serialise

router = contract_router("/observations", "series")

_COLUMNS: Final = {
    **dict.fromkeys(("parcel", "index", "observed_at", "mean"), True),
    **dict.fromkeys((*STATS[1:], "valid_share", "sensor", "source", "harmonised"), False),
}
_RANGES: Final = {"normalised": (-1.0, 1.0), "band": (-0.5, 2.0), "other": (-100.0, 100.0)}


class FigureIn(Sent):
    """One measure of one parcel at one instant."""

    parcel: Ref
    index: str
    observed_at: Instant
    mean: FiniteFloat
    sd: Annotated[FiniteFloat, Field(ge=0)] | None = None
    min: FiniteFloat | None = None
    p10: FiniteFloat | None = None
    p50: FiniteFloat | None = None
    p90: FiniteFloat | None = None
    max: FiniteFloat | None = None
    pixels: Annotated[FiniteFloat, Field(ge=0)] | None = None
    valid_share: Annotated[FiniteFloat, Field(ge=0, le=1)] | None = None
    sensor: Text = "import"
    source: Text = "import"
    harmonised: bool = False

    @model_validator(mode="after")
    def _is_possible(self) -> "FigureIn":
        low, high = _range_of(self.index)
        inner = [v for v in (self.min, self.p10, self.p50, self.p90, self.max) if v is not None]
        if not all(low <= value <= high for value in (self.mean, *inner)):
            raise ValueError(
                f"figures of this measure lie from {low:g} to {high:g}; send reflectance as a "
                "fraction and indices unscaled"
            )
        if inner != sorted(inner):
            raise ValueError("min, p10, p50, p90 and max must not decrease in this order")
        return self


def _range_of(measure: str) -> tuple[float, float]:
    if measure in set(BandRole):
        return _RANGES["band"]
    if measure not in INDICES:
        raise ValueError(f"there is no such index; there are {', '.join(INDICES)}, and band roles")
    return _RANGES["normalised" if INDICES[measure].normalised else "other"]


class ObservationsPosted(BaseModel):
    """What became of the figures that were sent."""

    created: int
    updated: int
    unchanged: int
    rejected: int
    errors: list[dict[str, str]]


@router.post("", response_model=ObservationsPosted)
def post_observations(
    body: Bulk,
    caller: Ingester,
    context: Ctx,
    once: OnceOnly,
    *,
    assess: Annotated[bool, Query(description="Judge them as if just measured.")] = False,
) -> Response:
    """Keep figures measured elsewhere, from a JSON array or CSV."""
    faults = Faults()
    at = now()
    sent = {}
    for item, line, value in _items(body):
        figure = faults.collect(item, lambda: _figure(value, item, line, at=at))  # noqa: B023
        if figure is not None:
            sent[item] = figure
    faults.refuse(unless_lenient=body.is_lenient)
    with context.sessions.writing() as session:
        serialise(session, "scenes")
        if (first := once.replay(session, caller, body.digest)) is not None:
            return first
        figures = _resolved(session, sent, caller, faults)
        faults.refuse(unless_lenient=body.is_lenient)
        result = import_figures(session, figures, assess=assess, at=at)
        made = ObservationsPosted(
            created=result.created,
            updated=result.updated,
            unchanged=result.unchanged,
            rejected=len(faults.rejected),
            errors=faults.listed(),
        )
        want_judging_of_scenes(session, result.scenes, context.settings.season_starts)
        answer = once.keep(session, caller, body.digest, json_answer(made))
    context.promise_judging()
    return answer


def _items(body: BulkBody) -> Iterator[tuple[int, int | None, Any]]:
    """Yield each row with its place and, in CSV, its line."""
    if body.media_type == "text/csv":
        for item, (line, cells) in enumerate(csv_rows(body.file, _COLUMNS)):
            yield item, line, cells
    elif body.media_type == "application/json":
        for item, value in enumerate(json_items(body.file, "item")):
            yield item, None, value
    else:
        raise unsupported_media_type("application/json", "text/csv")


def _figure(value: object, item: int, line: int | None, *, at: datetime) -> FigureIn:
    try:
        figure = model_of(FigureIn, value, f"/{item}")
        check_acquired(figure.observed_at, f"/{item}/observed_at", at=at)
    except RejectedInput as error:
        if line is None:
            raise
        told = [
            Fault(pointer=fault.pointer, detail=f"Line {line}: {fault.detail}")
            for fault in error.faults
        ]
        raise RejectedInput(error.code, error.detail, told) from error
    return figure


def _resolved(
    session: Session, sent: dict[int, FigureIn], caller: Caller, faults: Faults
) -> list[Figure]:
    """Return the figures of parcels that the key may write, each cell named once."""
    parcels = parcels_by_ref(session, {figure.parcel for figure in sent.values()})
    parcels = {ref: row for ref, row in parcels.items() if is_within(row, caller.holdings)}
    outlines = boundaries_at(session, [row.id for row in parcels.values()], at=now())
    figures: list[Figure] = []
    seen: set[tuple[object, ...]] = set()
    for item, figure in sent.items():
        row = parcels.get(figure.parcel)
        cell = (figure.parcel, figure.index, figure.observed_at, figure.sensor, figure.source)
        if row is None:
            detail = "There is no parcel with this ref. Put the parcel first."
            faults.add(item, Fault(pointer=f"/{item}/parcel", detail=detail))
        elif cell in seen:
            detail = "This parcel, index and time are in this body twice; send one."
            faults.add(item, Fault(pointer=f"/{item}", detail=detail))
        else:
            seen.add(cell)
            figures.append(_kept(figure, row.id, outlines[row.id].id))
    return figures


def _kept(figure: FigureIn, parcel_id: int, boundary_id: int) -> Figure:
    stats = {stat: getattr(figure, stat) for stat in STATS}
    return Figure(
        parcel_id=parcel_id,
        boundary_id=boundary_id,
        measure=figure.index,
        observed_at=figure.observed_at,
        sensor=figure.sensor,
        source=figure.source,
        harmonised=figure.harmonised,
        stats={stat: value for stat, value in stats.items() if value is not None},
        valid_share=figure.valid_share,
    )
