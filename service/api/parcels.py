"""Parcels: inserted, updated, listed, retired; their boundary versions."""

from collections.abc import Mapping
from typing import Annotated, Any, Final

import shapely
from fastapi import Query, Request, Response
from pydantic import BaseModel, Field
from sqlalchemy import select
from sqlalchemy.orm import Session

from service.api.batches import Faults, model_of
from service.api.bodies import (
    Bulk,
    BulkBody,
    json_items,
    json_members,
    unsupported_media_type,
)
from service.api.context import Caller, Context, Ctx, Reader, Steward
from service.api.features import GEOJSON, GeoJson, features_of, geometry_of
from service.api.overlaps import overlap_warnings
from service.api.paging import Cursor, Limit, link_next, place_in
from service.api.problems import pointer_of
from service.api.routes import contract_router, takes
from service.api.seasons import season_of_day
from service.api.wire import Instant, InstantOut, LongText, QueryBox, Ref, Sent, Text
from service.clock import now
from service.errors import Fault, RejectedInput
from service.store.judging import want_judging_of_crops
from service.store.parcels import (
    ParcelChange,
    ParcelsChanged,
    get_parcel,
    in_force,
    intersects,
    is_within,
    list_boundaries,
    parcels_by_ref,
    retire_parcel,
    upsert_parcels,
    visible,
)
from service.store.scenes import remeasure
from service.store.seasons import put_crop_of_day, seasons_of
from service.store.sessions import serialise
from service.store.tables import Boundary, CropSeason, Holding, Parcel, ParcelTag
from service.zonal.boundary import outline_from_geojson

MAX_VERTICES_A_CALL: Final = 250_000
MAX_REPAIRED_VERTICES_A_CALL: Final = 5_000
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
    faults = Faults()
    changes, warnings = _changes(body, faults, context, repair=repair)
    faults.refuse(unless_lenient=body.is_lenient)
    at = now()
    with context.sessions.writing() as session:
        serialise(session, "parcels")
        # Before any parcel's row: judging locks folds and parcels in this order too.
        serialise(session, "judging")
        rows = parcels_by_ref(session, (change.ref for change in changes.values()))
        for item, change in changes.items():
            _check_holding(item, change, rows.get(change.ref), caller, faults)
        faults.refuse(unless_lenient=body.is_lenient)
        kept = {i: change for i, change in changes.items() if i not in faults.rejected}
        result = upsert_parcels(session, list(kept.values()), at=at)
        _put_crops(session, kept.values(), result, context)
        scenes = remeasure(session, result.redrawn, at=at)
        promises = [(scene.id, scene.generation) for scene in scenes if scene.state == "queued"]
        warnings += overlap_warnings(session, kept, result, caller.holdings, at=at)
        answer = _told(kept, result, faults, warnings)
    for promise in promises:
        context.promise(*promise)
    context.promise_judging()
    return answer


def _told(
    kept: dict[int, ParcelChange],
    result: ParcelsChanged,
    faults: Faults,
    warnings: list[dict[str, str]],
) -> ParcelsPut:
    revived = [
        {
            "pointer": f"/features/{item}/properties/ref",
            "detail": "This parcel was retired and is measured again from now on.",
        }
        for item, change in kept.items()
        if change.ref in result.revived
    ]
    return ParcelsPut(
        created=len(result.created),
        updated=len(result.updated),
        unchanged=len(result.unchanged),
        rejected=len(faults.rejected),
        errors=faults.listed(),
        warnings=[*revived, *warnings][:100],
    )


def _changes(
    body: BulkBody, faults: Faults, context: Context, *, repair: bool
) -> tuple[dict[int, ParcelChange], list[dict[str, str]]]:
    """Return the parcels that stand in a body and can be kept, by their place in it."""
    if body.media_type not in ("application/json", GEOJSON):
        raise unsupported_media_type(GEOJSON)
    members = json_members(body.file, but="features")
    _check_members(members)
    if members.get("type") != "FeatureCollection" or members.get("features") != "start_array":
        raise RejectedInput.at("", "Send a GeoJSON FeatureCollection with `features` (RFC 7946).")
    changes: dict[int, ParcelChange] = {}
    warnings: list[dict[str, str]] = []
    seen: dict[str, int] = {}
    vertices = repaired = 0
    for item, value in enumerate(json_items(body.file, "features.item")):
        change = faults.collect(item, lambda: _change(item, value, context, repair=repair))  # noqa: B023
        if change is None:
            continue
        count = int(shapely.get_num_coordinates(change.outline.geometry))
        vertices += count
        if change.outline.was_repaired:
            repaired += count
            warnings.append(
                {
                    "pointer": f"/features/{item}/geometry",
                    "detail": f"Mended here; it now covers {change.outline.area_ha:.2f} ha.",
                }
            )
        _check_size(vertices, repaired)
        if change.ref in seen:
            faults.add(item, _duplicate(item, seen[change.ref]))
            continue
        seen[change.ref] = item
        changes[item] = change
    return changes, warnings


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


