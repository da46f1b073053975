"""The stored numbers of a scene in the cells that are wanted, and what they are worth."""

from dataclasses import dataclass
from typing import Any, Final, TypeVar

import numpy as np
from numpy.typing import NDArray

from service.compiled import compiled
from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling

Item = TypeVar("Item", bound=np.generic)

QUALITY: Final = "quality"
SATURATION: Final = "saturation"
"""Layers of a scene beside its bands."""

# What a band has in a cell.
NOTHING: Final = 0
NUMBER: Final = 1
SATURATED: Final = 2

_ALL_KNOWN: Final = np.empty(0, dtype=np.bool_)
_ONE_TO_ONE: Final = np.empty(0, dtype=np.int32)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Layer:
    """A layer's numbers on its own grid, and where each wanted cell finds the one that it takes.

    Attributes
    ----------
    numbers
        As they are stored, each once, shape (own,).
    at
        int32, shape (cells,): which number each cell takes, counted from `first`, -1 for none.
        None: as many numbers as cells, one to one.
    first
        What the first number is counted as.
    known
        Which numbers were read, shape (own,). None: all. The others are no numbers.
    """

    numbers: NDArray[Any]
    at: NDArray[np.int32] | None = None
    first: int = 0
    known: NDArray[np.bool_] | None = None

    def spread(self, own: NDArray[Item], missing: int = 0) -> NDArray[Item]:
        """Give each cell what is said of its number; `missing` where it has none."""
        if self.at is None:
            return own
        if own.dtype.itemsize == 1:
            bytes_of = own.view(np.uint8)
            return _spread(bytes_of, self.at, self.first, np.uint8(missing)).view(own.dtype)
        places = np.where(self.at < 0, len(own), self.at - self.first)
        spread: NDArray[Item] = np.append(own, own.dtype.type(missing))[places]
        return spread


@dataclass(frozen=True, slots=True, kw_only=True)
class Meaning:
    """What a band's stored numbers mean.

    Attributes
    ----------
    scaling
        How they become reflectance.
    nodata, saturated
        The numbers that stand for "no data" and "saturated", None without.
    bit
        The band's bit in the layer of saturation bits, None without.
    """

    scaling: Scaling
    nodata: float | None = None
    saturated: float | None = None
    bit: int | None = None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Band:
    """A band's numbers, and what each of them is: `NOTHING`, `NUMBER` or `SATURATED`."""

    layer: Layer
    states: NDArray[np.uint8]
    scaling: Scaling


class Gathered:
    """A scene's numbers in neighbouring cells of a plan, as they are stored.

    Stored integers take 2 bytes a cell and band, on the band's own grid; they become
    reflectance batch by batch. Layers are taken in this order: quality, saturation, bands.

    Attributes
    ----------
    first, last
        The cells of the plan that are held, half-open.
    earlier
        Cells before `first` that are held too, ascending, int32: they come before the others.
    seen
        Cells in which some band has a number.
    saturated
        Cells in which some band is saturated.
    classes
        The quality layer.
    bits
        The layer of saturation bits; it has to come before the bands that it tells of.
    near_cloud
        Cells of clear surfaces that are to count as cloud; None without such a rule.
    """

    def __init__(self, first: int, last: int) -> None:
        self.first = first
        self.last = last
        self.earlier = np.empty(0, np.int32)
        self.seen = np.zeros(last - first, dtype=np.bool_)
        self.saturated = np.zeros(last - first, dtype=np.bool_)
        self.classes: Layer | None = None
        self.near_cloud: NDArray[np.bool_] | None = None
        self.bits: Layer | None = None
        self._bands: dict[BandRole, _Band] = {}

    def __len__(self) -> int:
        return len(self.seen)

    def take(self, role: BandRole, layer: Layer, meaning: Meaning) -> None:
        """Take over a band."""
        states = _states(layer, meaning)
        if meaning.bit is not None and self.bits is not None:
            layer, states = self._with_bits(layer, states, self.bits, meaning.bit)
        spread = layer.spread(states, NOTHING)
        self.seen |= spread == NUMBER
        self.saturated |= spread == SATURATED
        self._bands[role] = _Band(layer=layer, states=states, scaling=meaning.scaling)

    def _with_bits(
        self, layer: Layer, states: NDArray[np.uint8], bits: Layer, bit: int
    ) -> tuple[Layer, NDArray[np.uint8]]:
        """Mark the numbers whose bit says that they are saturated."""
        if layer.at is not bits.at or layer.first != bits.first:
            layer, states = _one_to_one(layer, states)
            numbers = bits.spread(bits.numbers)
        else:
            numbers = bits.numbers
        states[(states == NUMBER) & ((numbers >> bit) & 1 > 0)] = SATURATED
        return layer, states

    def places(self, at: NDArray[np.int32]) -> NDArray[np.int32]:
        """Return where cells of the plan, by their number there, are among those held here."""
        places = at - np.int32(self.first - len(self.earlier))
        if len(self.earlier):
            before = at < self.first
            places[before] = np.searchsorted(self.earlier, at[before])
        return places

    def reflectance(self, role: BandRole, places: NDArray[np.int32]) -> NDArray[np.float64]:
        """Return reflectance in some of the cells held; NaN where the band has no number."""
        band = self._bands.get(role)
        if band is None:
            return np.full(len(places), np.nan)
        layer, scaling = band.layer, band.scaling
        at = _ONE_TO_ONE if layer.at is None else layer.at
        return _reflectance(
            layer.numbers, band.states, at, layer.first, places, scaling.scale, scaling.offset
        )

    def narrowed(self, keep: NDArray[np.bool_]) -> "Gathered":
        """Return only some of the cells, as `earlier` ones of what comes next."""
        held = np.concatenate([self.earlier, np.arange(self.first, self.last, dtype=np.int32)])
        left = Gathered(self.last, self.last)
        left.earlier = held[keep]
        left.seen, left.saturated = self.seen[keep], self.saturated[keep]
        if self.near_cloud is not None:
            left.near_cloud = self.near_cloud[keep]
        if self.classes is not None:
            left.classes = _narrowed(self.classes, keep)
        for role, band in self._bands.items():
            layer, states = _one_to_one(band.layer, band.states)
            left._bands[role] = _Band(
                layer=Layer(numbers=layer.numbers[keep]), states=states[keep], scaling=band.scaling
            )
        return left

    def after(self, left: "Gathered") -> "Gathered":
        """Return these cells together with those that were left of what came before."""
        if not len(left.earlier):
            return self
        both = Gathered(self.first, self.last)
        both.earlier = left.earlier
        both.seen = np.concatenate([left.seen, self.seen])
        both.saturated = np.concatenate([left.saturated, self.saturated])
        if left.near_cloud is not None and self.near_cloud is not None:
            both.near_cloud = np.concatenate([left.near_cloud, self.near_cloud])
        if left.classes is not None and self.classes is not None:
            both.classes = _joined(left.classes, self.classes)
        for role, band in self._bands.items():
            before = left._bands[role]  # noqa: SLF001 - of the same class
            both._bands[role] = _Band(
                layer=_joined(before.layer, band.layer),
                states=np.concatenate([before.states, band.states]),
                scaling=band.scaling,
            )
        return both


