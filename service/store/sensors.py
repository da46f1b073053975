"""Sensors: the built-in ones, and profiles of one's own by version.

A version is never changed. A scene names the one that it was received under, so that
whatever measures it again reads it the same way.
"""

from collections.abc import Mapping, Sequence
from datetime import datetime
from typing import Any, Final

from sqlalchemy import func, select
from sqlalchemy.orm import Session

from service.errors import Conflict, NotFound
from service.spectral.profiles import sensor_from
from service.spectral.sensors import SENSORS, Sensor
from service.store.sensor_tables import SensorProfile
from service.store.sessions import serialise

SENSOR_VERSION: Final = "sensor_version"
"""Member of a scene's details: the version of its profile, unless that is built in."""


def find_sensor(session: Session, sensor_id: str, *, version: int | None = None) -> Sensor | None:
    """Return a sensor, built in or by its profile's version (the newest unless one is named)."""
    if sensor_id in SENSORS:
        return SENSORS[sensor_id] if version is None else None
    row = find_profile(session, sensor_id, version=version)
    return None if row is None else sensor_in(row)


def sensor_in(row: SensorProfile) -> Sensor:
    """Return the sensor that a version of a profile describes."""
    return sensor_from(row.sensor, row.version, row.document)


def sensor_of_scene(session: Session, sensor_id: str, details: Mapping[str, Any]) -> Sensor:
    """Return a scene's sensor by the version that it was received under, on its platform.

    Raises
    ------
    NotFound
        There is none such.
    RejectedInput
        The platform has to be named, and is not one that the profile knows.
    """
    sensor = find_sensor(session, sensor_id, version=details.get(SENSOR_VERSION))
    if sensor is None:
        raise sensor_not_found()
    return sensor.on(details.get("platform"))


def sensor_not_found() -> NotFound:
    """Return the error for a sensor, or a version, that is not there."""
    return NotFound("unknown-sensor", "There is no sensor with this id, or not this version.")


def find_profile(
    session: Session, sensor_id: str, *, version: int | None = None
) -> SensorProfile | None:
    """Return a version of a profile, the newest unless one is named."""
    query = select(SensorProfile).where(SensorProfile.sensor == sensor_id)
    if version is not None:
        query = query.where(SensorProfile.version == version)
    return session.scalar(query.order_by(SensorProfile.version.desc()).limit(1))


def list_profiles(session: Session) -> Sequence[SensorProfile]:
    """Return the newest version of each profile, by sensor."""
    newest = (
        select(SensorProfile.sensor, func.max(SensorProfile.version).label("version"))
        .group_by(SensorProfile.sensor)
        .subquery()
    )
    query = select(SensorProfile).join(
        newest,
        (SensorProfile.sensor == newest.c.sensor) & (SensorProfile.version == newest.c.version),
    )
    return session.scalars(query.order_by(SensorProfile.sensor)).all()


def keep_profile(
    session: Session, sensor_id: str, document: Mapping[str, Any], *, at: datetime
) -> tuple[SensorProfile, bool]:
    """Keep a profile as a new version; return its row, and whether it is new.

    What says the same as the newest version adds none.

    Raises
    ------
    Conflict
        The id belongs to a built-in sensor.
    RejectedInput
        The profile contradicts itself.
    """
    if sensor_id in SENSORS:
        raise Conflict(
            "sensor-built-in",
            "This id belongs to a sensor that comes with the service and can't be changed. Send "
            "your profile under another id; it can name the same quality layer.",
        )
    serialise(session, "sensors")
    newest = find_profile(session, sensor_id)
    if newest is not None and newest.document == dict(document):
        return newest, False
    version = 1 if newest is None else newest.version + 1
    sensor_from(sensor_id, version, document)
    row = SensorProfile(sensor=sensor_id, version=version, document=dict(document), recorded_at=at)
    session.add(row)
    session.flush()
    return row, True
