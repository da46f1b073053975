"""From a scene's row to the bands that the reader opens."""

from collections.abc import Mapping
from pathlib import Path
from typing import Any, Final, Literal

from service.spectral.gathered import QUALITY, SATURATION
from service.spectral.quality import Loss, QualityLayer
from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling
from service.spectral.sensors import Sensor
from service.tiles.buffering import CloudBuffer
from service.tiles.intake import inspect
from service.tiles.reading import BandSource, SceneSource

STACK: Final = "stack"
_NOT_SATURATED: Final = 0
_NO_BANDS: Final = frozenset({QUALITY, SATURATION})


def bands_of(details: Mapping[str, Any], parts: Mapping[str, Any]) -> dict[str, tuple[str, int]]:
    """Return by band role, ``quality`` and ``saturation`` its part and its band there, from 1.

    `parts` are the scene's file parts; a ``stack`` holds the roles that the metadata lists.
    """
    found = {part: (part, 1) for part in parts if part != STACK}
    if STACK in parts:
        for band, role in enumerate(details[STACK], start=1):
            if role is not None:
                found[role] = (STACK, band)
    return found


def band_roles(bands: Mapping[str, Any]) -> list[BandRole]:
    """Return the roles among what `bands_of` found, in one order."""
    return sorted(BandRole(name) for name in bands if name not in _NO_BANDS)


def scalings_of(
    details: Mapping[str, Any], bands: Mapping[str, Any], *, sensor: Sensor
) -> dict[BandRole, Scaling]:
    """Return the scaling of each band: as sent with the scene, else the sensor's own.

    One scaling for the whole scene is one of reflectance, so a band whose numbers mean
    something else (a temperature) keeps the sensor's.

    Raises
    ------
    RejectedInput
        The sensor's offset can't be known from what was sent.
    """
    sent = details.get("scaling") or {}
    baseline = details.get("processing_baseline")
    found: dict[BandRole, Scaling] = {}
    for role in band_roles(bands):
        own = _scaling_sent(sent, sensor, role)
        if own is not None:
            found[role] = Scaling(scale=own["scale"], offset=own["offset"])
        else:
            found[role] = sensor.scaling(role, processing_baseline=baseline)
    return found


def _scaling_sent(sent: Mapping[str, Any], sensor: Sensor, role: BandRole) -> Any:
    if "scale" not in sent:
        return sent.get(role.value)
    described = sensor.band(role)
    return sent if described is None or described.unit == "reflectance" else None


def scene_source(
    sensor: Sensor,
    details: Mapping[str, Any],
    files: Mapping[str, Path],
    *,
    cloud_buffer_cells: int = 0,
) -> SceneSource:
    """Return where the bands of a scene are read from, and how, by its file parts.

    A number for "no data" is the scene's own word, else the sensor's, else the file's. The
    cloud buffer is around the cells that the sensor's quality rule loses to cloud.
    """
    bands = bands_of(details, files)
    scalings = scalings_of(details, bands, sensor=sensor)
    told = details.get("nodata", sensor.nodata)
    has_bits = SATURATION in bands

    def source(role: BandRole) -> BandSource:
        part, band = bands[role.value]
        pointer = f"/{part}"
        own = inspect(files[part], pointer=pointer).nodata[band - 1] if told is None else told
        described = sensor.band(role)
        return BandSource(
            role=role,
            path=files[part],
            band=band,
            part=pointer,
            scaling=scalings[role],
            nodata=own,
            saturated=sensor.saturated,
            saturation_bit=described.saturation_bit if described and has_bits else None,
        )

    def beside(name: Literal["quality", "saturation"], outside: int) -> BandSource | None:
        if name not in bands:
            return None
        part, band = bands[name]
        return BandSource(
            role=name, path=files[part], band=band, part=f"/{part}", scaling=None, nodata=outside
        )

    layer = sensor.quality
    return SceneSource(
        bands=tuple(source(role) for role in scalings),
        quality=beside(QUALITY, layer.outside) if layer else None,
        saturation=beside(SATURATION, _NOT_SATURATED),
        cloud_buffer=_cloud_buffer(layer, sensor.quality_rule, cloud_buffer_cells),
    )


def _cloud_buffer(layer: QualityLayer | None, rule: str, cells: int) -> CloudBuffer | None:
    if layer is None or not cells:
        return None
    return CloudBuffer(
        cells=cells, is_cloud=lambda numbers: layer.judge(numbers, rule).lost[Loss.CLOUD]
    )
