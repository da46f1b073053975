"""Quality layers: which cells of a scene are usable, and why the others are not.

A *layer* is a product's own image of what each cell shows: of classes, as here, or of bits
(`quality_bits`). A *rule* says what of it is kept. A cell that is not kept is lost for one
reason, or for none if it is a clear surface that the rule merely doesn't want (water under
the rule ``land``).

Both kinds of layer have these rules, each by its own numbers: ``clear``, the default;
``strict``; ``land``; ``water``; ``snow``; and ``surface``, which is ``clear`` with the snow
left in, for measures of the snow itself.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from enum import StrEnum
from typing import Protocol

import numpy as np
from numpy.typing import NDArray


class Loss(StrEnum):
    """Why a cell is not usable."""

    CLOUD = "cloud"
    SHADOW = "shadow"
    SNOW = "snow"
    NODATA = "nodata"
    SATURATION = "saturation"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Judged:
    """What a quality layer says of cells.

    Attributes
    ----------
    usable
        True where the rule keeps the cell.
    lost
        For every reason a boolean array of the cells lost to it. The arrays are disjoint,
        and none of them holds a usable cell.
    water
        True where the layer says water, usable or not: evidence, not an obstruction.
    """

    usable: NDArray[np.bool_]
    lost: Mapping[Loss, NDArray[np.bool_]]
    water: NDArray[np.bool_]


class QualityLayer(Protocol):
    """What the rest of the service knows of a quality layer, of classes or of bits."""

    @property
    def id(self) -> str:
        """Short name of the layer."""

    @property
    def dtypes(self) -> tuple[str, ...]:
        """Data types in which a file may hold it, the product's own first.

        Wider than the product's own where a multi-band file forces one type on all bands.
        """

    @property
    def outside(self) -> int:
        """The number that stands for cells outside the layer; it counts as nodata."""

    @property
    def rules(self) -> Mapping[str, object]:
        """The rules by id."""

    def judge(self, values: NDArray[np.integer], rule: str) -> Judged:
        """Return which cells are usable under a rule, and what the others were lost to.

        Parameters
        ----------
        values
            Numbers of the layer, any shape, any integer type.
        rule
            Id of the rule to read them by.

        Returns
        -------
        Judged
            Boolean arrays of the same shape.
        """

    def unknown(self, values: NDArray[np.integer]) -> bool:
        """Return whether any value is none that this layer can have."""


@dataclass(frozen=True, slots=True, kw_only=True)
class QualityClass:
    """One class of a class layer.

    `name` is the product's own name of the class, `loss` the reason to give where a rule
    drops it, None for a clear surface.
    """

    value: int
    name: str
    loss: Loss | None


@dataclass(frozen=True, slots=True, kw_only=True)
class ClassRule:
    """Which classes are kept."""

    id: str
    keep: frozenset[int]


@dataclass(frozen=True, slots=True, kw_only=True)
class ClassLayer:
    """A quality layer of numbered classes: a `QualityLayer`.

    Attributes
    ----------
    id, dtypes, outside
        As in `QualityLayer`.
    classes
        Every class by its number, 0 to 65,535. A number that is none of these counts as
        nodata.
    water
        The numbers of the water classes.
    rules
        The rules by id.
    """

    id: str
    dtypes: tuple[str, ...]
    outside: int
    classes: Mapping[int, QualityClass]
    water: frozenset[int]
    rules: Mapping[str, ClassRule]

    def judge(self, values: NDArray[np.integer], rule: str) -> Judged:
        """Return which cells are usable under a rule, and what the others were lost to."""
        keep = self.rules[rule].keep
        known = sorted(self.classes)
        beyond = known[-1] + 1
        # Any number off the table has the row after the last class, which is no class.
        row_of = np.full(beyond + 1, len(known), dtype=np.intp)
        row_of[known] = np.arange(len(known))
        rows = row_of[np.where((values >= 0) & (values < beyond), values, beyond)]
        classes = [*(self.classes[value] for value in known), None]

        def where(chosen: list[bool]) -> NDArray[np.bool_]:
            return np.asarray(np.array(chosen, dtype=np.bool_)[rows])

        kept = [found is not None and found.value in keep for found in classes]
        losses = [Loss.NODATA if found is None else found.loss for found in classes]
        return Judged(
            usable=where(kept),
            lost={
                loss: where([not k and own is loss for k, own in zip(kept, losses, strict=True)])
                for loss in Loss
            },
            water=where([found is not None and found.value in self.water for found in classes]),
        )

    def unknown(self, values: NDArray[np.integer]) -> bool:
        """Return whether any value is not a class of this layer."""
        return not bool(np.isin(values, list(self.classes)).all())


def _classes(*rows: tuple[int, str, Loss | None]) -> dict[int, QualityClass]:
    return {value: QualityClass(value=value, name=name, loss=loss) for value, name, loss in rows}


def _rules(**kept: set[int]) -> dict[str, ClassRule]:
    return {id_: ClassRule(id=id_, keep=frozenset(values)) for id_, values in kept.items()}


# Legend: ESA, Sentinel-2 Level-2A product definition (scene classification), as published
# in the classification classes of catalogue items. The rules are our own choice: `clear`
# keeps water, because a flooded field must stay visible, and classes 2 and 7, because wet
# soil and burn scars are often put there (common practice, not a published figure).
SCL = ClassLayer(
    id="scl",
    dtypes=("uint8", "uint16", "int16"),
    outside=0,
    classes=_classes(
        (0, "NO_DATA", Loss.NODATA),
        (1, "SATURATED_OR_DEFECTIVE", Loss.SATURATION),
        (2, "CAST_SHADOWS", Loss.SHADOW),  # before baseline 04.00 DARK_AREA_PIXELS
        (3, "CLOUD_SHADOWS", Loss.SHADOW),
        (4, "VEGETATION", None),
        (5, "NOT_VEGETATED", None),
        (6, "WATER", None),
        (7, "UNCLASSIFIED", None),
        (8, "CLOUD_MEDIUM_PROBABILITY", Loss.CLOUD),
        (9, "CLOUD_HIGH_PROBABILITY", Loss.CLOUD),
        (10, "THIN_CIRRUS", Loss.CLOUD),
        (11, "SNOW_ICE", Loss.SNOW),
    ),
    water=frozenset({6}),
    rules=_rules(
        clear={2, 4, 5, 6, 7},
        strict={4, 5, 6},
        land={4, 5},
        water={6},
        snow={11},
        surface={2, 4, 5, 6, 7, 11},
    ),
)
