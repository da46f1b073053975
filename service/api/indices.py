"""What is measured, and of which sensors."""

from collections.abc import Iterable

from pydantic import BaseModel

from service.api.context import Ctx, Reader
from service.api.routes import contract_router
from service.errors import NotFound
from service.jobs.measuring import WATCHED
from service.spectral.bands import Band
from service.spectral.indices import INDICES, Index
from service.spectral.sensors import SENSORS, Sensor

router = contract_router("", "indices and sensors")


class IndexOut(BaseModel):
    """An index: what it is, what it needs, what it tells, and who published it."""

    id: str
    title: str
    domain: str
    formula: str
    bands: list[str]
    constants: dict[str, float]
    range: tuple[float | None, float | None]
    typical: str
    rise: str
    fall: str
    source: str
    note: str
    version: str
    watched: bool
    quality_rule: str | None


class IndicesOut(BaseModel):
    """All indices."""

    indices: list[IndexOut]


class BandOut(BaseModel):
    """A band: `unit` is of what its numbers become; `valid_numbers` are the product's word."""

    role: str
    name: str
    centre_um: float
    width_um: float
    gsd_m: float
    unit: str
    valid_numbers: tuple[int, int] | None
    saturation_bit: int | None


class SensorOut(BaseModel):
    """A sensor profile; `platforms` has the bands of each, where platforms differ."""

    id: str
    title: str
    bands: list[BandOut]
    platforms: dict[str, list[BandOut]]
    needs_platform: bool
    nodata: float | None
    saturated: float | None
    quality_layer: str | None
    quality_rule: str | None
    quality_rules: list[str]
    saturation_layer: str | None


class SensorsOut(BaseModel):
    """All sensor profiles."""

    sensors: list[SensorOut]


def _index_out(index: Index) -> IndexOut:
    return IndexOut(
        id=index.id,
        title=index.title,
        domain=index.domain,
        formula=index.formula,
        bands=[role.value for role in index.roles],
        constants=dict(index.constants),
        range=index.valid_range,
        typical=index.typical,
        rise=index.rise,
        fall=index.fall,
        source=index.source,
        note=index.note,
        version=index.version,
        watched=index in WATCHED,
        quality_rule=index.quality_rule,
    )


@router.get("/indices")
def get_indices(_caller: Reader, _context: Ctx) -> IndicesOut:
    """List the indices."""
    return IndicesOut(indices=[_index_out(index) for index in INDICES.values()])


@router.get("/indices/{index_id}")
def get_index(index_id: str, _caller: Reader, _context: Ctx) -> IndexOut:
    """Answer one index."""
    if index_id not in INDICES:
        raise NotFound("index-not-found", "There is no index with this id.")
    return _index_out(INDICES[index_id])


@router.get("/sensors")
def get_sensors(_caller: Reader, _context: Ctx) -> SensorsOut:
    """List the sensor profiles."""
    return SensorsOut(sensors=[_sensor_out(sensor) for sensor in SENSORS.values()])


def _sensor_out(sensor: Sensor) -> SensorOut:
    return SensorOut(
        id=sensor.id,
        title=sensor.title,
        bands=_bands_out(sensor.bands),
        platforms={name: _bands_out(bands) for name, bands in sensor.platforms.items()},
        needs_platform=sensor.needs_platform,
        nodata=sensor.nodata,
        saturated=sensor.saturated,
        quality_layer=sensor.quality.id if sensor.quality else None,
        quality_rule=sensor.quality_rule if sensor.quality else None,
        quality_rules=list(sensor.quality.rules) if sensor.quality else [],
        saturation_layer=sensor.saturation.id if sensor.saturation else None,
    )


def _bands_out(bands: Iterable[Band]) -> list[BandOut]:
    return [
        BandOut(
            role=band.role.value,
            name=band.name,
            centre_um=band.centre_um,
            width_um=band.width_um,
            gsd_m=band.gsd_m,
            unit=band.unit,
            valid_numbers=band.valid_numbers,
            saturation_bit=band.saturation_bit,
        )
        for band in bands
    ]
