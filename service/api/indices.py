"""What is measured, and of which sensors."""

from typing import Any

from pydantic import BaseModel

from service.api.context import Ctx, Reader
from service.api.routes import contract_router
from service.errors import NotFound
from service.jobs.measuring import WATCHED
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


class IndicesOut(BaseModel):
    """All indices."""

    indices: list[IndexOut]


class SensorOut(BaseModel):
    """A sensor profile."""

    id: str
    title: str
    bands: list[dict[str, Any]]
    nodata: float | None
    saturated: float | None
    quality_layer: str | None
    quality_rule: str | None


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
        bands=[
            {
                "role": band.role.value,
                "name": band.name,
                "centre_um": band.centre_um,
                "width_um": band.width_um,
                "gsd_m": band.gsd_m,
            }
            for band in sensor.bands
        ],
        nodata=sensor.nodata,
        saturated=sensor.saturated,
        quality_layer=sensor.quality.id if sensor.quality else None,
        quality_rule=sensor.quality_rule if sensor.quality else None,
    )
