"""What the properties of a STAC Item say of the whole scene: sensor, time, tile, processing."""

import re
from typing import Final

from service.products.pointed import Node
from service.products.stac_assets import the_one
from service.spectral.sensors import LANDSAT_C2_L2, SENTINEL_2_L2A, Sensor

_SENSORS: Final = (SENTINEL_2_L2A, LANDSAT_C2_L2)
_SENTINEL_2: Final = "sentinel-2"
_BASELINE: Final = re.compile(r"[0-9]{2}\.[0-9]{2}")
_LEVEL_1: Final = re.compile(r"L(?:EVEL)?[-_ ]?[01]|MSI1", re.IGNORECASE)
_LEVELS: Final = ("processing:level", "s2:product_type", "landsat:correction")
_MGRS: Final = re.compile(r"(?:MGRS-|T)?([0-9]{1,2}[C-HJ-NP-X][A-HJ-NP-Z]{2})", re.IGNORECASE)
_WRS: Final = re.compile(r"WRS[12]-([0-9]{6})", re.IGNORECASE)


def sensor_of(properties: Node) -> tuple[Sensor, str | None]:
    """Return the sensor's profile on the Item's platform, and the platform's name here.

    Raises
    ------
    RejectedInput
        No profile knows the platform, or nothing names it (``unknown-sensor``).
    """
    node = properties.member("platform")
    platform = re.sub(r"[_ ]", "-", (node.text() or "").lower())
    for sensor in _SENSORS:
        if platform in sensor.platforms:
            return sensor.on(platform), platform
    if not platform and properties.member("constellation").text() == _SENTINEL_2:
        return SENTINEL_2_L2A, None
    known = ", ".join(name for sensor in _SENSORS for name in sensor.platforms)
    raise node.refused(
        f"Items are read whose `platform` is one of {known}. Scenes of other sensors are posted as "
        "files, with `sensor` and `scaling`.",
        code="unknown-sensor",
    )


def check_level(properties: Node, sensor: Sensor) -> None:
    """Refuse an Item that says it is another product of the sensor.

    Raises
    ------
    RejectedInput
        It is one of Level-1, or of another collection than the second.
    """
    for name in _LEVELS:
        node = properties.member(name)
        if _LEVEL_1.search(node.text() or ""):
            raise node.refused(
                f"This is a product of Level-1; {sensor.title} holds surface reflectance. Send the "
                "Item of the Level-2 product.",
                code="unknown-sensor",
            )
    collection = properties.member("landsat:collection_number")
    if collection.value not in (None, "02", "2", 2):
        raise collection.refused(
            "Landsat scenes are read from Collection 2, whose numbers scale otherwise than those "
            "of Collection 1. Send the Item of Collection 2.",
            code="unknown-sensor",
        )


def acquired_at(properties: Node) -> str:
    """Return when the scene was acquired, as the Item writes it.

    Raises
    ------
    RejectedInput
        The Item has no one instant.
    """
    node = properties.member("datetime")
    text = node.text()
    if text is not None:
        return text
    if not properties.member("start_datetime").is_missing:
        raise node.refused(
            "This Item is about a period, from `start_datetime` to `end_datetime`. A scene is "
            "acquired at one instant; give it as `datetime`. Composites of several scenes are not "
            "taken."
        )
    raise node.refused("The instant of acquisition must stand here, as RFC 3339 date-time.")


def tile_of(properties: Node) -> str | None:
    """Return the tile as the agencies' products name it, None if it is not said.

    That is T and the square of the military grid (T33UVR), or path and row (190026); another
    grid's code stays as it is.
    """
    code = properties.member("grid:code").text()
    if code is not None and (match := _WRS.fullmatch(code)):
        return match[1]
    squares = (code, properties.member("s2:mgrs_tile").text(), _mgrs(properties))
    square = next((text for text in squares if text is not None), None)
    if square is None:
        return _path_and_row(properties)
    match = _MGRS.fullmatch(square)
    return f"T{match[1].upper().zfill(5)}" if match else square


def _path_and_row(properties: Node) -> str | None:
    numbers = []
    for name in ("landsat:wrs_path", "landsat:wrs_row"):
        text = _digits(properties.member(name))
        if text is None:
            return None
        numbers.append(text.zfill(3))
    return "".join(numbers)


def _mgrs(properties: Node) -> str | None:
    zone = _digits(properties.member("mgrs:utm_zone"))
    band = properties.member("mgrs:latitude_band").text()
    square = properties.member("mgrs:grid_square").text()
    return f"{zone}{band}{square}" if zone and band and square else None


def _digits(node: Node) -> str | None:
    """Return a whole number as text, whether it was written as one or as text."""
    if node.is_missing:
        return None
    text = str(node.value)
    if isinstance(node.value, bool) or not re.fullmatch(r"[0-9]{1,3}", text):
        raise node.refused("A whole number of up to three digits must stand here.")
    return text


def baseline_of(properties: Node, sensor: Sensor) -> str | None:
    """Return the processing baseline, None if none is said or the sensor has none.

    Raises
    ------
    RejectedInput
        It is not written as one, or is said twice and differently.
    """
    if sensor.id != SENTINEL_2_L2A.id:
        return None
    said = [node for name, node in properties.named() if name.endswith(":processing_baseline")]
    baseline = the_one(said, Node.text, "processing baseline")
    if baseline is None:
        version = properties.member("processing:version").value
        is_baseline = isinstance(version, str) and _BASELINE.fullmatch(version)
        return str(version) if is_baseline else None
    if not _BASELINE.fullmatch(baseline):
        raise said[0].refused(
            "A processing baseline is two digits, a point and two digits, such as 05.10."
        )
    return baseline
