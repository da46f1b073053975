"""Sentinel-2 Level-2A products as delivered: a SAFE folder of one granule.

Source: ESA, Sentinel-2 products specification document (names, ``MTD_MSIL2A.xml``,
``MTD_TL.xml``) and the format change of processing baseline 04.00 (``BOA_ADD_OFFSET``).
"""

import math
import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Any, Final
from xml.etree.ElementTree import ParseError

import defusedxml.ElementTree
from defusedxml.common import DefusedXmlException

from service.errors import RejectedInput
from service.products.places import (
    Span,
    file_inside,
    incomplete,
    instant_of,
    invalid,
    read_limited,
    unsupported,
    written,
)
from service.products.product import Found, Product
from service.products.stated import scaling_part
from service.spectral.gathered import QUALITY
from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling
from service.spectral.sensors import SENTINEL_2_L2A

KIND: Final = "Sentinel-2 Level-2A SAFE folder"
METADATA: Final = "MTD_MSIL2A.xml"
_LEVEL_1: Final = "MTD_MSIL1C.xml"
# Real ones have some tens (product) and hundreds (tile) of kilobytes.
_METADATA_LIMIT: Final = 16 * 2**20

_NAME: Final = re.compile(
    r"(?P<ref>S(?P<unit>2[A-Z])_MSIL(?P<level>1C|2A)_[0-9]{8}T[0-9]{6}"
    r"_N(?P<baseline>[0-9]{4})_R[0-9]{3}_(?P<tile>T[0-9]{2}[A-Z]{3})_[0-9]{8}T[0-9]{6})(\.SAFE)?"
)
_IMAGE: Final = re.compile(
    r"GRANULE/(?P<granule>[^/]+)/IMG_DATA/(?:R[0-9]+m/)?"
    r"[^/]+_(?P<key>B[0-9][0-9A]|SCL|AOT|WVP|TCI)_(?P<metres>10|20|60)m"
)
_GRANULE: Final = re.compile(r"L2A_(?P<tile>T[0-9]{2}[A-Z]{3})_.+")
_SCL: Final = "SCL"
# By band id, where the metadata don't say themselves.
_BAND_IDS: Final = ("1", "2", "3", "4", "5", "6", "7", "8", "8A", "9", "10", "11", "12")
_LEFT_OUT: Final = {
    "B09": "no index uses it",
    "AOT": "no reflectance",
    "WVP": "no reflectance",
    "TCI": "no reflectance",
}


@dataclass(frozen=True, slots=True, kw_only=True)
class _Image:
    """An image that the metadata list: B04, SCL …, at so many metres."""

    key: str
    metres: int
    name: str
    granule: str

    @property
    def told(self) -> str:
        """Its name for people."""
        return f"{self.key} {self.metres} m"


def is_safe(folder: Path) -> bool:
    """Whether a folder looks like a SAFE product, of whatever level, complete or not."""
    has_metadata = any((folder / name).exists() for name in (METADATA, _LEVEL_1))
    return has_metadata or folder.suffix.upper() == ".SAFE"


def read_safe(folder: Path) -> Product[Span]:
    """Return what a SAFE folder holds.

    The time is the granule's SENSING_TIME, when this tile was seen. Start times of the
    product and in its name are those of the whole data take, up to a quarter of an hour
    before. Scale and offset come from the product's own metadata, band by band.

    Raises
    ------
    RejectedInput
        The product is of another level or an unknown processing baseline, contradicts
        itself, has more than one granule, or lacks a file that its metadata list.
    """
    if (folder / _LEVEL_1).exists() and not (folder / METADATA).exists():
        raise _of_level_1()
    root = _xml(folder, METADATA)
    name = _name(folder, root)
    baseline = _baseline(root, name)
    images = _finest(_images(root))
    granule = _granule(folder, images, name["tile"])
    files = _files(folder, images)
    scalings = _scalings(root, baseline, images)
    scene: dict[str, Any] = {
        "ref": name["ref"],
        "sensor": SENTINEL_2_L2A.id,
        "acquired_at": written(_sensed_at(folder, granule)),
        "processing_baseline": baseline,
        "platform": _platform(root, name["unit"]),
        "tile": name["tile"],
        **scaling_part(scalings, SENTINEL_2_L2A, processing_baseline=baseline),
    }
    parts = _parts(images)
    return Product(
        kind=KIND,
        scene=scene,
        files={part: files[image.key] for part, image in parts.items()},
        found=tuple(
            Found(part=part, source=image.told, by="band name in the metadata")
            for part, image in parts.items()
        ),
        left_out=_left_out(images),
    )


def _of_level_1() -> RejectedInput:
    return unsupported(
        "This is a Level-1C product: reflectance at the top of the atmosphere, without a scene "
        "classification. Get the Level-2A product of the same tile and time."
    )


