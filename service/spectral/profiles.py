"""Sensor profiles of one's own: from a document to a `Sensor`.

A document has the members of ``PUT /v1/sensors/{id}``; their types and bounds are checked
where it comes in, and what they mean together is checked here, each time it is read.
"""

from collections.abc import Mapping, Sequence
from typing import Any, Final

from service.errors import Fault, RejectedInput
from service.spectral.bands import Band
from service.spectral.profile_quality import checked_layer
from service.spectral.quality_bits import SaturationLayer
from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling
from service.spectral.sensors import UNKNOWN_OFFSET, Sensor

_R = BandRole
_RED_EDGE: Final = (0.70, 0.79)
# STAC electro-optical extension 1.0.0, common band names, micrometres. That version has one
# range for all bands of the red edge.
_RANGES_UM: Final[Mapping[BandRole, tuple[float, float]]] = {
    _R.COASTAL: (0.40, 0.45),
    _R.BLUE: (0.45, 0.50),
    _R.GREEN: (0.50, 0.60),
    _R.RED: (0.60, 0.70),
    _R.REDEDGE071: _RED_EDGE,
    _R.REDEDGE075: _RED_EDGE,
    _R.REDEDGE078: _RED_EDGE,
    _R.NIR: (0.75, 1.00),
    _R.NIR08: (0.75, 0.90),
    _R.SWIR16: (1.55, 1.75),
    _R.SWIR22: (2.10, 2.30),
    _R.LWIR11: (10.5, 11.5),
}
_SATURATION_TYPES: Final = {"uint8": 8, "uint16": 16, "int16": 15, "uint32": 32, "int32": 31}
"""Bits that the types can hold."""


def sensor_from(sensor_id: str, version: int, profile: Mapping[str, Any]) -> Sensor:
    """Return the sensor that a profile describes.

    A profile whose one near-infrared band is called ``nir08`` has it as ``nir``, as scenes
    do.

    Raises
    ------
    RejectedInput
        With a fault at each place of the document that contradicts another or can't be meant.
    """
    faults: list[Fault] = []
    bands = _bands(profile, faults)
    quality = checked_layer(profile.get("quality"), faults)
    rule = profile.get("quality_rule")
    if rule is not None and quality is None and profile.get("quality") is None:
        faults.append(_fault("/quality_rule", "Without a quality layer there is no rule for it."))
    if quality is not None and (rule or "clear") not in quality.rules:
        faults.append(_unknown_rule(quality.rules))
    saturated = profile.get("saturated")
    if saturated is not None and saturated == profile.get("nodata"):
        faults.append(_fault("/saturated", "One number can't be both nodata and saturated."))
    if faults:
        raise RejectedInput("invalid-input", _told(faults), faults)
    return Sensor(
        id=sensor_id,
        title=profile["title"],
        bands=bands,
        quality=quality,
        quality_rule=rule or "clear",
        saturation=_saturation(bands),
        nodata=profile.get("nodata"),
        saturated=saturated,
        published=_must_be_sent,
        version=version,
    )


def _fault(pointer: str, detail: str) -> Fault:
    return Fault(pointer=pointer, detail=detail)


def _told(faults: Sequence[Fault]) -> str:
    if len(faults) == 1:
        return faults[0].detail
    return f"{len(faults)} things are wrong; see `errors`. Nothing was kept."


def _unknown_rule(rules: Mapping[str, object]) -> Fault:
    return _fault(
        "/quality_rule",
        f"The layer has no such rule; it has {', '.join(rules)}. Name one of them (left out, it "
        "is `clear`).",
    )


def _bands(profile: Mapping[str, Any], faults: list[Fault]) -> tuple[Band, ...]:
    sent = profile["bands"]
    roles = [BandRole(band["role"]) for band in sent]
    has_two = {_R.NIR, _R.NIR08} <= set(roles)
    faults += _scaled_for_nothing(profile.get("scaling") or {}, roles)
    bands = []
    for place, (band, role) in enumerate(zip(sent, roles, strict=True)):
        pointer = f"/bands/{place}"
        if role in roles[:place]:
            faults.append(_fault(f"{pointer}/role", "Another band has this role; send each once."))
        faults += _misplaced(band, role, pointer)
        bands.append(
            Band(
                role=role if has_two or role is not _R.NIR08 else _R.NIR,
                name=band.get("name") or role.value,
                centre_um=band["centre_um"],
                width_um=band["width_um"],
                gsd_m=band.get("gsd_m"),
                unit=_unit(role),
                scaling=_scaling(profile, band, role, pointer, faults),
                saturation_bit=band.get("saturation_bit"),
            )
        )
    return tuple(bands)


def _scaled_for_nothing(scaling: Mapping[str, Any], roles: Sequence[BandRole]) -> list[Fault]:
    """Return the faults of scalings by role whose band the profile does not have."""
    named = () if "scale" in scaling else scaling
    detail = "The profile has no band of this role; leave the scaling out, or add the band."
    return [_fault(f"/scaling/{role}", detail) for role in named if role not in roles]


def _unit(role: BandRole) -> str:
    return "kelvin" if role is _R.LWIR11 else "reflectance"


def _misplaced(band: Mapping[str, Any], role: BandRole, pointer: str) -> list[Fault]:
    """Return the fault of a band that lies nowhere near what its role means."""
    centre, half = band["centre_um"], band["width_um"] / 2
    low, high = _RANGES_UM[role]
    if centre + half >= low and centre - half <= high:
        return []
    return [
        _fault(
            f"{pointer}/centre_um",
            f"A band {role} lies at {low} to {high} micrometres, and this one does not touch "
            "that. Check role, centre and width, and that they are in micrometres.",
        )
    ]


def _scaling(
    profile: Mapping[str, Any],
    band: Mapping[str, Any],
    role: BandRole,
    pointer: str,
    faults: list[Fault],
) -> Scaling | None:
    """Return a band's scaling: its own, else that of its role, else that of all reflectances."""
    for_all = profile.get("scaling") or {}
    is_one = "scale" in for_all
    own, of_role = band.get("scaling"), None if is_one else for_all.get(role.value)
    if own is not None and of_role is not None:
        faults.append(
            _fault(f"{pointer}/scaling", "This band's scaling is in `/scaling` too; send it once.")
        )
    found = own or of_role or (for_all if is_one and _unit(role) == "reflectance" else None)
    return Scaling(scale=found["scale"], offset=found["offset"]) if found else None


def _saturation(bands: Sequence[Band]) -> SaturationLayer | None:
    bits = [band.saturation_bit for band in bands if band.saturation_bit is not None]
    if not bits:
        return None
    fitting = {name: held for name, held in _SATURATION_TYPES.items() if held > max(bits)}
    # Bits of bands that the profile does not have may be set as well.
    return SaturationLayer(id="saturation", dtypes=tuple(fitting), width=32)


def _must_be_sent(_baseline: str | None) -> Scaling:
    raise RejectedInput.at(
        "/scene/scaling",
        "The profile of this sensor has no scaling for all of these bands, so the scene has to "
        "bring it: send `scaling`, with `scale` and `offset` or one such object for each band "
        "role, where reflectance (of `lwir11` kelvin) = number * scale + offset.",
        code=UNKNOWN_OFFSET,
    )
