"""What headers and metadata of a scene show, checked before anything of it is kept."""

import hashlib
import json
from collections.abc import Mapping
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Annotated, Any, Final, Literal

from pydantic import AfterValidator, Field, FiniteFloat, model_validator

from service.api.batches import model_of
from service.api.scalings import ScalingSent, scaling_from
from service.api.uploads import SCENE, STACK, SceneReceived
from service.api.wire import Instant, Ref, Sent, Text, written
from service.errors import RejectedInput
from service.jobs.measuring import WATCHED
from service.jobs.sources import band_roles, bands_of, scalings_of, scene_source
from service.spectral.gathered import QUALITY, SATURATION
from service.spectral.roles import BandRole
from service.spectral.sensors import SENSORS, Sensor
from service.store.scenes import FileSent, SceneSent
from service.store.sensors import SENSOR_VERSION, find_sensor
from service.store.sessions import Sessions
from service.tiles.intake import Header, check_together, footprint, inspect
from service.tiles.reading import measuring_grid

_EARLIEST: Final = datetime(1972, 1, 1, tzinfo=UTC)
"""No civil multispectral satellite flew before."""
_AHEAD: Final = timedelta(days=1)


def _stack_role(role: str | None) -> str | None:
    if role in (None, QUALITY, SATURATION, *BandRole):
        return role
    raise ValueError(
        f"send a band role ({', '.join(BandRole)}), quality, saturation, or null for a band to skip"
    )


StackRole = Annotated[str | None, AfterValidator(_stack_role)]
"""What a band of a stack is; None if it is to be skipped."""


class SceneIn(Sent):
    """The ``scene`` part: what the files are."""

    ref: Ref
    sensor: Text
    acquired_at: Instant
    processing_baseline: Text | None = None
    platform: Text | None = None
    tile: Text | None = None
    scaling: ScalingSent | dict[BandRole, ScalingSent] | None = None
    stack: Annotated[list[StackRole], Field(min_length=1)] | None = None
    nodata: FiniteFloat | None = None
    quality: Literal["none"] | None = None
    replace: bool = False

    @model_validator(mode="before")
    @classmethod
    def _one_or_by_role(cls, value: Any) -> Any:
        """Decide between one scaling and one per role, so that faults name the right place."""
        sent = value.get("scaling") if isinstance(value, Mapping) else None
        if sent is None:
            return value
        return {**value, "scaling": scaling_from(sent, f"/{SCENE}/scaling")}


def checked_scene(
    received: SceneReceived, sessions: Sessions, *, at: datetime
) -> tuple[SceneSent, dict[str, Path]]:
    """Return a received scene, ready to be kept, and where its parts are.

    Its files are named by the parts as they are stored: the single near-infrared band of a
    sensor is ``nir`` by whichever name it was sent.

    Raises
    ------
    RejectedInput
        Metadata or headers break a rule; the pointer begins with the part's name.
    """
    scene = _scene_part(received.scene)
    sensor = _sensor(scene, sessions)
    check_acquired(scene.acquired_at, f"/{SCENE}/acquired_at", at=at)
    files = {part: file.path for part, file in received.files.items()}
    details, files = _with_one_nir(_details(scene), files, sensor)
    headers = {part: inspect(path, pointer=f"/{part}") for part, path in files.items()}
    _check_parts(details, headers, sensor)
    check_together({f"/{part}": header for part, header in headers.items()})
    bands = bands_of(details, files)
    scalings_of(details, bands, sensor=sensor)
    _check_feeds(bands)
    grid = measuring_grid(scene_source(sensor, details, files))
    sizes = {file.path: file for file in received.files.values()}
    sent = SceneSent(
        ref=scene.ref,
        sensor=sensor.id,
        platform=scene.platform,
        tile=scene.tile,
        acquired_at=scene.acquired_at,
        processing_baseline=scene.processing_baseline,
        details=details if sensor.version is None else {**details, SENSOR_VERSION: sensor.version},
        digest=_digest(details, {part: sizes[path].digest for part, path in files.items()}),
        grid=grid,
        footprint=footprint(grid),
        files=[
            FileSent(part=part, digest=sizes[path].digest, size=sizes[path].size)
            for part, path in files.items()
        ],
        replace=scene.replace,
    )
    return sent, files


def _sensor(scene: SceneIn, sessions: Sessions) -> Sensor:
    """Return the scene's sensor, by the newest version of its profile, on its platform."""
    with sessions.reading() as session:
        sensor = find_sensor(session, scene.sensor)
    if sensor is None:
        raise RejectedInput.at(
            f"/{SCENE}/sensor",
            f"No sensor profile has this id. `GET /v1/sensors` lists those that there are; "
            f"{', '.join(SENSORS)} are built in, others are put by `PUT /v1/sensors/{{id}}`.",
            code="unknown-sensor",
        )
    return sensor.on(scene.platform)


def _scene_part(data: bytes) -> SceneIn:
    try:
        value = json.loads(data)
    except (ValueError, RecursionError) as error:
        raise RejectedInput("malformed-json", "The scene part is not valid JSON.") from error
    return model_of(SceneIn, value, f"/{SCENE}")


def check_acquired(acquired_at: datetime, pointer: str, *, at: datetime) -> None:
    """Refuse a time at which nothing here was acquired.

    Raises
    ------
    RejectedInput
        It is before the first satellites of this kind, or more than a day ahead.
    """
    if not _EARLIEST <= acquired_at <= at + _AHEAD:
        raise RejectedInput.at(
            pointer,
            f"A scene is acquired from {_EARLIEST.year} on and at most a day ahead of now. Check "
            "the year, and that the time is that of the acquisition.",
        )


