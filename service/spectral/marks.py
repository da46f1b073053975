"""What a quality rule says of each cell, as marks of one bit."""

from collections.abc import Iterable, Mapping
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from service.spectral.gathered import Gathered, Layer
from service.spectral.quality import Judged, Loss, QualityLayer

BITS: Final[Mapping[Loss | str, int]] = {
    "usable": 0,
    Loss.CLOUD: 1,
    Loss.SHADOW: 2,
    Loss.SNOW: 3,
    Loss.NODATA: 4,
    Loss.SATURATION: 5,
    "water": 6,
}
"""Which bit says what: usable, lost for one reason, or water beside either."""

USABLE: Final = np.uint8(1 << BITS["usable"])
_WATER: Final = np.uint8(1 << BITS["water"])
_CLOUD: Final = np.uint8(1 << BITS[Loss.CLOUD])
_NODATA: Final = np.uint8(1 << BITS[Loss.NODATA])
_SATURATION: Final = np.uint8(1 << BITS[Loss.SATURATION])
_LARGEST_TABLE: Final = 2**16
_LOST: Final = np.uint8(sum(1 << BITS[loss] for loss in Loss))


def cell_marks(scene: Gathered, quality: QualityLayer | None, rule: str) -> NDArray[np.uint8]:
    """Return the marks of every cell, by `BITS`, shape (cells,).

    Parameters
    ----------
    scene
        The cells; without a quality layer among them all are lost, if there should be one.
    quality
        How to read the quality layer, None for a scene without one.
    rule
        Id of the rule.
    """
    unseen = np.where(scene.saturated & ~scene.seen, _SATURATION, _NODATA)
    if quality is None:
        return np.where(scene.seen, USABLE, unseen)
    if scene.classes is None:
        return np.where(scene.seen, _NODATA, unseen)
    own = _marks_of(scene.classes, quality, rule)
    marks = np.where(scene.seen, scene.classes.spread(own, int(_NODATA)), unseen)
    if scene.near_cloud is not None:
        beside = scene.near_cloud & scene.seen & ((marks & _LOST) == 0)
        marks[beside] = (marks[beside] & _WATER) | _CLOUD
    return marks


def usable_by_any(
    numbers: NDArray[Any], quality: QualityLayer, rules: Iterable[str]
) -> NDArray[np.bool_]:
    """Return which numbers of a quality layer at least one of some rules keeps."""
    usable = np.zeros(len(numbers), dtype=np.bool_)
    for rule in rules:
        usable |= (_looked_up(numbers, quality, rule) & USABLE).view(np.bool_)
    return usable


def _marks_of(layer: Layer, quality: QualityLayer, rule: str) -> NDArray[np.uint8]:
    """Return the marks of a quality layer's numbers, for cells in which a band has one."""
    marks = _looked_up(layer.numbers, quality, rule)
    if layer.known is not None:
        marks[~layer.known] = _NODATA
    return marks


def _looked_up(numbers: NDArray[Any], quality: QualityLayer, rule: str) -> NDArray[np.uint8]:
    possible = 2 ** (8 * numbers.dtype.itemsize)
    if possible > len(numbers) or possible > _LARGEST_TABLE:
        return _marked(quality, numbers, rule)
    # As many numbers as a type has are judged once.
    unsigned = np.dtype(f"u{numbers.dtype.itemsize}")
    table = np.arange(possible, dtype=unsigned).view(numbers.dtype)
    marks: NDArray[np.uint8] = _marked(quality, table, rule)[numbers.view(unsigned)]
    return marks


def _marked(quality: QualityLayer, numbers: NDArray[Any], rule: str) -> NDArray[np.uint8]:
    judged: Judged = quality.judge(numbers, rule)
    marks = np.where(judged.usable, USABLE, np.uint8(0))
    for loss, lost in judged.lost.items():
        marks[lost] = 1 << BITS[loss]
    marks[judged.water] |= _WATER
    marks[numbers == quality.outside] = _NODATA
    return marks