@compiled
def _reflectance(
    numbers: NDArray[Any],
    states: NDArray[np.uint8],
    at: NDArray[np.int32],
    first: int,
    places: NDArray[np.int32],
    scale: float,
    offset: float,
) -> NDArray[np.float64]:
    """Scale the numbers of some cells; `at` without entries stands for one to one."""
    found = np.empty(len(places), np.float64)
    is_direct = len(at) == 0
    for cell in range(len(places)):
        own = np.int64(places[cell]) if is_direct else at[places[cell]] - first
        if own < 0 or states[own] != NUMBER:
            found[cell] = np.nan
        else:
            value = numbers[own] * scale + offset
            # Numbers of a float file may be as large as that.
            found[cell] = value if np.isfinite(value) else np.nan
    return found


@compiled
def _spread(
    own: NDArray[np.uint8], at: NDArray[np.int32], first: int, missing: np.uint8
) -> NDArray[np.uint8]:
    found = np.empty(len(at), np.uint8)
    for cell in range(len(at)):
        found[cell] = missing if at[cell] < 0 else own[at[cell] - first]
    return found


def _one_to_one(layer: Layer, states: NDArray[np.uint8]) -> tuple[Layer, NDArray[np.uint8]]:
    """Return a number and a state for each cell."""
    if layer.at is None:
        return layer, states
    numbers = layer.spread(layer.numbers)
    return Layer(numbers=numbers), layer.spread(states, NOTHING)


def _narrowed(layer: Layer, keep: NDArray[np.bool_]) -> Layer:
    """Return the layer for some of its cells; where one has no number, one that is not known."""
    known = np.ones(len(layer.numbers), np.bool_) if layer.known is None else layer.known
    numbers = layer.spread(layer.numbers)
    return Layer(numbers=numbers[keep], known=layer.spread(known)[keep])


def _joined(before: Layer, layer: Layer) -> Layer:
    """Return two layers as one; the first is one to one."""
    count = len(before.numbers)
    at = None
    if layer.at is not None:
        moved = np.where(layer.at < 0, -1, layer.at + np.int32(count - layer.first))
        at = np.concatenate([np.arange(count, dtype=np.int32), moved.astype(np.int32)])
    known = None
    if before.known is not None or layer.known is not None:
        known = np.concatenate([_known(before), _known(layer)])
    return Layer(numbers=np.concatenate([before.numbers, layer.numbers]), at=at, known=known)


def _known(layer: Layer) -> NDArray[np.bool_]:
    return np.ones(len(layer.numbers), np.bool_) if layer.known is None else layer.known


def _states(layer: Layer, meaning: Meaning) -> NDArray[np.uint8]:
    numbers = layer.numbers
    known = _ALL_KNOWN if layer.known is None else layer.known
    return _states_of(
        numbers, known, _stored(meaning.nodata, numbers), _stored(meaning.saturated, numbers)
    )


def _stored(mark: float | None, numbers: NDArray[Any]) -> float:
    """Return a mark as it is stored in numbers of this type; NaN, which is no number, for none.

    A mark written as a longer number is stored rounded, or as infinity.
    """
    if mark is None:
        return np.nan
    if not np.issubdtype(numbers.dtype, np.floating):
        return float(mark)
    with np.errstate(over="ignore"):
        return float(np.float64(mark).astype(numbers.dtype))


@compiled
def _states_of(
    numbers: NDArray[Any], known: NDArray[np.bool_], nodata: float, saturated: float
) -> NDArray[np.uint8]:
    states = np.empty(len(numbers), np.uint8)
    for at in range(len(numbers)):
        number = np.float64(numbers[at])
        if not np.isfinite(number) or number == nodata or (len(known) > 0 and not known[at]):
            states[at] = NOTHING
        else:
            states[at] = SATURATED if number == saturated else NUMBER
    return states
