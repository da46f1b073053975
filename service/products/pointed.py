"""JSON values that know where they stand, so that what is wrong with one is named by its pointer.

A document that somebody sent may hold anything anywhere: each value is asked for as what it
has to be, and refused at its place (RFC 6901) if it is something else.
"""

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any, Final

from service.errors import RejectedInput, pointer_of

LONGEST_TEXT: Final = 4_000
_LONGEST_NAME: Final = 100
_LONGEST_ARRAY: Final = 1_000
# Above it a number is no scale, offset, wavelength or cell size, and a float may overflow.
_LARGEST: Final = 1e12


@dataclass(frozen=True, slots=True, kw_only=True)
class Node:
    """A value of a JSON document and its place; None where the document has nothing."""

    value: Any
    place: tuple[str | int, ...] = ()

    @property
    def pointer(self) -> str:
        """The place as JSON pointer."""
        return pointer_of(self.place)

    @property
    def is_missing(self) -> bool:
        """Whether there is nothing here, or null."""
        return self.value is None

    def refused(self, detail: str, *, code: str = "invalid-input") -> RejectedInput:
        """Return the error for what is wrong here."""
        return RejectedInput.at(self.pointer, detail, code=code)

    def member(self, name: str) -> "Node":
        """Return a member of an object, or a missing one at its place."""
        held = self.value if isinstance(self.value, dict) else {}
        return Node(value=held.get(name), place=(*self.place, name))

    def must_be_object(self) -> "Node":
        """Return this, an object.

        Raises
        ------
        RejectedInput
            It is something else, or missing.
        """
        if not isinstance(self.value, dict):
            raise self.refused("A JSON object must stand here.")
        return self

    def named(self) -> Iterator[tuple[str, "Node"]]:
        """Yield the members of an object whose names are for people.

        Raises
        ------
        RejectedInput
            It is no object, or a name is empty, long or not printable.
        """
        for name in self.must_be_object().value:
            if not (name.isprintable() and 1 <= len(name) <= _LONGEST_NAME):
                raise self.refused(
                    f"A name here is empty, longer than {_LONGEST_NAME} characters or not "
                    "printable; rename it."
                )
            yield name, self.member(name)

    def items(self) -> list["Node"]:
        """Return the items of an array; none where there is nothing."""
        if self.is_missing:
            return []
        if not isinstance(self.value, list):
            raise self.refused("A JSON array must stand here.")
        if len(self.value) > _LONGEST_ARRAY:
            raise self.refused(f"An array here is taken with up to {_LONGEST_ARRAY:,} items.")
        return [Node(value=item, place=(*self.place, at)) for at, item in enumerate(self.value)]

    def text(self) -> str | None:
        """Return a text, None where there is nothing."""
        if self.is_missing:
            return None
        if not isinstance(self.value, str) or not 1 <= len(self.value) <= LONGEST_TEXT:
            raise self.refused(f"A text of 1 to {LONGEST_TEXT:,} characters must stand here.")
        return self.value

    def texts(self) -> list[str]:
        """Return an array of texts; none where there is nothing."""
        return [item.text() or "" for item in self.items()]

    def number(self) -> float | None:
        """Return a finite number of a sensible size, None where there is nothing."""
        if self.is_missing:
            return None
        value = self.value
        if isinstance(value, bool) or not isinstance(value, int | float):
            raise self.refused("A number must stand here.")
        if not -_LARGEST <= value <= _LARGEST:  # also for NaN, which compares to nothing
            raise self.refused("This number is too large to be meant.")
        return float(value)

    def nodata(self) -> float | None:
        """Return a number for "no data", which may be the text ``nan``, ``inf`` or ``-inf``."""
        if self.value in ("nan", "inf", "-inf"):
            return float(self.value)
        return self.number()

    def flag(self) -> bool | None:
        """Return true or false, None where there is nothing."""
        if self.is_missing or isinstance(self.value, bool):
            return bool(self.value) if self.value is not None else None
        raise self.refused("true or false must stand here.")


def same(one: float, other: float) -> bool:
    """Whether two stated numbers are the same but for how they were written."""
    if math.isnan(one) or math.isnan(other):
        return math.isnan(one) and math.isnan(other)
    return math.isclose(one, other, rel_tol=1e-6, abs_tol=1e-9)
