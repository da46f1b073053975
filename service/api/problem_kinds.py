"""Kinds of problems, those of STAC Items and their assets among them."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final


@dataclass(frozen=True, slots=True, kw_only=True)
class Kind:
    """A kind of problem: its title, what its page says, and a status if not its error's."""

    title: str
    page: str
    status: int | None = None


ITEM_KINDS: Final[Mapping[str, Kind]] = {
    "item-contradicts": Kind(
        title="Item contradicts itself",
        page="The STAC Item says two things of one band, or one that can't be true of the product "
        "that it is about. Nothing is guessed: a wrong offset turns an NDVI of 0.79 into 0.52, "
        "and nothing would show it. Where a catalogue took the offset out of the numbers, the "
        "Item says so by a property `…:boa_offset_applied`.",
    ),
    "asset-forbidden": Kind(
        title="Asset not allowed",
        page="Assets are read from folders, hosts and buckets that the operator allows "
        "(`FURROWLIGHT_ASSET_FOLDERS`, `FURROWLIGHT_ASSET_HOSTS`, `FURROWLIGHT_ASSET_BUCKETS`), "
        "and from none by default.",
    ),
    "asset-refused": Kind(
        title="Asset can't be read",
        page="There is no file to be had at the address of an asset: none is there, it redirects, "
        "or it is not given to this service.",
    ),
    "assets-too-large": Kind(
        title="Assets too large",
        page="All assets of an Item that a scene needs count as one upload, with its limit "
        "(`FURROWLIGHT_SCENE_UPLOAD_LIMIT_BYTES`).",
    ),
    "asset-unavailable": Kind(
        title="Asset unavailable",
        page="The file of an asset could not be had just now, or not in time. Nothing was kept; "
        "the same request may work later.",
    ),
    "fetching-busy": Kind(
        title="Fetching other assets",
        page="The service fetches the assets of a few Items at a time "
        "(`FURROWLIGHT_ASSET_FETCHES`). Send the Item again.",
    ),
}