def _xml(folder: Path, name: str) -> Any:
    path = file_inside(folder, name)
    if path is None:
        raise incomplete(f"The SAFE folder has no {Path(name).name}.")
    content = read_limited(Span.whole(path), limit=_METADATA_LIMIT, what=Path(name).name)
    try:
        return defusedxml.ElementTree.fromstring(content, forbid_dtd=True)
    except DefusedXmlException:
        raise invalid(
            f"{Path(name).name} declares a document type or entities, which no agency's does and "
            "which can blow up a reader. Fetch the product again from its source."
        ) from None
    except ParseError:
        raise incomplete(f"{Path(name).name} is no well-formed XML, or ends early.") from None


def _text(root: Any, *steps: str) -> str:
    """Return the text of the one element at a path below General_Info."""
    found = root.findtext("/".join(f"{{*}}{step}" for step in ("General_Info", *steps)))
    if found is None or not found.strip():
        raise invalid(
            f"{METADATA} does not say {steps[-1]}, so this is not the format of Level-2A that is "
            "read here. Fetch the product again from the agency, in its present format."
        )
    return str(found).strip()


def _name(folder: Path, root: Any) -> Mapping[str, str]:
    """Return the tokens of the product's name, which metadata and folder must agree on."""
    level = _text(root, "Product_Info", "PROCESSING_LEVEL")
    if level == "Level-1C":
        raise _of_level_1()
    if level != "Level-2A":
        raise unsupported(
            "This product is not of Level-2A. Get the Level-2A product of the same tile and time."
        )
    match = _NAME.fullmatch(_text(root, "Product_Info", "PRODUCT_URI"))
    if match is None or match["level"] != "2A":
        raise unsupported(
            f"The product's name in {METADATA} does not follow the convention in force since "
            "2016. Get the product in its present format, which holds one tile."
        )
    called = _NAME.fullmatch(folder.resolve().name)
    if called is not None and called["ref"] != match["ref"]:
        raise invalid(
            "The folder has the name of another product than its metadata. Fetch the product "
            "again; its files and its metadata must belong together."
        )
    return match.groupdict()


def _baseline(root: Any, name: Mapping[str, str]) -> str:
    baseline = _text(root, "Product_Info", "PROCESSING_BASELINE")
    if baseline.replace(".", "") != name["baseline"]:
        raise invalid(
            "The product's name and its metadata say different processing baselines, so its "
            "offset can't be trusted. Fetch the product again from its source."
        )
    try:
        SENTINEL_2_L2A.published(baseline)
    except RejectedInput:
        raise unsupported(
            f"Processing baseline {baseline} is not known to this release, and what it changed "
            "can't be guessed. Use a release that knows it; or, once you have checked its format, "
            "send the bands in a folder with a scene.json that says their `scaling`."
        ) from None
    return baseline


def _platform(root: Any, unit: str) -> str:
    spacecraft = _text(root, "Product_Info", "Datatake", "SPACECRAFT_NAME")
    if spacecraft.upper() != f"SENTINEL-{unit}":
        raise invalid(
            "The product's name and its metadata say different spacecraft. Fetch the product "
            "again from its source."
        )
    return spacecraft.lower()


def _images(root: Any) -> Iterator[_Image]:
    """Yield the images that the metadata list, of the product's one granule."""
    steps = ("General_Info", "Product_Info", "Product_Organisation", "Granule_List", "Granule")
    granules = root.findall("/".join(f"{{*}}{step}" for step in steps))
    if len(granules) != 1:
        raise _not_one_granule()
    for element in granules[0].findall("{*}IMAGE_FILE"):
        match = _IMAGE.fullmatch((element.text or "").strip())
        if match is None:
            raise invalid(
                f"{METADATA} lists an image by a name that is not of the format's kind. Fetch "
                "the product again from its source."
            )
        yield _Image(
            key=match["key"],
            metres=int(match["metres"]),
            name=f"{match[0]}.jp2",
            granule=match["granule"],
        )


def _not_one_granule() -> RejectedInput:
    return unsupported(
        "The product does not hold exactly one granule, and a scene is one tile. Send each tile "
        "as a product of its own, as the agency has delivered them since 2016."
    )


def _finest(images: Iterator[_Image]) -> dict[str, _Image]:
    """Return by key the image of the finest resolution."""
    found: dict[str, _Image] = {}
    for image in images:
        if image.key not in found or image.metres < found[image.key].metres:
            found[image.key] = image
    return found