def _details(scene: SceneIn) -> dict[str, Any]:
    """Return the normalised metadata: what the digest covers, and what measuring needs."""
    details = scene.model_dump(mode="json", exclude_none=True, exclude={"ref", "replace"})
    details["acquired_at"] = written(scene.acquired_at)
    if scene.stack is not None:
        details[STACK] = list(scene.stack)
    return details


def _with_one_nir(
    details: dict[str, Any], files: dict[str, Path], sensor: Sensor
) -> tuple[dict[str, Any], dict[str, Path]]:
    """Call the only near-infrared band ``nir``, except where the sensor has two."""
    roles = {*files, *(details.get(STACK) or [])}
    has_two = bool(sensor.bands) and {BandRole.NIR, BandRole.NIR08} <= set(sensor.roles)
    if "nir08" not in roles or "nir" in roles or has_two:
        return details, files
    renamed = {"nir" if part == "nir08" else part: path for part, path in files.items()}
    if STACK in details:
        stack = ["nir" if role == "nir08" else role for role in details[STACK]]
        details = {**details, STACK: stack}
    scaling = details.get("scaling", {})
    if "nir08" in scaling:
        scaling = {"nir" if role == "nir08" else role: own for role, own in scaling.items()}
        details = {**details, "scaling": scaling}
    return details, renamed


def _check_parts(details: Mapping[str, Any], headers: Mapping[str, Header], sensor: Sensor) -> None:
    _check_stack(details, headers)
    for part, header in headers.items():
        if part != STACK and header.count != 1:
            raise RejectedInput.at(
                f"/{part}",
                "A part named by band role holds one band; send a file of several as `stack`, with "
                "the role of each band in the metadata.",
            )
    bands = bands_of(details, headers)
    for role in band_roles(bands):
        sensor.check_role(role, f"/{bands[role.value][0]}")
    _check_quality(details, headers, sensor)
    _check_saturation(bands.get(SATURATION), headers, sensor)


def _check_stack(details: Mapping[str, Any], headers: Mapping[str, Header]) -> None:
    roles = details.get(STACK)
    if (roles is None) != (STACK not in headers):
        raise RejectedInput.at(
            f"/{SCENE}/{STACK}",
            "A part `stack` and the list `stack` in the metadata, the role of each of its bands "
            "in order, go together.",
        )
    if roles is None:
        return
    named = [role for role in roles if role is not None]
    if len(roles) != headers[STACK].count:
        raise RejectedInput.at(
            f"/{SCENE}/{STACK}",
            f"The list names {len(roles)} bands, the file has {headers[STACK].count}; use null "
            "for a band to skip.",
        )
    if len(set(named)) != len(named) or set(named) & (headers.keys() - {STACK}):
        raise RejectedInput.at(f"/{SCENE}/{STACK}", "A band role is there twice; send each once.")


def _check_quality(
    details: Mapping[str, Any], headers: Mapping[str, Header], sensor: Sensor
) -> None:
    place = bands_of(details, headers).get(QUALITY)
    is_waived = details.get(QUALITY) == "none"
    if sensor.quality is None:
        if place is not None:
            raise RejectedInput.at(
                f"/{place[0]}",
                f"The profile {sensor.id} has no quality layer to read this by. Leave it out, and "
                "set the cells that are not usable to the nodata number.",
                code="wrong-quality-layer",
            )
        return
    if place is None and not is_waived:
        raise RejectedInput.at(
            f"/{QUALITY}",
            f"Scenes of {sensor.id} come with their quality layer ({sensor.quality.id.upper()}). "
            'Send it, or say `"quality": "none"` to measure clouds as if they were ground.',
            code="wrong-quality-layer",
        )
    if place is None:
        return
    if is_waived:
        raise RejectedInput.at(
            f"/{SCENE}/{QUALITY}", "A quality layer was sent; leave out `quality` or the layer."
        )
    part, band = place
    if headers[part].dtypes[band - 1] not in sensor.quality.dtypes:
        raise RejectedInput.at(
            f"/{part}",
            f"A quality layer of {sensor.id} holds whole numbers ({sensor.quality.dtypes[0]}); "
            f"this file holds others. Send the product's own ({sensor.quality.id.upper()}).",
            code="wrong-quality-layer",
        )


def _check_saturation(
    place: tuple[str, int] | None, headers: Mapping[str, Header], sensor: Sensor
) -> None:
    if place is None:
        return
    part, band = place
    if sensor.saturation is None:
        raise RejectedInput.at(
            f"/{part}",
            f"The profile {sensor.id} has no saturation layer to read this by. Leave it out.",
            code="wrong-quality-layer",
        )
    if headers[part].dtypes[band - 1] not in sensor.saturation.dtypes:
        raise RejectedInput.at(
            f"/{part}",
            f"A saturation layer of {sensor.id} holds whole numbers "
            f"({sensor.saturation.dtypes[0]}); this file holds others. Send the product's own "
            f"({sensor.saturation.id.upper()}).",
            code="wrong-quality-layer",
        )


def _check_feeds(bands: Mapping[str, Any]) -> None:
    if not any({role.value for role in index.roles} <= bands.keys() for index in WATCHED):
        raise RejectedInput(
            "no-index",
            "These bands feed none of the watched indices. Send at least red and nir, for NDVI; "
            "`GET /v1/indices` lists what each index needs.",
        )


def _digest(details: Mapping[str, Any], files: Mapping[str, str]) -> str:
    """Return the digest of a scene: its files, and its metadata without ref and replace."""
    told = json.dumps([details, files], sort_keys=True, ensure_ascii=False)
    return hashlib.sha256(told.encode()).hexdigest()
