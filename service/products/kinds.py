"""Which kind of product a path is: the one list of the kinds that are read."""

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Final

from service.errors import RejectedInput
from service.products.landsat import KIND as LANDSAT
from service.products.landsat import is_landsat, read_landsat
from service.products.named_files import KIND as NAMED_FILES
from service.products.named_files import has_manifest, read_folder
from service.products.places import Span, unsupported
from service.products.product import Product
from service.products.safe import KIND as SAFE
from service.products.safe import is_safe, read_safe


@dataclass(frozen=True, slots=True, kw_only=True)
class Kind:
    """A kind of product: its name for people, how a folder of it looks, and its reader."""

    name: str
    fits: Callable[[Path], bool]
    read: Callable[[Path], Product[Span]]


KINDS: Final = (
    Kind(name=SAFE, fits=is_safe, read=read_safe),
    Kind(name=LANDSAT, fits=is_landsat, read=read_landsat),
    Kind(name=NAMED_FILES, fits=has_manifest, read=read_folder),
)
_TAR: Final = ".tar"
_ARCHIVES: Final = (".zip", ".gz", ".tgz", ".bz2", ".xz", ".7z")


def products_at(path: Path) -> list[Path]:
    """Return the products at a path: itself, or those in a folder of products, by name.

    Raises
    ------
    RejectedInput
        There is none; the detail says which kinds there are.
    """
    if is_product(path):
        return [path]
    found = (
        [entry for entry in sorted(path.iterdir()) if is_product(entry)] if path.is_dir() else []
    )
    if not found:
        raise _unknown(path)
    return found


def is_product(path: Path) -> bool:
    """Whether a path looks like a product of one of the kinds, complete or not."""
    if path.name.startswith("."):
        return False
    if path.is_dir():
        return any(kind.fits(path) for kind in KINDS)
    return path.suffix.lower() == _TAR and path.is_file()


def read_product(path: Path) -> Product[Span]:
    """Return what the product at a path holds.

    Raises
    ------
    RejectedInput
        It is of no kind that is read, or its kind's reader refuses it.
    """
    if path.is_dir():
        for kind in KINDS:
            if kind.fits(path):
                return kind.read(path)
    elif path.suffix.lower() == _TAR:
        return read_landsat(path)
    raise _unknown(path)


def _unknown(path: Path) -> RejectedInput:
    if path.suffix.lower() in _ARCHIVES:
        return unsupported("A compressed archive is not read; unpack it, and push the folder.")
    kinds = "; ".join(kind.name for kind in KINDS)
    return unsupported(
        f"There is no product here. What is read: {kinds}; the uncompressed tar of a Landsat "
        "bundle; or a folder of such. A STAC Item goes with --stac."
    )
