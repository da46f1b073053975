"""Figures measured elsewhere: checked row by row, kept as scenes of kind `imported`."""

from collections.abc import Iterator
from datetime import datetime
from functools import partial
from typing import Annotated, Any, Final

from fastapi import Query, Response
from pydantic import BaseModel, BeforeValidator, Field, FiniteFloat
from sqlalchemy.orm import Session
from starlette.concurrency import run_in_threadpool

from service.api.batches import model_of
from service.api.bodies import (
    Bulk,
    BulkBody,
    csv_rows,
    unsupported_media_type,
)
from service.api.context import Caller, Context, Ctx, Ingester
from service.api.measures import WATCHED_IDS
from service.api.once import Once, OnceOnly, json_answer
from service.api.preferences import Wait, is_judged
from service.api.routes import contract_router, takes
from service.api.scene_checks import check_acquired
from service.api.wire import Instant, Ref, Sent, Text, joined
from service.clock import now
from service.errors import Fault, Faults, RejectedInput
from service.spectral.indices import INDICES
from service.spectral.roles import BandRole
from service.store.imports import STATS, Figure, import_figures
from service.store.judging import want_judging_of_scenes
from service.store.parcels import boundaries_at, is_within, parcels_by_ref
from service.store.sessions import serialise
from service.streams import json_array

router = contract_router("/observations", "series")

_COLUMNS: Final = {
    **dict.fromkeys(("parcel", "index", "observed_at", "mean"), True),
    **dict.fromkeys((*STATS[1:], "valid_share", "sensor", "source", "harmonised"), False),
}
_RANGES: Final = {"normalised": (-1.0, 1.0), "band": (-0.5, 2.0), "other": (-100.0, 100.0)}
_RANKED: Final = ("min", "p10", "p50", "p90", "max")
_BANDS: Final = frozenset(BandRole)
_MOST_PIXELS: Final = 1e9


def _refuse_flag(value: object) -> object:
    if isinstance(value, bool):
        raise ValueError("send a number, not true or false")  # noqa: TRY004 - what pydantic takes for a fault
    return value


Number = Annotated[FiniteFloat, BeforeValidator(_refuse_flag)]


class FigureIn(Sent):
    """One measure of one parcel at one instant."""

    parcel: Ref
    index: str
    observed_at: Instant
    mean: Number
    sd: Annotated[Number, Field(ge=0)] | None = None
    min: Number | None = None
    p10: Number | None = None
    p50: Number | None = None
    p90: Number | None = None
    max: Number | None = None
    pixels: Annotated[Number, Field(ge=0, le=_MOST_PIXELS)] | None = None
    valid_share: Annotated[Number, Field(ge=0, le=1)] | None = None
    sensor: Text = "import"
    source: Text = "import"
    harmonised: bool = False


def _check_possible(figure: FigureIn, pointer: str) -> None:
    """Refuse figures that no surface gives."""
    low, high = _range_of(figure.index, f"{pointer}/index")
    ranked = {name: getattr(figure, name) for name in _RANKED}
    known = {name: value for name, value in ranked.items() if value is not None}
    for name, value in {"mean": figure.mean, **known}.items():
        if not low <= value <= high:
            raise RejectedInput.at(
                f"{pointer}/{name}",
                f"Figures of this measure lie from {low:g} to {high:g}. Send reflectance as a "
                "fraction and indices unscaled.",
            )
    if figure.sd is not None and figure.sd > high - low:
        raise RejectedInput.at(
            f"{pointer}/sd", "No figures of this measure lie so far apart. Check the unit."
        )
    if list(known.values()) != sorted(known.values()):
        detail = f"{joined(_RANKED)} must not decrease in this order."
        raise RejectedInput.at(f"{pointer}/{next(iter(known))}", detail)


def _range_of(measure: str, pointer: str) -> tuple[float, float]:
    if measure in _BANDS:
        return _RANGES["band"]
    if measure not in WATCHED_IDS:
        what = "This index is not watched" if measure in INDICES else "There is no such index"
        detail = f"{what}. There are {joined(WATCHED_IDS)}, and the band roles."
        raise RejectedInput.at(pointer, detail)
    return _RANGES["normalised" if INDICES[measure].normalised else "other"]


class ObservationsPosted(BaseModel):
    """What became of the figures that were sent."""

    created: int
    updated: int
    unchanged: int
    rejected: int
    errors: list[dict[str, str]]


@router.post(
    "",
    response_model=ObservationsPosted,
    openapi_extra=takes("application/json", "text/csv"),
)
async def post_observations(
    caller: Ingester,
    body: Bulk,
    context: Ctx,
    once: OnceOnly,
    wait: Wait,
    *,
    assess: Annotated[bool, Query(description="Judge them as if just measured.")] = False,
) -> Response:
    """Keep figures measured elsewhere, from a JSON array or CSV.

    `Prefer: wait` holds the answer until whatever judging is promised is done.
    """
    keep = partial(_keep, body, caller, context, once, assess=assess)
    answer = await run_in_threadpool(keep)
    if wait:
        await is_judged(context, wait)
    return answer


def _keep(
    body: BulkBody, caller: Caller, context: Context, once: Once, *, assess: bool
) -> Response:
    faults = Faults()
    at = now()
    sent = {}
    for item, value in enumerate(_items(body, faults)):
        figure = faults.collect(item, lambda: _figure(value, item, at=at))  # noqa: B023
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


def _items(body: BulkBody, faults: Faults) -> Iterator[Any]:
    """Yield each row; of a CSV body the faults learn on which line it ends."""
    if body.media_type == "text/csv":
        for item, (line, cells) in enumerate(csv_rows(body.file, _COLUMNS)):
            faults.names[item] = f"Line {line}"
            yield cells
    elif body.media_type == "application/json":
        yield from json_array(body.file)
    else:
        raise unsupported_media_type("application/json", "text/csv")


def _figure(value: object, item: int, *, at: datetime) -> FigureIn:
    figure = model_of(FigureIn, value, f"/{item}")
    _check_possible(figure, f"/{item}")
    check_acquired(figure.observed_at, f"/{item}/observed_at", at=at)
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
