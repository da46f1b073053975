"""Sensors: the profiles that scenes are read by, built in or put by their users."""

from collections.abc import Iterable
from datetime import datetime
from typing import Annotated, Any, Final, Literal
from urllib.parse import quote

from fastapi import Path, Query, Request, Response
from pydantic import BaseModel, BeforeValidator, Field, FiniteFloat, model_validator

from service.api.context import Ctx, Reader, Steward
from service.api.paging import Cursor, Limit, link_next, place_in
from service.api.routes import contract_router
from service.api.scalings import ScalingSent, scaling_from
from service.api.wire import InstantOut, Sent, Text
from service.clock import now
from service.spectral.bands import Band
from service.spectral.indices import INDICES
from service.spectral.profile_quality import TYPES
from service.spectral.quality import Loss
from service.spectral.roles import BandRole
from service.spectral.sensors import SENSORS, Sensor
from service.store.sensor_tables import SensorProfile
from service.store.sensors import (
    find_profile,
    keep_profile,
    list_profiles,
    sensor_in,
    sensor_not_found,
)

router = contract_router("/sensors", "indices and sensors")

_LARGEST: Final = 2**32 - 1
_LayerNumber = Annotated[int, Field(ge=0, le=_LARGEST)]
_Name = Annotated[str, Field(min_length=1, max_length=40)]


class BandIn(Sent):
    """A band: what it measures, and where in the spectrum."""

    role: BandRole
    name: Text | None = None
    centre_um: Annotated[FiniteFloat, Field(ge=0.3, le=15)]
    width_um: Annotated[FiniteFloat, Field(gt=0, le=10)]
    gsd_m: Annotated[FiniteFloat, Field(gt=0, le=10_000)] | None = None
    scaling: ScalingSent | None = None
    saturation_bit: Annotated[int, Field(ge=0, le=31)] | None = None


class ClassIn(Sent):
    """A class of a quality layer, and the reason to give where a rule drops it."""

    value: _LayerNumber
    name: Text
    loss: Loss | None = None
    water: bool = False


class FieldIn(Sent):
    """A bit of a quality layer, or some neighbouring ones, from the lowest on."""

    name: _Name
    bit: Annotated[int, Field(ge=0, le=31)]
    width: Annotated[int, Field(ge=1, le=8)] = 1
    loss: Loss | None = None
    water: bool = False


class DropIn(Sent):
    """What a rule drops: cells where a field is so high."""

    field: _Name
    at_least: Annotated[int, Field(ge=1, le=255)] = 1


class RuleIn(Sent):
    """What is usable: of classes those in `keep`, of bits what `drop` and `need` leave."""

    keep: Annotated[list[_LayerNumber], Field(max_length=256)] | None = None
    drop: Annotated[list[DropIn], Field(max_length=64)] | None = None
    need: Annotated[list[_Name], Field(max_length=32)] | None = None


class QualityIn(Sent):
    """A quality layer: a built-in one, by `layer`, or one's own, of `classes` or of `bits`."""

    layer: _Name | None = None
    name: _Name | None = None
    dtype: Literal[tuple(TYPES)] | None = None  # type: ignore[valid-type]
    nodata: _LayerNumber | None = None
    classes: Annotated[list[ClassIn], Field(min_length=1, max_length=256)] | None = None
    bits: Annotated[list[FieldIn], Field(min_length=1, max_length=32)] | None = None
    rules: Annotated[dict[str, RuleIn], Field(min_length=1, max_length=16)] | None = None


def _by_name(sent: object) -> object:
    return {"layer": sent} if isinstance(sent, str) else sent


class ProfileIn(Sent):
    """A sensor's profile."""

    title: Text
    bands: Annotated[list[BandIn], Field(min_length=1, max_length=64)]
    scaling: ScalingSent | dict[BandRole, ScalingSent] | None = None
    nodata: FiniteFloat | None = None
    saturated: FiniteFloat | None = None
    quality: Annotated[QualityIn | None, BeforeValidator(_by_name)] = None
    quality_rule: _Name | None = None

    @model_validator(mode="before")
    @classmethod
    def _one_or_by_role(cls, value: Any) -> Any:
        """Decide between one scaling and one per role, so that faults name the right place."""
        sent = value.get("scaling") if isinstance(value, dict) else None
        return value if sent is None else {**value, "scaling": scaling_from(sent, "/scaling")}


class ScalingOut(BaseModel):
    """Reflectance, or kelvin, = number * scale + offset."""

    scale: float
    offset: float


class BandOut(BaseModel):
    """A band: `unit` is of what its numbers become; `valid_numbers` are the product's word."""

    role: str
    name: str
    centre_um: float
    width_um: float
    gsd_m: float | None
    unit: str
    scaling: ScalingOut | None
    valid_numbers: tuple[int, int] | None
    saturation_bit: int | None


