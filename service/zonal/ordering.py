"""Bringing the values of a zone into order, and making one of those that are equal.

A value and its weight are packed into one integer: the value's bits, turned over so that
integers ascend with them, above the weight's bits. So a zone is sorted as integers, and the
outcome does not depend on the order in which its cells came.
"""

from typing import Final

import numpy as np
from numpy.typing import NDArray

from service.compiled import compiled

Packed = NDArray[np.uint64]

_SIGN: Final = np.uint32(0x8000_0000)
_LOW: Final = np.uint64(0xFFFF_FFFF)
_HIGH_SHIFT: Final = np.uint64(32)
# A zone up to this size is spread over one bucket for each of its values; in a larger one the
# buckets would no longer fit into the cache.
_MOST_BUCKETS: Final = 4096
# A bucket with more values is not put in order one by one.
_FEW: Final = 24
_TURNS: Final = 3
_DIGIT_BITS: Final = 11
_DIGITS: Final = 1 << _DIGIT_BITS


@compiled
def _put_in_place(packed: Packed, number: int) -> None:
    """Sort values that are nearly in order by insertion."""
    for at in range(1, number):
        moved = packed[at]
        to = at
        while to > 0 and packed[to - 1] > moved:
            packed[to] = packed[to - 1]
            to -= 1
        packed[to] = moved


@compiled
def _sort_by_digits(packed: Packed, spare: Packed, number: int) -> None:
    """Sort values by their digits, lowest first: time goes with their number, whatever they are.

    Weights are not looked at: of equal values only the sum counts. The outcome is in `spare`.
    """
    counts = np.empty(_DIGITS + 1, np.int64)
    for turn in range(_TURNS):
        shift = np.uint64(32 + turn * _DIGIT_BITS)
        for digit in range(_DIGITS + 1):
            counts[digit] = 0
        for at in range(number):
            counts[((packed[at] >> shift) & np.uint64(_DIGITS - 1)) + 1] += 1
        for digit in range(_DIGITS):
            counts[digit + 1] += counts[digit]
        for at in range(number):
            digit = (packed[at] >> shift) & np.uint64(_DIGITS - 1)
            spare[counts[digit]] = packed[at]
            counts[digit] += 1
        for at in range(number if turn < _TURNS - 1 else 0):
            packed[at] = spare[at]


@compiled
def _spread_out(
    packed: Packed, spare: Packed, values: NDArray[np.float32], ends: NDArray[np.int32], number: int
) -> bool:
    """Bring values into as many buckets as they are, evenly between the lowest and the highest.

    They go to `spare`, bucket after bucket. Where they are so uneven that many would share a
    bucket, nothing is done, and the answer is false.
    """
    low, high = values[0], values[0]
    for at in range(number):
        low = min(low, values[at])
        high = max(high, values[at])
    lowest = np.float64(low)
    if not np.isfinite(high - lowest):
        return False
    scale = (number - 1) / (np.float64(high) - lowest) if high > low else 0.0
    for bucket in range(number + 1):
        ends[bucket] = 0
    for at in range(number):
        ends[int((values[at] - lowest) * scale) + 1] += 1
    fullest = 0
    for bucket in range(number):
        fullest = max(fullest, ends[bucket + 1])
        ends[bucket + 1] += ends[bucket]
    if fullest > _FEW:
        return False
    for at in range(number):
        bucket = int((values[at] - lowest) * scale)
        spare[ends[bucket]] = packed[at]
        ends[bucket] += 1
    return True


@compiled
def _merge(ordered: Packed, number: int, values: NDArray[np.float32], joint: Packed) -> int:
    """Make one of equal values; return how many distinct ones there are.

    They come into `values`, their joint weights into `joint` (as float64).
    """
    bits = values.view(np.uint32)
    sums = joint.view(np.float64)
    weight_bits = np.empty(1, np.uint32)
    weight = weight_bits.view(np.float32)
    found = -1
    last = np.uint32(0)
    for at in range(number):
        turned = np.uint32(ordered[at] >> _HIGH_SHIFT)
        weight_bits[0] = np.uint32(ordered[at] & _LOW)
        if found < 0 or turned != last:
            found += 1
            last = turned
            bits[found] = turned & ~_SIGN if turned & _SIGN else ~turned
            sums[found] = 0.0
        sums[found] += weight[0]
    return found + 1


@compiled
def _pack(
    values: NDArray[np.float32],
    weights: NDArray[np.float32],
    counts: NDArray[np.bool_],
    start: int,
    stop: int,
    packed: Packed,
    kept: NDArray[np.float32],
) -> int:
    """Pack the cells that count; return how many they are."""
    bits_of = values.view(np.uint32)
    weights_of = weights.view(np.uint32)
    found = 0
    for at in range(start, stop):
        value = values[at]
        if not counts[at] or np.isnan(value) or not weights[at] > 0:
            continue
        # Minus zero is the same value as zero, with other bits.
        bits = bits_of[at] if value != 0 else np.uint32(0)
        turned = ~bits if bits & _SIGN else bits | _SIGN
        packed[found] = (np.uint64(turned) << _HIGH_SHIFT) | np.uint64(weights_of[at])
        kept[found] = value
        found += 1
    return found


@compiled
def distinct(
    values: NDArray[np.float32],
    weights: NDArray[np.float32],
    counts: NDArray[np.bool_],
    start: int,
    stop: int,
    packed: Packed,
    spare: Packed,
    kept: NDArray[np.float32],
    ends: NDArray[np.int32],
) -> int:
    """Bring the distinct values of a zone into ascending order; return how many they are.

    Parameters
    ----------
    values, weights, counts
        Cells, shape (cells,); one counts where `counts` is true, the value a number and the
        weight above 0.
    start, stop
        The zone's own cells among them.
    packed, spare, kept, ends
        Room for as many cells, and one more for `ends`. Afterwards `kept` begins with the
        distinct values and `packed`, seen as float64, with their joint weights.
    """
    found = _pack(values, weights, counts, start, stop, packed, kept)
    if 0 < found <= _MOST_BUCKETS and _spread_out(packed, spare, kept, ends, found):
        _put_in_place(spare, found)
    else:
        _sort_by_digits(packed, spare, found)
    return _merge(spare, found, kept, packed)
