"""What a band of a STAC Item measures: by its common name, then its own name, then wavelength.

Common names are those of the eo extension, versions 1.1 and 2.0. In the wild three bands are
all called ``rededge``, both near-infrared bands of one instrument ``nir``, and the one of an
instrument that has a broad one alone ``nir08``: such a name is narrowed by what else is said.
"""

import re
from dataclasses import dataclass
from typing import Final

from service.products.pointed import Node
from service.products.stac_assets import CONTRADICTS, Asset, AssetBand, the_one
from service.spectral.gathered import QUALITY, SATURATION
from service.spectral.roles import BandRole
from service.spectral.sensors import Sensor

_R = BandRole
_LOOSE: Final = {
    "rededge": (_R.REDEDGE071, _R.REDEDGE075, _R.REDEDGE078),
    "nir": (_R.NIR, _R.NIR08),
    "lwir": (_R.LWIR11,),
}
"""Common names that fit several bands, or are of an older vocabulary."""
_NUMBERED: Final = re.compile(r"(?:.*_)?b0?([0-9]{1,2}a?)", re.IGNORECASE)


@dataclass(frozen=True, slots=True, kw_only=True)
class Resolved:
    """A band with its part (a role, ``quality`` or ``saturation``), and what told it."""

    part: str
    by: str
    band: AssetBand
    asset: Asset


def parts_of(asset: Asset, sensor: Sensor) -> list[Resolved]:
    """Return those bands of an asset that a scene of the sensor takes.

    Raises
    ------
    RejectedInput
        A band's common name and its own name are of two different bands.
    """
    found = []
    for band in asset.bands:
        told = _part(asset, band, sensor)
        if told is not None:
            part, by = told
            found.append(Resolved(part=part, by=by, band=band, asset=asset))
    return found


def _part(asset: Asset, band: AssetBand, sensor: Sensor) -> tuple[str, str] | None:
    name = the_one(band.names, Node.text, "name")
    if (layer := _layer(name, sensor)) is not None:
        return layer, "band name"
    is_alone = len(asset.bands) == 1
    if is_alone and (layer := _layer(asset.stem, sensor)) is not None:
        return layer, "asset key"
    common = the_one(band.said("eo", "common_name")[0], Node.text, "common name")
    centre_um = the_one(band.said("eo", "center_wavelength")[0], Node.number, "wavelength")
    candidates = _by_common(common, sensor)
    named = _by_name(name, sensor)
    if candidates and named and not set(candidates) & set(named):
        raise next(iter(band.names)).refused(
            "By its common name this band is another one than by its name; correct the wrong one.",
            code=CONTRADICTS,
        )
    told = _narrowed(common, candidates, named, _by_wavelength(centre_um, sensor))
    if told is None and is_alone and not candidates and (keyed := _by_name(asset.stem, sensor)):
        told = keyed[0], "asset key"
    return None if told is None else (told[0].value, told[1])


def _narrowed(
    common: str | None,
    candidates: tuple[BandRole, ...],
    named: tuple[BandRole, ...],
    measured: tuple[BandRole, ...],
) -> tuple[BandRole, str] | None:
    """Return the role that what is said of a band leaves, and what told it."""
    if len(candidates) == 1:
        return candidates[0], "common name"
    for others, by in ((named, "band name"), (measured, "wavelength")):
        left = [role for role in others if not candidates or role in candidates]
        if left:
            return left[0], "common name" if left[0].value == common else by
    own = next((role for role in candidates if role.value == common), None)
    return None if own is None else (own, "common name")


def _layer(name: str | None, sensor: Sensor) -> str | None:
    """Return which of the sensor's layers a name is, if it is one."""
    told = (name or "").lower()
    if sensor.quality is not None and told == sensor.quality.id:
        return QUALITY
    if sensor.saturation is not None and told == sensor.saturation.id:
        return SATURATION
    return None


def _by_common(common: str | None, sensor: Sensor) -> tuple[BandRole, ...]:
    """Return the roles of the sensor that a common name may mean."""
    if common is None:
        return ()
    told = common.lower()
    if told == _R.NIR08 and _R.NIR08 not in sensor.roles:
        return (_R.NIR,)
    loose = _LOOSE.get(told) or tuple(role for role in BandRole if role.value == told)
    return tuple(role for role in loose if role in sensor.roles)


def _by_name(name: str | None, sensor: Sensor) -> tuple[BandRole, ...]:
    """Return the role of the band with this name, as the product or as a common name says it."""
    number = _number(name or "")
    if number is None:
        return _by_common(name, sensor)
    return tuple(band.role for band in sensor.bands if _number(band.name) == number)


def _number(name: str) -> str | None:
    """Return a band's number: B04, B4, SR_B4 and OLI_B4 are all the fourth."""
    match = _NUMBERED.fullmatch(name)
    return match[1].lower() if match else None


def _by_wavelength(centre_um: float | None, sensor: Sensor) -> tuple[BandRole, ...]:
    """Return the role whose centre is nearest, if the wavelength is in its band."""
    if centre_um is None:
        return ()
    nearest = min(sensor.bands, key=lambda band: abs(band.centre_um - centre_um))
    is_inside = abs(nearest.centre_um - centre_um) <= nearest.width_um / 2
    return (nearest.role,) if is_inside else ()