def _granule(folder: Path, images: Mapping[str, _Image], tile: str) -> str:
    """Return the name of the folder of the one granule, which must be of the product's tile."""
    listed = {image.granule for image in images.values()}
    there = [entry.name for entry in _entries(folder / "GRANULE") if entry.is_dir()]
    if len(listed) != 1 or len(there) > 1:
        raise _not_one_granule()
    (granule,) = listed
    if there != [granule]:
        raise incomplete("The SAFE folder does not hold the granule that its metadata list.")
    match = _GRANULE.fullmatch(granule)
    if match is None or match["tile"] != tile:
        raise invalid(
            "The product's name and its granule say different tiles. Fetch the product again "
            "from its source."
        )
    return granule


def _entries(folder: Path) -> list[Path]:
    return sorted(folder.iterdir()) if folder.is_dir() else []


def _sensed_at(folder: Path, granule: str) -> datetime:
    root = _xml(folder, f"GRANULE/{granule}/MTD_TL.xml")
    told = root.findtext("{*}General_Info/{*}SENSING_TIME")
    return instant_of(told or "", what="SENSING_TIME in MTD_TL.xml")


def _parts(images: Mapping[str, _Image]) -> dict[str, _Image]:
    """Return by part its image: the bands that the profile knows, and the classification."""
    found = {
        band.role.value: images[band.name] for band in SENTINEL_2_L2A.bands if band.name in images
    }
    return {**found, QUALITY: images[_SCL]} if _SCL in images else found


def _files(folder: Path, images: Mapping[str, _Image]) -> dict[str, Span]:
    """Return by key the files to send; every image that is taken must be there."""
    if _SCL not in images:
        raise invalid(
            f"{METADATA} lists no scene classification (SCL), without which clouds can't be "
            "told from ground. Get the full Level-2A product."
        )
    paths = {
        image.key: (image, file_inside(folder, image.name)) for image in _parts(images).values()
    }
    missing = [image.told for image, path in paths.values() if path is None]
    if missing:
        raise incomplete(
            f"The metadata list files that are not there or are empty: {', '.join(missing)}."
        )
    return {key: Span.whole(path) for key, (_, path) in paths.items() if path is not None}


def _scalings(root: Any, baseline: str, images: Mapping[str, _Image]) -> dict[BandRole, Scaling]:
    """Return by band role the scaling that the metadata state: (number + offset) / divisor."""
    characteristics = "Product_Image_Characteristics"
    divisor = _number(
        _text(root, characteristics, "QUANTIFICATION_VALUES_LIST", "BOA_QUANTIFICATION_VALUE")
    )
    if divisor <= 0:
        raise _no_number()
    steps = ("General_Info", characteristics, "BOA_ADD_OFFSET_VALUES_LIST", "BOA_ADD_OFFSET")
    offsets = {
        element.get("band_id"): _number(element.text or "")
        for element in root.findall("/".join(f"{{*}}{step}" for step in steps))
    }
    # Before 04.00 there was none, and the metadata have no list of them.
    is_listed = bool(offsets) or SENTINEL_2_L2A.published(baseline).offset != 0.0
    ids = _band_ids(root)
    found = {}
    for part, image in _parts(images).items():
        if part == QUALITY:
            continue
        offset = offsets.get(ids.get(image.key)) if is_listed else 0.0
        if offset is None:
            raise invalid(
                f"The metadata do not state BOA_ADD_OFFSET of {image.key}, which a product of "
                f"baseline {baseline} needs. Fetch the product again from its source."
            )
        found[BandRole(part)] = Scaling(scale=1 / divisor, offset=offset / divisor)
    return found


def _band_ids(root: Any) -> dict[str, str]:
    """Return by band name its id in the metadata."""
    steps = (
        "General_Info",
        "Product_Image_Characteristics",
        "Spectral_Information_List",
        "Spectral_Information",
    )
    told = {
        str(element.get("physicalBand", ""))[1:]: str(element.get("bandId", ""))
        for element in root.findall("/".join(f"{{*}}{step}" for step in steps))
    }
    ids = told or {band: str(number) for number, band in enumerate(_BAND_IDS)}
    return {f"B{band.rjust(2, '0')}": number for band, number in ids.items()}


def _number(text: str) -> float:
    try:
        number = float(text)
    except ValueError:
        raise _no_number() from None
    if not math.isfinite(number):
        raise _no_number()
    return number


def _no_number() -> RejectedInput:
    return invalid(
        f"{METADATA} states a scale or an offset that is no such number. Fetch the product again "
        "from its source."
    )


def _left_out(images: Mapping[str, _Image]) -> dict[str, str]:
    lacking = {
        band.name: "the metadata list no image of it"
        for band in SENTINEL_2_L2A.bands
        if band.name not in images
    }
    unused = {key: reason for key, reason in _LEFT_OUT.items() if key in images}
    return {**lacking, **unused, "coarser copies": "each band goes at its finest resolution"}
