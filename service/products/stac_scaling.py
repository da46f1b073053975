"""How the numbers of a STAC Item's bands scale, and what the Item must not say about it.

An Item is read by its own scale and offset (raster extension 1.1 and 2.0: value = number *
scale + offset), else by a flag that says whether the agency's offset was applied to the
numbers already, else not at all. The processing baseline alone is not enough, since catalogues
publish the same baseline with the offset left in and taken out; but it contradicts what can't
be true.
"""

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Final

from service.errors import Fault, RejectedInput
from service.products.pointed import Node, same
from service.products.stac_assets import CONTRADICTS, AssetBand, the_one
from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling
from service.spectral.sensors import UNKNOWN_OFFSET, Sensor

_APPLIED: Final = "boa_offset_applied"
# ESA, BOA_QUANTIFICATION_VALUE 10,000: the same in every published baseline.
_QUANTUM: Final = 1e-4


@dataclass(frozen=True, slots=True, kw_only=True)
class Known:
    """What an Item says for all of its bands.

    `baseline` is the processing baseline; `is_applied` whether the offset is in the numbers
    no more; both None if nothing is said.
    """

    sensor: Sensor
    baseline: str | None
    is_applied: bool | None


def flag_of(properties: Node) -> bool | None:
    """Return what a property ``…:boa_offset_applied`` says, None if there is none.

    Raises
    ------
    RejectedInput
        Two of them say different things.
    """
    said: bool | None = None
    for name, node in _suffixed(properties, _APPLIED):
        flag = node.flag()
        if said is not None and flag is not None and flag is not said:
            raise properties.member(name).refused(
                "Two flags say different things of the offset; correct the wrong one.",
                code=CONTRADICTS,
            )
        said = said if flag is None else flag
    return said


def _suffixed(properties: Node, suffix: str) -> Iterable[tuple[str, Node]]:
    for name, node in properties.named():
        if name == suffix or name.endswith(f":{suffix}"):
            yield name, node


def scaling_sent(
    bands: Mapping[BandRole, AssetBand], known: Known
) -> dict[str, float] | dict[str, dict[str, float]] | None:
    """Return the scaling to send with a scene; None where it is the published one.

    Raises
    ------
    RejectedInput
        An offset can't be known (``unknown-offset``), or what is said of it can't be true
        (``item-contradicts``).
    """
    found: dict[BandRole, Scaling] = {}
    unknown = []
    for role, band in bands.items():
        try:
            found[role] = _scaling(role, band, known)
        except _NotKnown:
            unknown.append(Fault(pointer=band.node.pointer, detail=_UNKNOWN))
    if unknown:
        raise RejectedInput(UNKNOWN_OFFSET, _UNKNOWN, unknown)
    if all(scaling == _published(role, known) for role, scaling in found.items()):
        return None
    reflective = [role for role in found if _is_reflectance(role, known)]
    first = found[reflective[0]]
    for role in reflective:
        if found[role] != first:
            raise bands[role].node.refused(
                "This band scales otherwise than the bands before it, where all bands of this "
                "sensor scale alike; correct its scale or offset.",
                code=CONTRADICTS,
            )
    return {"scale": first.scale, "offset": first.offset}


class _NotKnown(Exception):
    """Nothing tells the offset."""


_UNKNOWN: Final = (
    "Nothing in the Item tells this band's offset. State `raster:scale` and `raster:offset` for it "
    "(`scale` and `offset` in `raster:bands`), or the property `…:boa_offset_applied`; the "
    "processing baseline alone does not tell whether the offset is still in the numbers."
)


def _is_reflectance(role: BandRole, known: Known) -> bool:
    band = known.sensor.band(role)
    return band is None or band.unit == "reflectance"


def _published(role: BandRole, known: Known) -> Scaling | None:
    try:
        return known.sensor.scaling(role, processing_baseline=known.baseline)
    except RejectedInput:
        return None


def _scaling(role: BandRole, band: AssetBand, known: Known) -> Scaling:
    (scale, at_scale), (offset, at_offset) = _own(band, "scale"), _own(band, "offset")
    if scale is not None and scale <= 0:
        raise at_scale.refused("A scale is above 0.")
    by_baseline = known.sensor.saturation is None
    published = _published(role, known)
    if by_baseline and known.is_applied:
        # What was published holds no more: the offset was taken out of the numbers.
        published = Scaling(scale=_QUANTUM, offset=0.0)
    if published is not None:
        _check(scale, published.scale, at_scale, _WRONG_SCALE)
        wrong = _STATED_TWICE if by_baseline and known.is_applied else _WRONG_OFFSET
        _check(offset, published.offset, at_offset, wrong)
        if by_baseline and offset is None and known.is_applied is None:
            raise _NotKnown
        return published
    if offset is None or (scale is None and not by_baseline):
        raise _NotKnown
    return Scaling(scale=_QUANTUM if scale is None else scale, offset=offset)


_WRONG_SCALE: Final = (
    "This scale is not the one that the agency publishes for this product. If the numbers were "
    "made anew, the scene is one of the sensor `generic`: post its files with their scaling."
)
_WRONG_OFFSET: Final = (
    "This offset is not the one that the agency publishes for this product and processing "
    "baseline, and no flag (`…:boa_offset_applied` true) says that it was applied to the numbers "
    "already. Correct the offset, or state the flag."
)
_STATED_TWICE: Final = (
    "The Item says that the offset was applied to the numbers, and states another one to be added "
    "still. Correct the flag or the offset."
)


def _check(said: float | None, published: float, place: Node, detail: str) -> None:
    if said is not None and not same(said, published):
        raise place.refused(detail, code=CONTRADICTS)


def _own(band: AssetBand, field: str) -> tuple[float | None, Node]:
    """Return a number that is said of a band, and where; the nearest word counts."""
    near, far = band.said("raster", field)
    said = the_one(near, Node.number, field)
    place = next((node for node in near if not node.is_missing), far)
    return (far.number() if said is None else said), place


def check_nodata(bands: Mapping[BandRole, AssetBand], sensor: Sensor) -> None:
    """Refuse another number for "no data" than that of the sensor's product.

    Raises
    ------
    RejectedInput
        At the number (``item-contradicts``).
    """
    for band in bands.values():
        near, far = band.said("", "nodata")
        said = the_one(near, Node.nodata, "nodata")
        place = next((node for node in near if not node.is_missing), far)
        said = far.nodata() if said is None else said
        if said is not None and sensor.nodata is not None and not same(said, sensor.nodata):
            raise place.refused(
                f"In this product {sensor.nodata:g} means that there is nothing; the Item says "
                "another number. Correct it, or post the files as sensor `generic` with their own.",
                code=CONTRADICTS,
            )
