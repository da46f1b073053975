"""Crop seasons: what grew where, from when to when."""

from collections.abc import Iterator
from datetime import date
from typing import Annotated, Any

from fastapi import APIRouter
from fastapi.responses import Response
from pydantic import BaseModel, Field
from sqlalchemy.orm import Session

from service.api.batches import model_of
from service.api.bodies import (
    Bulk,
    BulkBody,
    csv_rows,
    unsupported_media_type,
)
from service.api.context import Caller, Context, Ctx, Reader, Steward
from service.api.once import OnceOnly, json_answer
from service.api.routes import contract_router, takes
from service.api.wire import Day, Ref, Sent, Text
from service.clock import now
from service.errors import Fault, Faults, RejectedInput
from service.seasons.axis import SeasonStart, season_ending_in
from service.store.judging import want_judging_of_crops
from service.store.parcels import boundaries_at, get_parcel, is_within, parcels_by_ref
from service.store.seasons import (
    SeasonSent,
    overlapping,
    put_season,
    season_start,
    seasons_of,
)
from service.store.sessions import serialise
from service.store.tables import CropSeason, Parcel
from service.streams import json_items

router: APIRouter = contract_router("", "parcels")

_COLUMNS = {
    "parcel": True,
    "crop": True,
    "from_on": False,
    "until_on": False,
    "year": False,
    "sown_on": False,
    "harvested_on": False,
}


class SeasonIn(Sent):
    """A crop season: its first and last day, or the year in which its crop year ends."""

    parcel: Ref
    crop: Text
    from_on: Day | None = None
    until_on: Day | None = None
    year: Annotated[int, Field(ge=1972, le=2200)] | None = None
    sown_on: Day | None = None
    harvested_on: Day | None = None


class SeasonOut(BaseModel):
    """A crop season, both days included."""

    crop: str
    from_on: date
    until_on: date
    sown_on: date | None
    harvested_on: date | None


class SeasonsOut(BaseModel):
    """A parcel's crop seasons in order of time."""

    seasons: list[SeasonOut]


class SeasonsPosted(BaseModel):
    """What became of the seasons that were sent."""

    created: int
    updated: int
    unchanged: int
    rejected: int
    errors: list[dict[str, str]]


@router.get("/parcels/{ref}/seasons")
def get_seasons(ref: str, caller: Reader, context: Ctx) -> SeasonsOut:
    """List a parcel's crop seasons."""
    with context.sessions.reading() as session:
        row = get_parcel(session, ref, holdings=caller.holdings)
        seasons = seasons_of(session, [row.id]).get(row.id, [])
    return SeasonsOut(seasons=[_out(season) for season in seasons])


def _out(row: CropSeason) -> SeasonOut:
    return SeasonOut(
        crop=row.crop,
        from_on=row.from_on,
        until_on=row.until_on,
        sown_on=row.sown_on,
        harvested_on=row.harvested_on,
    )


@router.post(
    "/seasons",
    response_model=SeasonsPosted,
    openapi_extra=takes("application/json", "text/csv"),
)
def post_seasons(caller: Steward, body: Bulk, context: Ctx, once: OnceOnly) -> Response:
    """Add or correct crop seasons: one as JSON object, many as JSON array or CSV."""
    faults = Faults()
    sent = _sent(body, faults)
    faults.refuse(unless_lenient=body.is_lenient)
    labelled: list[date] = []
    counts = {"created": 0, "updated": 0, "unchanged": 0}
    with context.sessions.writing() as session:
        serialise(session, "parcels")
        if (first := once.replay(session, caller, body.digest)) is not None:
            return first
        serialise(session, "judging")
        for item, season, seasons in _resolved(session, sent, caller, context, faults):
            pointer, _ = sent[item]
            held = overlapping(season, seasons)
            if held is not None:
                detail = (
                    f"Overlaps the season from {held.from_on} to {held.until_on}; send that very "
                    "interval to correct it."
                )
                faults.add(item, Fault(pointer=pointer, detail=detail), "season-overlaps")
                continue
            outcome = put_season(session, season, seasons)
            counts[outcome] += 1
            if outcome != "unchanged":
                labelled.append(season.from_on)
        faults.refuse(unless_lenient=body.is_lenient)
        want_judging_of_crops(session, labelled, context.settings.season_starts)
        made = SeasonsPosted(**counts, rejected=len(faults.rejected), errors=faults.listed())
        answer = once.keep(session, caller, body.digest, json_answer(made))
    context.promise_judging()
    return answer


def _sent(body: BulkBody, faults: Faults) -> dict[int, tuple[str, SeasonIn]]:
    """Return the seasons that stand in a body with their pointers, by their place in it."""
    found = {}
    for item, (pointer, value) in enumerate(_items(body, faults)):
        season = faults.collect(item, lambda: model_of(SeasonIn, value, pointer))  # noqa: B023
        if season is not None:
            found[item] = pointer, season
    return found


def _items(body: BulkBody, faults: Faults) -> Iterator[tuple[str, Any]]:
    """Yield each item of a body with its pointer; a single object has the empty one."""
    if body.media_type == "text/csv":
        for item, (line, cells) in enumerate(csv_rows(body.file, _COLUMNS)):
            faults.names[item] = f"Line {line}"
            yield f"/{item}", cells
    elif body.media_type == "application/json":
        is_array = body.file.read(1024).lstrip()[:1] == b"["
        body.file.seek(0)
        for item, value in enumerate(json_items(body.file, "item" if is_array else "")):
            yield f"/{item}" if is_array else "", value
    else:
        raise unsupported_media_type("application/json", "text/csv")


def _resolved(
    session: Session,
    sent: dict[int, tuple[str, SeasonIn]],
    caller: Caller,
    context: Context,
    faults: Faults,
) -> Any:
    """Yield each season with its interval worked out, and its parcel's seasons."""
    parcels = parcels_by_ref(session, {season.parcel for _, season in sent.values()})
    parcels = {ref: row for ref, row in parcels.items() if is_within(row, caller.holdings)}
    ids = [row.id for row in parcels.values()]
    outlines = boundaries_at(session, ids, at=now())
    by_parcel = seasons_of(session, ids)
    for item, (pointer, season) in sent.items():
        row = parcels.get(season.parcel)
        if row is None:
            detail = "There is no parcel with this ref. Put the parcel first."
            faults.add(item, Fault(pointer=f"{pointer}/parcel", detail=detail))
            continue
        latitude = (outlines[row.id].south + outlines[row.id].north) / 2
        start = season_start(row, latitude, context.settings.season_starts)
        resolved = faults.collect(item, lambda: _interval(season, row, start, pointer))  # noqa: B023
        if resolved is not None:
            yield item, resolved, by_parcel.setdefault(row.id, [])


def _interval(season: SeasonIn, row: Parcel, start: SeasonStart, pointer: str) -> SeasonSent:
    first, last = season.from_on, season.until_on
    if season.year is not None:
        if first is not None or last is not None:
            raise RejectedInput.at(
                f"{pointer}/year", "Send either `year`, or `from_on` and `until_on`."
            )
        first, last = season_ending_in(season.year, start)
    first, last = season.sown_on or first, season.harvested_on or last
    if first is None or last is None:
        raise RejectedInput.at(
            pointer, "Say when the season is: `year`, or `from_on` and `until_on`."
        )
    if first > last:
        raise RejectedInput.at(pointer, "The season ends before it begins.")
    return SeasonSent(
        parcel=row,
        crop=season.crop,
        from_on=first,
        until_on=last,
        sown_on=season.sown_on,
        harvested_on=season.harvested_on,
    )
