"""The assets of a STAC Item: which may hold bands, and what is said of each band.

Sources: STAC 1.0 with the extensions eo 1.1 (``eo:bands``) and raster 1.1 (``raster:bands``),
which are merged by position; STAC 1.1 with its ``bands``, eo 2.0 and raster 2.0, whose fields
may stand at the band, at the asset if they hold for all of its bands, or in the properties;
projection 1.0 to 2.0.
"""

import re
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import Final, TypeVar

from service.errors import RejectedInput
from service.products.pointed import Node, same

CONTRADICTS: Final = "item-contradicts"
_MOST_ASSETS: Final = 1_000
_MOST_BANDS: Final = 64
_MOST_BANDS_IN_ALL: Final = 2_000
_ARRAYS: Final = ("bands", "eo:bands", "raster:bands")
# A picture's bands are called red, green and blue too, and are no reflectance.
_OTHER_ROLES: Final = ("thumbnail", "overview", "metadata", "visual")
_PICTURES: Final = frozenset({"visual", "tci", "thumbnail", "preview", "overview", "browse"})
_GEOTIFF: Final = re.compile(r"image/(?:tiff|vnd\.stac\.geotiff)\b|\.tiff?$", re.IGNORECASE)
_JPEG2000: Final = re.compile(r"image/(?:jp2|jpx|jpeg2000)\b|\.(?:jp2|j2k)$", re.IGNORECASE)
_SUFFIXES: Final = re.compile(r"(?:[-_](?:[0-9]+m|jp2|cog|tiff?))+$", re.IGNORECASE)

Stated = TypeVar("Stated", str, float)


@dataclass(frozen=True, slots=True, kw_only=True)
class AssetBand:
    """One band of an asset, and where things are said of it.

    Attributes
    ----------
    asset
        The asset's key.
    number
        Its place in the file, from 1.
    node, properties
        The asset, and the Item's properties, which hold what nothing nearer says.
    entries
        Its entries in ``bands``, ``eo:bands`` and ``raster:bands``, in this order; a missing
        one where there is none.
    """

    asset: str
    number: int
    node: Node
    properties: Node
    entries: tuple[Node, ...]

    @property
    def names(self) -> Iterable[Node]:
        """Where its name is said."""
        band, eo, raster = self.entries
        return (band.member("name"), eo.member("name"), raster.member("name"))

    def said(self, extension: str, field: str) -> tuple[list[Node], Node]:
        """Return where an extension's field is said of it, and where it is said of all."""
        band, eo, raster = self.entries
        full = f"{extension}:{field}" if extension else field
        old = eo if extension == "eo" else raster
        near = [band.member(full), old.member(field), self.node.member(full)]
        return near, self.properties.member(full)


@dataclass(frozen=True, slots=True, kw_only=True)
class Asset:
    """An asset that may hold bands.

    `is_geotiff` is false for JPEG 2000; `resolution_m` is None if nothing tells it.
    """

    key: str
    node: Node
    bands: tuple[AssetBand, ...]
    is_geotiff: bool
    resolution_m: float | None

    @property
    def stem(self) -> str:
        """Its key without what tells of resolution or format."""
        return _SUFFIXES.sub("", self.key)


def the_one(
    nodes: Iterable[Node], read: Callable[[Node], Stated | None], what: str
) -> Stated | None:
    """Return what is said at some places, None if it is said nowhere.

    Raises
    ------
    RejectedInput
        Two places say different things (``item-contradicts``).
    """
    found: Stated | None = None
    for node in nodes:
        value = read(node)
        if value is None:
            continue
        if found is not None and not _same(found, value):
            raise node.refused(
                f"This {what} of a band differs from the one said of it elsewhere in the asset. "
                "Entries of `bands`, `eo:bands` and `raster:bands` are merged by position; "
                "correct the wrong one.",
                code=CONTRADICTS,
            )
        found = value if found is None else found
    return found


def _same(one: str | float, other: str | float) -> bool:
    if isinstance(one, str) or isinstance(other, str):
        return one == other
    return same(one, other)


