"""STAC Items on this machine: with files beside them, or with files that the service fetches."""

from collections.abc import Mapping
from pathlib import Path
from typing import Final, TypeVar

from service.products.places import Span, incomplete, invalid, unsupported
from service.products.product import Product
from service.products.stac import read_item

KIND: Final = "STAC Item"
_SUFFIXES: Final = (".json", ".geojson")
_Place = TypeVar("_Place", Span, str)


def is_item(path: Path) -> bool:
    """Whether a path may be an Item, by its name."""
    return path.suffix.lower() in _SUFFIXES and path.is_file() and not path.name.startswith(".")


def items_at(path: Path) -> list[Path]:
    """Return the Items at a path: itself, or those in a folder, by name.

    Raises
    ------
    RejectedInput
        There is none.
    """
    found = [entry for entry in sorted(path.iterdir()) if is_item(entry)] if path.is_dir() else []
    if path.is_file():
        found = [path]
    if not found:
        raise unsupported("There is no STAC Item here; it is a file that ends in .json.")
    return found


def read_item_files(path: Path) -> Product[Span] | Product[str]:
    """Return an Item with its files, or with addresses if none of them is on this machine.

    Raises
    ------
    RejectedInput
        It can't be read as a scene, or some of its files are here and some are not.
    """
    product = read_item(path)
    if not isinstance(product.scene.get("ref"), str):
        raise invalid("The Item has no `id`, which becomes the scene's ref.")
    here = {part: place for part, place in product.files.items() if _is_here(place)}
    if not here:
        return _with(product, {part: _address(place) for part, place in product.files.items()})
    missing = [part for part in product.files if part not in here]
    if missing:
        raise incomplete(
            f"The Item's files of {', '.join(missing)} are not here, while others are; a scene is "
            "sent whole, or fetched whole by the service."
        )
    return _with(product, {part: Span.whole(Path(place)) for part, place in here.items()})


def _is_here(place: Path | str) -> bool:
    return isinstance(place, Path) and place.is_file()


def _address(place: Path | str) -> str:
    return place.absolute().as_uri() if isinstance(place, Path) else place


def _with(product: Product[Path | str], files: Mapping[str, _Place]) -> Product[_Place]:
    return Product(
        kind=product.kind,
        scene=product.scene,
        files=files,
        found=product.found,
        left_out=product.left_out,
    )
