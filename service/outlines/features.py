"""What every reader of outlines gives: features with attributes and an outline each."""

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final, Protocol

from service.errors import RejectedInput
from service.zonal.boundary import Outline

FILE: Final = "/file"
"""Pointer of the part that holds the file."""
MAX_GEOMETRY_BYTES: Final = 512 * 1024
"""Ten thousand vertices with height and measure, in rings of four, take less."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Feature:
    """One feature as it stands in its file.

    Attributes
    ----------
    name
        What people call it who open the file elsewhere, such as ``Row 17``; empty if its
        place in the file is all it has.
    attributes
        The wanted fields that it has, by name; values as the file holds them.
    geometry
        As the file holds it; only its own reader knows what it is.
    """

    name: str
    attributes: Mapping[str, object]
    geometry: Any


@dataclass(frozen=True, slots=True, kw_only=True)
class Drawing:
    """How outlines are checked: whether crossing rings are mended, and how large one may be."""

    repair: bool
    area_limit_ha: float


class OutlineFile(Protocol):
    """An open file of outlines."""

    @property
    def warning(self) -> str | None:
        """What is worth knowing of the whole file."""

    def has_field(self, name: str) -> bool:
        """Whether features have a field of this name, as far as the file tells."""

    def count(self) -> int:
        """Return how many features there are."""

    def features(self, fields: Sequence[str]) -> Iterator[Feature]:
        """Yield the features in the order of the file, with these of their fields.

        Raises
        ------
        RejectedInput
            The file can't be read on, or has more features than a call may bring.
        """

    def outline(self, feature: Feature, drawing: Drawing, *, pointer: str) -> Outline:
        """Return a feature's outline in WGS 84.

        Raises
        ------
        RejectedInput
            It breaks a rule; the pointer is the one given, or below it.
        """


def unreadable(detail: str) -> RejectedInput:
    """Return the error for a file that is damaged or beyond what is read here."""
    return RejectedInput.at(FILE, detail, code="unreadable-outlines")


def too_large(detail: str) -> RejectedInput:
    """Return the error for a file that holds more than is taken at once."""
    return RejectedInput.at(FILE, detail, code="outlines-too-large")


def without_crs(detail: str) -> RejectedInput:
    """Return the error for a file that does not say where on Earth it lies."""
    return RejectedInput.at(FILE, detail, code="no-crs")
