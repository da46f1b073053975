"""The overview: every parcel's newest look in one call, for a dashboard's map."""

import csv
import io
from collections.abc import Collection, Iterator, Mapping
from dataclasses import dataclass
from datetime import datetime
from typing import Annotated, Any, Final

from fastapi import Query, Request, Response
from fastapi.responses import JSONResponse
from sqlalchemy import and_, select
from sqlalchemy.orm import Session

from service.api.context import Ctx, Reader
from service.api.features import GEOJSON, geometry_of
from service.api.measures import measures_in, media_type_in
from service.api.routes import contract_router
from service.api.wire import QueryInstant, Ref, Text, written
from service.clock import now
from service.errors import RejectedInput
from service.store.alerts import open_alerts
from service.store.judgements import departures_at
from service.store.looks import newest_looks
from service.store.parcels import boundaries_at, visible
from service.store.seasons import crop_on, seasons_of
from service.store.tables import Holding, Latest, Parcel, Scene, Write

router = contract_router("/overview", "series")
_FORMATS: Final = {"application/json": "json", GEOJSON: "geojson", "text/csv": "csv"}


@dataclass(frozen=True, slots=True, kw_only=True)
class Newest:
    """A parcel's newest look and its open alerts; a parcel without a look has nulls.

    `departure` is in spreads, null where the look was not judged.
    """

    parcel: str
    name: str | None
    holding: str | None
    crop: str | None
    index: str
    observed_at: str | None
    scene: str | None
    value: float | None
    departure: float | None
    valid_share: float | None
    alerts: list[str]


@dataclass(frozen=True, slots=True, kw_only=True)
class _Look:
    observed_at: datetime
    scene: str
    value: float | None
    valid_share: float


@router.get("", responses={200: {"content": {media_type: {} for media_type in _FORMATS}}})
def get_overview(
    caller: Reader,
    context: Ctx,
    request: Request,
    index: Annotated[str, Query(description="An index id or band role.")] = "ndvi",
    at: Annotated[QueryInstant | None, Query(description="The newest look by then.")] = None,
    holding: Annotated[Ref | None, Query()] = None,
    crop: Annotated[Text | None, Query(description="Crop on that day.")] = None,
    format: Annotated[str | None, Query(description="json, geojson or csv.")] = None,  # noqa: A002 - the contract's name
) -> Response:
    """Answer the newest look at every parcel: its value, departure and open alerts."""
    measures = measures_in([index])
    if len(measures) != 1:
        raise RejectedInput.parameter("index", "An overview is of one index; name one.")
    media_type = media_type_in(format, request.headers.get("Accept", ""), _FORMATS)
    with context.sessions.reading() as session:
        parcels = _parcels(session, caller.holdings, holding)
        looks = _looks(session, parcels, measures[0], at)
        beside = _beside(session, measures[0], looks, at or now())
        newest = {
            row.id: _newest(row, measures[0], grown, looks.get(row.id), beside)
            for row, grown in _with_crops(session, parcels, (at or now()), crop)
        }
        if media_type == GEOJSON:
            return _geojson(session, newest, at or now())
    if media_type == "text/csv":
        return _csv(list(newest.values()))
    return JSONResponse({"parcels": [_members(entry) for entry in newest.values()]})


@dataclass(frozen=True, slots=True, kw_only=True)
class _Parcel:
    id: int
    ref: str
    name: str | None
    holding: str | None


def _parcels(
    session: Session, holdings: Collection[str] | None, holding: str | None
) -> list[_Parcel]:
    query = select(Parcel.id, Parcel.ref, Parcel.name, Holding.ref.label("holding"))
    query = query.outerjoin(Holding, Holding.id == Parcel.holding_id)
    if holding is not None:
        query = query.where(Holding.ref == holding)
    rows = session.execute(visible(query, holdings).order_by(Parcel.id))
    return [_Parcel(id=i, ref=ref, name=name, holding=held) for i, ref, name, held in rows]


def _with_crops(
    session: Session, parcels: list[_Parcel], at: datetime, crop: str | None
) -> Iterator[tuple[_Parcel, str | None]]:
    """Yield the parcels with what grew there on the day, only one crop's if it is named."""
    seasons = seasons_of(session, [row.id for row in parcels])
    for row in parcels:
        grown = crop_on(seasons.get(row.id, []), at.date())
        if crop is None or grown == crop:
            yield row, grown


def _looks(
    session: Session, parcels: list[_Parcel], measure: str, at: datetime | None
) -> dict[int, _Look]:
    if at is not None:
        ids = [row.id for row in parcels]
        return {
            parcel_id: _Look(
                observed_at=look[measure].acquired_at,
                scene=look[measure].scene_ref,
                value=look[measure].of_measure(measure, "mean"),
                valid_share=look[measure].share_of(measure),
            )
            for parcel_id, look in newest_looks(session, ids, until=at, measures=[measure])
        }
    query = (
        select(Latest.parcel_id, Latest.acquired_at, Scene.ref, Latest.value, Latest.valid_share)
        .join(Write, Write.id == Latest.write_id)
        .join(Scene, Scene.id == Write.scene_id)
        .where(and_(Latest.measure == measure))
    )
    return {
        row.parcel_id: _Look(
            observed_at=row.acquired_at,
            scene=row.ref,
            value=row.value,
            valid_share=row.valid_share,
        )
        for row in session.execute(query)
    }


@dataclass(frozen=True, slots=True, kw_only=True)
class _Beside:
    """What judging says, by parcel."""

    departures: Mapping[int, float | None]
    alerts: Mapping[int, list[str]]


def _beside(session: Session, measure: str, looks: Mapping[int, _Look], at: datetime) -> _Beside:
    instants = {parcel_id: look.observed_at for parcel_id, look in looks.items()}
    return _Beside(
        departures=departures_at(session, measure, instants), alerts=open_alerts(session, at)
    )


def _newest(
    row: _Parcel, measure: str, crop: str | None, look: _Look | None, beside: _Beside
) -> Newest:
    return Newest(
        parcel=row.ref,
        name=row.name,
        holding=row.holding,
        crop=crop,
        index=measure,
        observed_at=written(look.observed_at) if look else None,
        scene=look.scene if look else None,
        value=look.value if look else None,
        departure=beside.departures.get(row.id) if look else None,
        valid_share=look.valid_share if look else None,
        alerts=beside.alerts.get(row.id, []),
    )


def _geojson(session: Session, newest: dict[int, Newest], at: datetime) -> Response:
    boundaries = boundaries_at(session, list(newest), at=at)
    features: list[dict[str, Any]] = [
        {
            "type": "Feature",
            "id": entry.parcel,
            "properties": _members(entry),
            "geometry": geometry_of(boundaries[parcel_id]),
        }
        for parcel_id, entry in newest.items()
    ]
    return JSONResponse({"type": "FeatureCollection", "features": features}, media_type=GEOJSON)


def _members(entry: Newest) -> dict[str, Any]:
    # `dataclasses.asdict` copies deeply, which takes most of the time of ten thousand parcels.
    return {name: getattr(entry, name) for name in Newest.__dataclass_fields__}


def _csv(newest: list[Newest]) -> Response:
    text = io.StringIO()
    writer = csv.DictWriter(text, fieldnames=[*Newest.__dataclass_fields__])
    writer.writeheader()
    writer.writerows({**_members(entry), "alerts": " ".join(entry.alerts)} for entry in newest)
    return Response(text.getvalue(), media_type="text/csv")
