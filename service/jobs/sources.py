"""From a scene's row to the bands that the reader opens."""

from collections.abc import Mapping
from pathlib import Path
from typing import Any, Final

from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling
from service.spectral.sensors import SENSORS
from service.tiles.intake import inspect
from service.tiles.reading import BandSource, SceneSource

QUALITY: Final = "quality"
_QUALITY_NODATA: Final = 0
STACK: Final = "stack"


def bands_of(details: Mapping[str, Any], parts: Mapping[str, Any]) -> dict[str, tuple[str, int]]:
    """Return by band role (and ``quality``) the part that holds it and its band, from 1.

    `parts` are the scene's file parts; a ``stack`` holds the roles that the metadata lists.
    """
    found = {part: (part, 1) for part in parts if part != STACK}
    if STACK in parts:
        for band, role in enumerate(details[STACK], start=1):
            if role is not None:
                found[role] = (STACK, band)
    return found


def scalings_of(
    details: Mapping[str, Any], roles: Mapping[str, Any], *, sensor: str
) -> dict[BandRole, Scaling]:
    """Return the scaling of each band: as sent with the scene, else the sensor's own.

    Raises
    ------
    RejectedInput
        The sensor's offset can't be known from what was sent.
    """
    sent = details.get("scaling") or {}
    found: dict[BandRole, Scaling] = {}
    for role in sorted(BandRole(name) for name in roles if name != QUALITY):
        own = sent if "scale" in sent else sent.get(role.value)
        if own is not None:
            found[role] = Scaling(scale=own["scale"], offset=own["offset"])
        else:
            baseline = details.get("processing_baseline")
            found[role] = SENSORS[sensor].scaling(role, processing_baseline=baseline)
    return found


def scene_source(
    sensor_id: str, details: Mapping[str, Any], files: Mapping[str, Path]
) -> SceneSource:
    """Return where the bands of a scene are read from, and how, by its file parts.

    A number for "no data" is the scene's own word, else the sensor's, else the file's.
    """
    bands = bands_of(details, files)
    scalings = scalings_of(details, bands, sensor=sensor_id)
    sensor = SENSORS[sensor_id]
    told = details.get("nodata", sensor.nodata)

    def source(role: BandRole) -> BandSource:
        part, band = bands[role.value]
        pointer = f"/{part}"
        own = inspect(files[part], pointer=pointer).nodata[band - 1] if told is None else told
        return BandSource(
            role=role,
            path=files[part],
            band=band,
            part=pointer,
            scaling=scalings[role],
            nodata=own,
            saturated=sensor.saturated,
        )

    return SceneSource(
        bands=tuple(source(role) for role in scalings),
        quality=_quality_source(bands, files) if QUALITY in bands else None,
    )


def _quality_source(bands: Mapping[str, tuple[str, int]], files: Mapping[str, Path]) -> BandSource:
    part, band = bands[QUALITY]
    return BandSource(
        role=QUALITY,
        path=files[part],
        band=band,
        part=f"/{part}",
        scaling=None,
        nodata=_QUALITY_NODATA,
    )
