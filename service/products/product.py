"""A product, understood: what to post, and how each part of it was found."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Generic, TypeVar

Place = TypeVar("Place")
"""Where a file is: a `Path`, or the address that an item names."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Found:
    """How one part was found.

    Attributes
    ----------
    part
        A band role, ``quality`` or ``saturation``.
    source
        The product's own name for it: a band name, an asset's key, a file's name.
    by
        What told: ``band name``, ``common name``, ``wavelength``, ``manifest`` …
    """

    part: str
    source: str
    by: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Product(Generic[Place]):
    """A product, ready to be posted.

    Attributes
    ----------
    kind
        What it is, for people: ``Sentinel-2 SAFE folder``.
    scene
        The members of the ``scene`` part, as ``POST /v1/scenes`` takes them.
    files
        By part where its file is: a path, or the address that an item names.
    found
        How each part was found.
    left_out
        What of the product is not sent, and why: source → reason.
    """

    kind: str
    scene: Mapping[str, Any]
    files: Mapping[str, Place]
    found: tuple[Found, ...]
    left_out: Mapping[str, str]
