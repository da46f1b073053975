"""The overview: every parcel's newest look in one call, for a dashboard's map."""

import csv
import io
from collections.abc import Collection, Iterator
from dataclasses import asdict, dataclass
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
from service.store.looks import newest_looks
from service.store.parcels import boundaries_at, visible
from service.store.seasons import crop_on, seasons_of
from service.store.tables import Holding, Latest, Parcel, Scene, Write

router = contract_router("/overview", "series")
_FORMATS: Final = {"application/json": "json", GEOJSON: "geojson", "text/csv": "csv"}


@dataclass(frozen=True, slots=True, kw_only=True)
class Newest:
    """A parcel's newest look; a parcel without one has nulls."""

    parcel: str
    name: str | None
    holding: str | None
    crop: str | None
    index: str
    observed_at: str | None
    scene: str | None
    value: float | None
    valid_share: float | None


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
    """Answer the newest look at every parcel: its value, valid share and scene."""
    measures = measures_in([index])
    if len(measures) != 1:
        raise RejectedInput.parameter("index", "An overview is of one index; name one.")
    media_type = media_type_in(format, request.headers.get("Accept", ""), _FORMATS)
    with context.sessions.reading() as session:
        parcels = _parcels(session, caller.holdings, holding)
        looks = _looks(session, parcels, measures[0], at)
        newest = {
            row.id: _newest(row, measures[0], grown, looks.get(row.id))
            for row, grown in _with_crops(session, parcels, (at or now()), crop)
        }
        if media_type == GEOJSON:
            return _geojson(session, newest, at or now())
    if media_type == "text/csv":
        return _csv(list(newest.values()))
    return JSONResponse({"parcels": [asdict(entry) for entry in newest.values()]})


def _parcels(
    session: Session, holdings: Collection[str] | None, holding: str | None
) -> list[Parcel]:
    query = visible(select(Parcel), holdings).order_by(Parcel.id)
    if holding is not None:
        query = query.where(Parcel.holding_id.in_(select(Holding.id).where(Holding.ref == holding)))
    return list(session.scalars(query))


def _with_crops(
    session: Session, parcels: list[Parcel], at: datetime, crop: str | None
) -> Iterator[tuple[Parcel, str | None]]:
    """Yield the parcels with what grew there on the day, only one crop's if it is named."""
    seasons = seasons_of(session, [row.id for row in parcels])
    for row in parcels:
        grown = crop_on(seasons.get(row.id, []), at.date())
        if crop is None or grown == crop:
            yield row, grown


def _looks(
    session: Session, parcels: list[Parcel], measure: str, at: datetime | None
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


def _newest(row: Parcel, measure: str, crop: str | None, look: _Look | None) -> Newest:
    return Newest(
        parcel=row.ref,
        name=row.name,
        holding=row.holding.ref if row.holding else None,
        crop=crop,
        index=measure,
        observed_at=written(look.observed_at) if look else None,
        scene=look.scene if look else None,
        value=look.value if look else None,
        valid_share=look.valid_share if look else None,
    )


def _geojson(session: Session, newest: dict[int, Newest], at: datetime) -> Response:
    boundaries = boundaries_at(session, list(newest), at=at)
    features: list[dict[str, Any]] = [
        {
            "type": "Feature",
            "id": entry.parcel,
            "properties": asdict(entry),
            "geometry": geometry_of(boundaries[parcel_id]),
        }
        for parcel_id, entry in newest.items()
    ]
    return JSONResponse({"type": "FeatureCollection", "features": features}, media_type=GEOJSON)


def _csv(newest: list[Newest]) -> Response:
    text = io.StringIO()
    writer = csv.DictWriter(text, fieldnames=[*Newest.__dataclass_fields__])
    writer.writeheader()
    writer.writerows(asdict(entry) for entry in newest)
    return Response(text.getvalue(), media_type="text/csv")
