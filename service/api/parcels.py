"""Parcels: inserted, updated, listed, retired; their boundary versions."""

from collections.abc import Mapping, Sequence
from datetime import datetime, timedelta
from typing import Annotated, Any

from fastapi import Query, Request, Response
from pydantic import BaseModel, Field
from sqlalchemy import select
from sqlalchemy.orm import Session

from service.api.batches import model_of
from service.api.bodies import Bulk, BulkBody, unsupported_media_type
from service.api.context import Context, Ctx, Reader, Steward
from service.api.features import GEOJSON, GeoJson, features_of, geometry_of
from service.api.paging import Cursor, Limit, link_next, place_in
from service.api.routes import contract_router, takes
from service.api.wire import Instant, InstantOut, LongText, QueryBox, Ref, Sent, Text, written
from service.clock import now
from service.errors import Fault, RejectedInput, pointer_of
from service.store.parcel_batches import Limits, ParcelBatch, Places, keep_parcels
from service.store.parcels import (
    ParcelChange,
    get_parcel,
    in_force,
    intersects,
    list_boundaries,
    retire_parcel,
    visible,
)
from service.store.tables import Boundary, CropSeason, Holding, Parcel, ParcelTag
from service.store.unseen import not_seen_since, unseen_passes
from service.streams import json_items, json_members
from service.zonal.boundary import outline_from_geojson

router = contract_router("/parcels", "parcels")


class PropertiesSent(Sent):
    """A parcel's properties; members left out stay as they are."""

    ref: Ref | None = None
    name: LongText | None = None
    holding: Ref | None = None
    crop: Text | None = None
    tags: Annotated[list[Text], Field(max_length=50)] | None = None
    valid_from: Instant | None = None


class FeatureSent(Sent):
    """A parcel as GeoJSON feature; its geometry is checked apart."""

    type: Annotated[str, Field(pattern="^Feature$")]
    id: Ref | None = None
    properties: PropertiesSent
    geometry: Any
    bbox: Any = None


class ParcelsPut(BaseModel):
    """What became of the parcels that were sent."""

    created: int
    updated: int
    unchanged: int
    rejected: int
    errors: list[dict[str, str]]
    warnings: list[dict[str, str]]


class BoundaryOut(BaseModel):
    """One boundary version."""

    valid_from: InstantOut | None
    valid_to: InstantOut | None
    recorded_at: InstantOut
    area_ha: float
    geometry: dict[str, Any]


class BoundariesOut(BaseModel):
    """A parcel's boundary versions, in order of validity."""

    boundaries: list[BoundaryOut]


@router.put("", response_model=ParcelsPut, openapi_extra=takes(GEOJSON, "application/json"))
def put_parcels(
    caller: Steward,
    body: Bulk,
    context: Ctx,
    *,
    repair: Annotated[bool, Query(description="Mend rings that cross themselves.")] = False,
) -> Any:
    """Insert or update parcels by ref, from a GeoJSON FeatureCollection."""
    batch = _batch(body, context, repair=repair)
    batch.faults.refuse(unless_lenient=body.is_lenient)
    with context.sessions.writing() as session:
        kept = keep_parcels(
            session,
            batch,
            holdings=caller.holdings,
            season_starts=context.settings.season_starts,
            is_lenient=body.is_lenient,
            at=now(),
        )
    for promise in kept.promises:
        context.promise(*promise)
    context.promise_judging()
    return ParcelsPut(**kept.told())


def _batch(body: BulkBody, context: Context, *, repair: bool) -> ParcelBatch:
    """Return the parcels that stand in a body."""
    if body.media_type not in ("application/json", GEOJSON):
        raise unsupported_media_type(GEOJSON)
    members = json_members(body.file, but="features")
    _check_members(members)
    if members.get("type") != "FeatureCollection" or members.get("features") != "start_array":
        raise RejectedInput.at("", "Send a GeoJSON FeatureCollection with `features` (RFC 7946).")
    batch = ParcelBatch(places=Places(), limits=Limits())
    for item, value in enumerate(json_items(body.file, "features.item")):
        batch.take(item, lambda: _change(item, value, context, repair=repair))  # noqa: B023
    return batch


def _check_members(members: Mapping[str, Any]) -> None:
    """Refuse what would be ignored, such as a `crs` that is not WGS 84."""
    unknown = members.keys() - {"type", "features", "bbox"}
    if unknown:
        detail = (
            "A FeatureCollection has `type` and `features` here; leave this member out. "
            "Coordinates are WGS 84 degrees (RFC 7946)."
        )
        faults = [Fault(pointer=pointer_of([name]), detail=detail) for name in sorted(unknown)]
        raise RejectedInput("invalid-input", detail, faults)


