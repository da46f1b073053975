"""Quality layers whose numbers are made of bits, and bits that tell of saturated bands.

A number is never compared as a whole: the published tables list the usual ones, but others
occur in distributed scenes, and a rule that names whole numbers would lose or keep them by
accident. Rules ask for single bits and for confidence pairs.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from service.spectral.quality import Judged, Loss

Integers = NDArray[np.integer]


@dataclass(frozen=True, slots=True, kw_only=True)
class BitField:
    """Some neighbouring bits of a number, from `bit` (the lowest is 0) on.

    `loss` is the reason to give where a rule drops a cell for this field, None for a clear
    surface that a rule doesn't want.
    """

    name: str
    bit: int
    width: int = 1
    loss: Loss | None = None

    def of(self, values: Integers) -> Integers:
        """Return the field's own number in each value, from 0 to 2 ** width - 1."""
        return (values >> self.bit) & ((1 << self.width) - 1)


@dataclass(frozen=True, slots=True, kw_only=True)
class Drop:
    """What a rule drops: cells where a field is `at_least` so high, for the field's reason."""

    field: BitField
    at_least: int = 1


@dataclass(frozen=True, slots=True, kw_only=True)
class BitRule:
    """What is kept: cells that nothing in `drop` hits and that have every bit in `need`.

    Where several entries of `drop` hit, the first names the reason.
    """

    id: str
    drop: tuple[Drop, ...]
    need: tuple[BitField, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class BitLayer:
    """A quality layer of bits: a `QualityLayer`.

    Attributes
    ----------
    id, dtypes
        As in `service.spectral.quality.QualityLayer`.
    outside
        As there.
    silent
        Numbers that say nothing of their cell, which count as nodata.
    width
        How many bits a number has.
    fields
        What the bits mean, by name; rules are made of these.
    fill
        The bit of a cell without data, None if that is told by a whole number. It stands
        alone: a number that has it and is not `outside` is none of this layer.
    water
        The field of a water cell, None if the layer tells of no water.
    rules
        The rules by id.
    """

    id: str
    dtypes: tuple[str, ...]
    outside: int
    silent: frozenset[int]
    width: int
    fields: Mapping[str, BitField]
    fill: BitField | None
    water: BitField | None
    rules: Mapping[str, BitRule]

    def judge(self, values: Integers, rule: str) -> Judged:
        """Return which cells are usable under a rule, and what the others were lost to.

        A silent number counts as nodata, as does one that the layer cannot have.
        """
        chosen = self.rules[rule]
        told = self._possible(values) & ~np.isin(values, list(self.silent))
        lost = {loss: np.zeros(values.shape, dtype=np.bool_) for loss in Loss}
        lost[Loss.NODATA] |= ~told
        usable = told.copy()
        for entry in chosen.drop:
            hit = usable & (entry.field.of(values) >= entry.at_least)
            usable &= ~hit
            if entry.field.loss is not None:
                lost[entry.field.loss] |= hit
        for field in chosen.need:
            usable &= field.of(values) > 0
        none = np.zeros(values.shape, dtype=np.bool_)
        water = none if self.water is None else told & (self.water.of(values) > 0)
        return Judged(usable=usable, lost=lost, water=water)

    def unknown(self, values: Integers) -> bool:
        """Return whether any value is none that this layer can have."""
        return not bool(self._possible(values).all())

    def _possible(self, values: Integers) -> NDArray[np.bool_]:
        whole = (values >= 0) & (values < (1 << self.width))
        if self.fill is None:
            return np.asarray(whole)
        return np.asarray(whole & ((self.fill.of(values) == 0) | (values == self.outside)))


@dataclass(frozen=True, slots=True, kw_only=True)
class SaturationLayer:
    """A product's layer of bits, one for each band that is saturated in a cell.

    Attributes
    ----------
    id
        Short name of the layer.
    dtypes
        Data types in which a file may hold it, the product's own first.
    width
        How many bits can be set; which is whose is said by the bands of the sensor.
    """

    id: str
    dtypes: tuple[str, ...]
    width: int

    def unknown(self, values: Integers) -> bool:
        """Return whether any value is none that this layer can have."""
        return not bool(((values >= 0) & (values < (1 << self.width))).all())


_FILL: Final = BitField(name="fill", bit=0, loss=Loss.NODATA)
_DILATED_CLOUD: Final = BitField(name="dilated_cloud", bit=1, loss=Loss.CLOUD)
_CIRRUS: Final = BitField(name="cirrus", bit=2, loss=Loss.CLOUD)
_CLOUD: Final = BitField(name="cloud", bit=3, loss=Loss.CLOUD)
_SHADOW: Final = BitField(name="cloud_shadow", bit=4, loss=Loss.SHADOW)
_SNOW: Final = BitField(name="snow", bit=5, loss=Loss.SNOW)
_WATER: Final = BitField(name="water", bit=7)
_CLOUD_CONFIDENCE: Final = BitField(name="cloud_confidence", bit=8, width=2, loss=Loss.CLOUD)
_SHADOW_CONFIDENCE: Final = BitField(
    name="cloud_shadow_confidence", bit=10, width=2, loss=Loss.SHADOW
)
_SNOW_CONFIDENCE: Final = BitField(name="snow_confidence", bit=12, width=2, loss=Loss.SNOW)
_CIRRUS_CONFIDENCE: Final = BitField(name="cirrus_confidence", bit=14, width=2, loss=Loss.CLOUD)
_MEDIUM: Final = 2
_HIGH: Final = 3

_NO_DATA = (Drop(field=_FILL),)
_CLOUD_BITS = tuple(Drop(field=field) for field in (_CLOUD, _DILATED_CLOUD, _CIRRUS))
_CLOUD_SURE = tuple(
    Drop(field=field, at_least=_HIGH) for field in (_CLOUD_CONFIDENCE, _CIRRUS_CONFIDENCE)
)
_CLOUD_LIKELY = (Drop(field=_CLOUD_CONFIDENCE, at_least=_MEDIUM),)
_SHADOW_BIT = (Drop(field=_SHADOW),)
_SHADOW_SURE = (Drop(field=_SHADOW_CONFIDENCE, at_least=_HIGH),)
_SNOW_BIT = (Drop(field=_SNOW),)
_SNOW_SURE = (Drop(field=_SNOW_CONFIDENCE, at_least=_HIGH),)

_IN_VIEW = (*_NO_DATA, *_CLOUD_BITS, *_CLOUD_SURE, *_SHADOW_BIT, *_SHADOW_SURE)
_CLEAR = (*_IN_VIEW, *_SNOW_BIT, *_SNOW_SURE)


def _rules(*rules: BitRule) -> dict[str, BitRule]:
    return {rule.id: rule for rule in rules}


# Bits and pairs: USGS, Landsat Collection 2 Level-2 data format control books LSDS-1619
# (Landsat 8 and 9) and LSDS-1618 (Landsat 4 to 7). Bit 6, "clear", is not among the fields:
# the published value tables contradict its text (dilated cloud over land, 21826, has it set;
# clear water, 21888, has not), so nothing may rest on it. The rules are our own choice, and
# as with classes `clear` keeps water. The pairs are asked beside the bits because they do not
# always agree: 57240 has a high confidence of cirrus and no cirrus bit.
QA_PIXEL: Final = BitLayer(
    id="qa_pixel",
    dtypes=("uint16", "uint32", "int32"),
    outside=1,
    silent=frozenset({0}),  # real numbers state at least a low confidence
    width=16,
    fields={
        field.name: field
        for field in (
            _FILL,
            _DILATED_CLOUD,
            _CIRRUS,
            _CLOUD,
            _SHADOW,
            _SNOW,
            _WATER,
            _CLOUD_CONFIDENCE,
            _SHADOW_CONFIDENCE,
            _SNOW_CONFIDENCE,
            _CIRRUS_CONFIDENCE,
        )
    },
    fill=_FILL,
    water=_WATER,
    rules=_rules(
        BitRule(id="clear", drop=_CLEAR),
        BitRule(id="strict", drop=(*_NO_DATA, *_CLOUD_LIKELY, *_CLEAR)),
        BitRule(id="land", drop=(*_CLEAR, Drop(field=_WATER))),
        BitRule(
            id="water",
            drop=(*_NO_DATA, *_CLOUD_BITS, *_SHADOW_BIT, *_SNOW_BIT),
            need=(_WATER,),
        ),
        BitRule(id="snow", drop=(*_NO_DATA, *_CLOUD_BITS, *_SHADOW_BIT), need=(_SNOW,)),
        BitRule(id="surface", drop=_IN_VIEW),
    ),
)

# From memory of the same two books: bit n - 1 for band n, bits 0 to 6 for bands 1 to 7; above
# them bit 8 (high gain of ETM+ band 6; cirrus band of OLI), 9 (dropped pixel of TM and ETM+)
# and 11 (terrain occlusion of OLI), which are no band that is measured here.
QA_RADSAT: Final = SaturationLayer(id="qa_radsat", dtypes=("uint16", "uint32", "int32"), width=12)
