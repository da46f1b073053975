"""Opening a file of outlines: which kind it is, by its first bytes."""

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Final

from service.errors import RejectedInput
from service.outlines import geopackage, shapefile, zipped
from service.outlines.features import FILE, OutlineFile
from service.outlines.geojson import GeoJson

_HEAD_BYTES: Final = 4_096


@contextmanager
def open_outlines(path: Path) -> Iterator[OutlineFile]:
    """Open a GeoPackage, a zipped Shapefile or a GeoJSON file; its name tells nothing.

    Raises
    ------
    RejectedInput
        It is none of them, is damaged, or does not say where on Earth it lies.
    """
    with path.open("rb") as file:
        head = file.read(_HEAD_BYTES)
    if head.startswith(geopackage.MAGIC):
        with geopackage.open_geopackage(path) as package:
            yield package
    elif head.startswith(zipped.MAGIC):
        with shapefile.open_zipped_shapefile(path) as layer:
            yield layer
    elif head.lstrip()[:1] == b"{":
        with path.open("rb") as file:
            yield GeoJson(file)
    else:
        raise _not_outlines(head)


def _not_outlines(head: bytes) -> RejectedInput:
    is_bare = head.startswith(shapefile.MAGIC)
    detail = (
        "A Shapefile is sent as one zip archive with its .shp, .dbf and .prj files."
        if is_bare
        else "The file is no GeoPackage, zipped Shapefile or GeoJSON; its content tells, not its "
        "name."
    )
    return RejectedInput.at(FILE, detail, code="not-outlines")