def _check_size(vertices: int, repaired: int) -> None:
    if vertices > MAX_VERTICES_A_CALL or repaired > MAX_REPAIRED_VERTICES_A_CALL:
        raise RejectedInput.at(
            "/features",
            f"A call takes outlines of up to {MAX_VERTICES_A_CALL:,} vertices together, and mends "
            f"up to {MAX_REPAIRED_VERTICES_A_CALL:,}. Send them in several calls.",
        )


def _duplicate(item: int, first: int) -> Fault:
    return Fault(
        pointer=f"/features/{item}/properties/ref",
        detail=f"Feature {first} of this body has the same ref; send each parcel once.",
    )


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


def _check_holding(
    item: int, change: ParcelChange, row: Parcel | None, caller: Caller, faults: Faults
) -> None:
    """Refuse what lies outside the key's holdings, as if it did not exist."""
    if caller.holdings is None:
        return
    if row is not None and not is_within(row, caller.holdings):
        detail = "This ref is taken. Refs are unique in the deployment; choose another."
        fault = Fault(pointer=f"/features/{item}/properties/ref", detail=detail)
        faults.add(item, fault, "ref-taken")
        return
    holding = change.given.get("holding", row.holding.ref if row and row.holding else None)
    if holding not in caller.holdings:
        detail = "This key is limited to holdings; name one of them."
        faults.add(item, Fault(pointer=f"/features/{item}/properties/holding", detail=detail))


def _put_crops(
    session: Session,
    changes: Any,
    result: ParcelsChanged,
    context: Context,
) -> None:
    """Name the crops of the seasons that hold today, where a crop was given."""
    named = [change for change in changes if change.given.get("crop")]
    seasons = seasons_of(session, [result.rows[change.ref].id for change in named])
    today = now().date()
    labelled = []
    for change in named:
        row = result.rows[change.ref]
        latitude = change.outline.geometry.centroid.y
        sent = season_of_day(row, change.given["crop"], today, latitude, context.settings)
        changed = put_crop_of_day(session, sent, seasons.setdefault(row.id, []), today)
        if changed and change.ref in result.unchanged:
            result.unchanged.remove(change.ref)
            result.updated.append(change.ref)
        if changed:
            labelled.append(sent.from_on)
    want_judging_of_crops(session, labelled, context.settings.season_starts)


@router.get("", response_class=GeoJson)
def get_parcels(
    caller: Reader,
    context: Ctx,
    request: Request,
    bbox: Annotated[QueryBox, Query(description="west,south,east,north in degrees.")] = None,
    holding: Annotated[Ref | None, Query()] = None,
    crop: Annotated[Text | None, Query(description="Crop of the season that holds today.")] = None,
    tag: Annotated[Text | None, Query()] = None,
    limit: Limit = 100,
    cursor: Cursor = None,
) -> Response:
    """List parcels that are not retired, as GeoJSON."""
    place = place_in(cursor, int)
    at = now()
    query = visible(select(Parcel), caller.holdings).order_by(Parcel.id)
    query = query.where(Parcel.id > (place[0] if place else 0))
    if holding is not None:
        query = query.where(Parcel.holding_id.in_(select(Holding.id).where(Holding.ref == holding)))
    if bbox is not None:
        met = select(Boundary.parcel_id).where(in_force(at), intersects(bbox))
        query = query.where(Parcel.id.in_(met))
    if crop is not None:
        query = query.where(Parcel.id.in_(_growing(crop)))
    if tag is not None:
        query = query.where(Parcel.id.in_(_tagged(tag)))
    with context.sessions.reading() as session:
        rows = session.scalars(query.limit(limit + 1)).all()
        features = features_of(session, rows[:limit])
    answer = GeoJson({"type": "FeatureCollection", "features": features})
    if len(rows) > limit:
        link_next(request, answer, rows[limit - 1].id)
    return answer


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