class SensorOut(BaseModel):
    """A sensor profile; `platforms` has the bands of each, where platforms differ.

    `index_rules` says of the indices that ask for a quality rule which one they are read by.
    `profile` is what was sent; it, `version` and `recorded_at` are null for built-in sensors.
    """

    id: str
    title: str
    built_in: bool
    version: int | None
    recorded_at: InstantOut | None
    bands: list[BandOut]
    platforms: dict[str, list[BandOut]]
    needs_platform: bool
    nodata: float | None
    saturated: float | None
    quality_layer: str | None
    quality_rule: str | None
    quality_rules: list[str]
    index_rules: dict[str, str]
    saturation_layer: str | None
    profile: dict[str, Any] | None


class SensorsOut(BaseModel):
    """A page of sensor profiles: the built-in ones, then those that were put, by id."""

    sensors: list[SensorOut]


SensorId = Annotated[
    str,
    Path(
        pattern=r"^[a-z][a-z0-9_-]{1,59}$",
        description="Lower-case letters, digits, _ and -; a letter first; 2 to 60 characters.",
    ),
]


@router.get("")
def get_sensors(
    _caller: Reader,
    context: Ctx,
    request: Request,
    response: Response,
    limit: Limit = 100,
    cursor: Cursor = None,
) -> SensorsOut:
    """List the sensor profiles, the newest version of each."""
    place = place_in(cursor, int, str)
    with context.sessions.reading() as session:
        own = [_own_out(row) for row in list_profiles(session)]
    made = sorted([*map(_out, SENSORS.values()), *own], key=_place)
    rest = made if place is None else [one for one in made if _place(one) > tuple(place)]
    if len(rest) > limit:
        link_next(request, response, *_place(rest[limit - 1]))
    return SensorsOut(sensors=rest[:limit])


def _place(sensor: SensorOut) -> tuple[int, str]:
    return int(not sensor.built_in), sensor.id


@router.get("/{sensor_id}")
def get_sensor(
    sensor_id: str,
    _caller: Reader,
    context: Ctx,
    version: Annotated[
        int | None, Query(ge=1, le=2**31 - 1, description="Of a profile that was put.")
    ] = None,
) -> SensorOut:
    """Answer one sensor profile: its newest version, or the one that is asked for."""
    if sensor_id in SENSORS and version is None:
        return _out(SENSORS[sensor_id])
    with context.sessions.reading() as session:
        row = find_profile(session, sensor_id, version=version)
    if row is None:
        raise sensor_not_found()
    return _own_out(row)


@router.put("/{sensor_id}", status_code=200, responses={201: {"model": SensorOut}})
def put_sensor(
    sensor_id: SensorId, sent: ProfileIn, caller: Steward, context: Ctx, response: Response
) -> SensorOut:
    """Keep a profile, as a new version if it differs from the newest.

    A version holds for the scenes that are received from then on; what came before is
    measured again, if it has to be, by the version that it was received under.
    """
    caller.must_see_all("a sensor")
    document = sent.model_dump(mode="json", exclude_none=True)
    with context.sessions.writing() as session:
        row, is_new = keep_profile(session, sensor_id, document, at=now())
        made = _own_out(row)
    if is_new and row.version == 1:
        response.status_code = 201
        response.headers["Location"] = f"/v1/sensors/{quote(sensor_id, safe='')}"
    return made


def _own_out(row: SensorProfile) -> SensorOut:
    return _out(sensor_in(row), recorded_at=row.recorded_at, profile=row.document)


def _out(
    sensor: Sensor, *, recorded_at: datetime | None = None, profile: dict[str, Any] | None = None
) -> SensorOut:
    quality = sensor.quality
    return SensorOut(
        id=sensor.id,
        title=sensor.title,
        built_in=sensor.version is None,
        version=sensor.version,
        recorded_at=recorded_at,
        bands=_bands_out(sensor.bands),
        platforms={name: _bands_out(bands) for name, bands in sensor.platforms.items()},
        needs_platform=sensor.needs_platform,
        nodata=sensor.nodata,
        saturated=sensor.saturated,
        quality_layer=quality.id if quality else None,
        quality_rule=sensor.quality_rule if quality else None,
        quality_rules=list(quality.rules) if quality else [],
        index_rules=_index_rules(sensor),
        saturation_layer=sensor.saturation.id if sensor.saturation else None,
        profile=profile,
    )


def _index_rules(sensor: Sensor) -> dict[str, str]:
    """Return the rules that indices with a rule of their own are read by."""
    if sensor.quality is None:
        return {}
    rules = sensor.quality.rules
    return {
        index.id: index.quality_rule if index.quality_rule in rules else sensor.quality_rule
        for index in INDICES.values()
        if index.quality_rule is not None
    }


def _bands_out(bands: Iterable[Band]) -> list[BandOut]:
    return [
        BandOut(
            role=band.role.value,
            name=band.name,
            centre_um=band.centre_um,
            width_um=band.width_um,
            gsd_m=band.gsd_m,
            unit=band.unit,
            scaling=_scaling_out(band),
            valid_numbers=band.valid_numbers,
            saturation_bit=band.saturation_bit,
        )
        for band in bands
    ]


def _scaling_out(band: Band) -> ScalingOut | None:
    if band.scaling is None:
        return None
    return ScalingOut(scale=band.scaling.scale, offset=band.scaling.offset)