def assets_of(item: Node) -> tuple[list[Asset], dict[str, str]]:
    """Return the assets that may hold bands, and why the others do not, by key.

    Raises
    ------
    RejectedInput
        The assets are not what the standard says.
    """
    held = item.member("assets")
    if len(held.must_be_object().value) > _MOST_ASSETS:
        raise held.refused(f"An Item is taken with up to {_MOST_ASSETS:,} assets.")
    found: list[Asset] = []
    left_out: dict[str, str] = {}
    bands = 0
    for key, node in held.named():
        reason = _why_not(key, node.must_be_object())
        if reason is None:
            found.append(_asset(key, node, item.member("properties")))
            bands += len(found[-1].bands)
            if bands > _MOST_BANDS_IN_ALL:
                raise held.refused(f"An Item is taken with up to {_MOST_BANDS_IN_ALL:,} bands.")
        else:
            left_out[key] = reason
    return found, left_out


def _why_not(key: str, node: Node) -> str | None:
    """Return why an asset holds no bands, None if it may."""
    roles = set(node.member("roles").texts())
    for role in _OTHER_ROLES:
        if role in roles:
            return f"its role is {role}"
    if _SUFFIXES.sub("", key).lower() in _PICTURES:
        return "it is a picture, by its key"
    if _is_geotiff(node) is None:
        return "it is neither GeoTIFF nor JPEG 2000"
    return None


def _is_geotiff(node: Node) -> bool | None:
    """Tell GeoTIFF from JPEG 2000, by media type, else by how the address ends."""
    href = (node.member("href").text() or "").partition("?")[0]
    told = node.member("type").text() or href
    if _GEOTIFF.search(told):
        return True
    return False if _JPEG2000.search(told) else None


def _asset(key: str, node: Node, properties: Node) -> Asset:
    arrays = [node.member(name) for name in _ARRAYS]
    entries = [array.items() for array in arrays]
    count = max([1, *map(len, entries)])
    if count > _MOST_BANDS:
        raise node.refused(f"An asset is taken with up to {_MOST_BANDS} bands.")
    padded = (_padded(array, held, count) for array, held in zip(arrays, entries, strict=True))
    bands = tuple(
        AssetBand(asset=key, number=number, node=node, properties=properties, entries=(*told,))
        for number, told in enumerate(zip(*padded, strict=True), start=1)
    )
    return Asset(
        key=key,
        node=node,
        bands=bands,
        is_geotiff=bool(_is_geotiff(node)),
        resolution_m=_resolution_m(bands[0]),
    )


def _padded(array: Node, entries: list[Node], count: int) -> list[Node]:
    """Return the entries of an array, and missing ones after them up to a count."""
    missing = range(len(entries), count)
    return [entry.must_be_object() for entry in entries] + [
        Node(value=None, place=(*array.place, at)) for at in missing
    ]


def check_aligned(asset: Asset) -> None:
    """Refuse an asset whose lists of bands have different lengths.

    Raises
    ------
    RejectedInput
        At the shorter list: its entries are merged with the longer by position.
    """
    arrays = [asset.node.member(name) for name in _ARRAYS]
    for array in arrays:
        if not array.is_missing and len(array.items()) != len(asset.bands):
            raise array.refused(
                f"This list has {len(array.items())} entries for {len(asset.bands)} bands. Lists "
                "of bands are merged by position, so they need one entry for each band.",
                code=CONTRADICTS,
            )


def _resolution_m(band: AssetBand) -> float | None:
    """Return how fine the cells are: as stored, else as taken; None if nothing tells."""
    stored, _ = band.said("raster", "spatial_resolution")
    transform = band.node.member("proj:transform").items()[:1]
    taken, _ = band.said("", "gsd")
    for node in (*stored, *transform, *taken):
        number = node.number()
        if number is not None:
            return abs(number)
    return None


def one_crs(assets: Iterable[Asset], properties: Node) -> None:
    """Refuse assets that are said to lie in different coordinate reference systems.

    Raises
    ------
    RejectedInput
        At the first that differs (``crs-differs``).
    """
    first: str | None = None
    for asset in assets:
        said = _crs(asset.node) or _crs(properties)
        if said is None:
            continue
        if first is not None and said[0] != first:
            raise RejectedInput.at(
                said[1].pointer,
                "This asset is in another coordinate reference system than the first; use one "
                "for all bands of a scene.",
                code="crs-differs",
            )
        first = first or said[0]


def _crs(node: Node) -> tuple[str, Node] | None:
    code, epsg = node.member("proj:code"), node.member("proj:epsg")
    if (text := code.text()) is not None:
        return text.upper(), code
    number = epsg.number()
    return None if number is None else (f"EPSG:{number:.0f}", epsg)