def _change(item: int, value: object, context: Context, *, repair: bool) -> ParcelChange:
    pointer = f"/features/{item}"
    feature = model_of(FeatureSent, value, pointer)
    ref = feature.properties.ref or feature.id
    if ref is None:
        raise RejectedInput.at(
            f"{pointer}/properties/ref", "A parcel needs a `ref` in its properties, or an `id`."
        )
    outline = outline_from_geojson(
        feature.geometry,
        pointer=f"{pointer}/geometry",
        repair=repair,
        area_limit_ha=context.settings.parcel_area_limit_ha,
    )
    given = feature.properties.model_dump(exclude_unset=True, exclude={"ref", "valid_from"})
    return ParcelChange(
        ref=ref, outline=outline, given=given, valid_from=feature.properties.valid_from
    )


@router.get("", response_class=GeoJson)
def get_parcels(
    caller: Reader,
    context: Ctx,
    request: Request,
    bbox: Annotated[QueryBox, Query(description="west,south,east,north in degrees.")] = None,
    holding: Annotated[Ref | None, Query()] = None,
    crop: Annotated[Text | None, Query(description="Crop of the season that holds today.")] = None,
    tag: Annotated[Text | None, Query()] = None,
    unseen_days: Annotated[
        int | None, Query(ge=1, le=3660, description="Without a look in so many days.")
    ] = None,
    limit: Limit = 100,
    cursor: Cursor = None,
) -> Response:
    """List parcels that are not retired, as GeoJSON.

    With `unseen_days` those without a look in so many days up to now; `unseen` then says when
    the last one was, how many passes came since the days began, and what hid the parcel.
    """
    place = place_in(cursor, int)
    at = now()
    since = None if unseen_days is None else at - timedelta(days=unseen_days)
    query = visible(select(Parcel), caller.holdings).order_by(Parcel.id)
    query = query.where(Parcel.id > (place[0] if place else 0))
    conditions = (
        (holding, Parcel.holding_id.in_(select(Holding.id).where(Holding.ref == holding))),
        (crop, Parcel.id.in_(_growing(crop or ""))),
        (tag, Parcel.id.in_(_tagged(tag or ""))),
        (since, not_seen_since(since or at)),
    )
    query = query.where(*(condition for asked, condition in conditions if asked is not None))
    if bbox is not None:
        met = select(Boundary.parcel_id).where(in_force(at), intersects(bbox))
        query = query.where(Parcel.id.in_(met))
    with context.sessions.reading() as session:
        rows = session.scalars(query.limit(limit + 1)).all()
        features = features_of(session, rows[:limit])
        if since is not None:
            _add_unseen(session, features, rows, since, at)
    answer = GeoJson({"type": "FeatureCollection", "features": features})
    if len(rows) > limit:
        link_next(request, answer, rows[limit - 1].id)
    return answer


def _add_unseen(
    session: Session,
    features: Sequence[dict[str, Any]],
    rows: Sequence[Parcel],
    since: datetime,
    until: datetime,
) -> None:
    """Say of features, which are the first of the rows, since when and why they are unseen."""
    shown = rows[: len(features)]
    found = unseen_passes(session, dict.fromkeys((row.id for row in shown), since), until=until)
    for feature, row in zip(features, shown, strict=True):
        unseen = found[row.id]
        feature["properties"]["unseen"] = {
            "last_look_at": written(unseen.last_look_at) if unseen.last_look_at else None,
            "passes": unseen.passes,
            "reasons": dict(unseen.reasons),
        }


def _growing(crop: str) -> Any:
    today = now().date()
    return select(CropSeason.parcel_id).where(
        CropSeason.crop == crop, CropSeason.from_on <= today, CropSeason.until_on >= today
    )


def _tagged(tag: str) -> Any:
    return select(ParcelTag.parcel_id).where(ParcelTag.tag == tag)


@router.get("/{ref}", response_class=GeoJson)
def get_one_parcel(ref: str, caller: Reader, context: Ctx) -> Response:
    """Answer one parcel, retired or not, as GeoJSON feature."""
    with context.sessions.reading() as session:
        row = get_parcel(session, ref, holdings=caller.holdings)
        return GeoJson(features_of(session, [row])[0])


@router.delete("/{ref}", response_class=GeoJson)
def delete_parcel(ref: str, caller: Steward, context: Ctx) -> Response:
    """Retire a parcel: its history stays, nothing new is measured."""
    with context.sessions.writing() as session:
        row = get_parcel(session, ref, holdings=caller.holdings)
        retire_parcel(session, row, at=now())
        return GeoJson(features_of(session, [row])[0])


@router.get("/{ref}/boundaries")
def get_boundaries(ref: str, caller: Reader, context: Ctx) -> BoundariesOut:
    """List a parcel's boundary versions, in order of validity."""
    with context.sessions.reading() as session:
        row = get_parcel(session, ref, holdings=caller.holdings)
        return BoundariesOut(
            boundaries=[
                BoundaryOut(
                    valid_from=version.valid_from,
                    valid_to=version.valid_to,
                    recorded_at=version.recorded_at,
                    area_ha=round(version.area_ha, 4),
                    geometry=geometry_of(version),
                )
                for version in list_boundaries(session, row)
            ]
        )
