"""Landsat Collection 2 Level-2 bundles as delivered: a folder, or the tar of one.

Source: USGS, Landsat Collection 2 Level-2 data format control books (LSDS-1618 for Landsat
4 to 7, LSDS-1619 for 8 and 9); names of keys of the quality layers' files from memory.
"""

import re
import tarfile
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Any, Final

from service.products.odl import TOP, groups_of
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
from service.spectral.bands import Band
from service.spectral.gathered import QUALITY, SATURATION
from service.spectral.scaling import Scaling
from service.spectral.sensors import LANDSAT_C2_L2, Sensor

KIND: Final = "Landsat Collection 2 Level-2 bundle"
_MTL: Final = "_MTL.txt"
# Real ones have some tens of kilobytes.
_MTL_LIMIT: Final = 2**20
_MEMBERS: Final = 1000
_CONTENTS: Final = "PRODUCT_CONTENTS"
_ATTRIBUTES: Final = "IMAGE_ATTRIBUTES"
_REFLECTANCE: Final = "LEVEL2_SURFACE_REFLECTANCE_PARAMETERS"
_TEMPERATURE: Final = "LEVEL2_SURFACE_TEMPERATURE_PARAMETERS"
_ID: Final = re.compile(
    r"L[COET](?P<number>[0-9]{2})_(?P<level>L2S[PR])_(?P<tile>[0-9]{6})"
    r"_(?P<date>[0-9]{8})_[0-9]{8}_02_(T1|T2|RT)"
)
_QUALITY_KEYS: Final = {
    QUALITY: ("QA_PIXEL", "FILE_NAME_QUALITY_L1_PIXEL"),
    SATURATION: ("QA_RADSAT", "FILE_NAME_QUALITY_L1_RADIOMETRIC_SATURATION"),
}
Groups = Mapping[str, Mapping[str, str]]


@dataclass(frozen=True, slots=True, kw_only=True)
class _Listed:
    """A layer that the metadata list: its name for people, and its file's."""

    name: str
    file: str


def is_landsat(folder: Path) -> bool:
    """Whether a folder looks like a bundle, complete or not."""
    return any(
        path.name.endswith(_MTL) or re.fullmatch(r"L[COET]0[0-9]_L.+\.TIF", path.name, re.I)
        for path in folder.iterdir()
    )


def read_landsat(path: Path) -> Product[Span]:
    """Return what a bundle holds, in a folder or a tar.

    The scaling is read from the Level-2 groups; those of Level-1 have the same keys.

    Raises
    ------
    RejectedInput
        The bundle is of another level or collection, contradicts itself, or lacks a group
        or a file.
    """
    files = _files_of_tar(path) if path.is_file() else _files_of_folder(path)
    groups = groups_of(_mtl_text(files))
    contents, attributes = _group(groups, _CONTENTS), _group(groups, _ATTRIBUTES)
    tokens = _tokens(contents)
    sensor = _sensor(attributes, tokens)
    sensed_at = _sensed_at(attributes, tokens)
    layers, lacking = _layers(contents, sensor, tokens["ref"])
    missing = [layer.name for layer in layers.values() if layer.file not in files]
    if missing:
        raise incomplete(
            f"The metadata list files that are not there or are empty: {', '.join(missing)}."
        )
    stated = {
        band.role: _stated(groups, band) for band in sensor.bands if band.role.value in layers
    }
    scene: dict[str, Any] = {
        "ref": tokens["ref"],
        "sensor": LANDSAT_C2_L2.id,
        "acquired_at": written(sensed_at),
        "platform": _platform(attributes),
        "tile": tokens["tile"],
        **scaling_part(stated, sensor, processing_baseline=None),
    }
    sent = {layer.file for layer in layers.values()}
    return Product(
        kind=KIND,
        scene=scene,
        files={part: files[layer.file] for part, layer in layers.items()},
        found=tuple(
            Found(part=part, source=layer.name, by="file name in the metadata")
            for part, layer in layers.items()
        ),
        left_out={**lacking, **_left_out(files, sent)},
    )


def _files_of_folder(folder: Path) -> dict[str, Span]:
    found = {}
    for entry in sorted(folder.iterdir()):
        path = file_inside(folder, entry.name)
        if path is not None:
            found[entry.name] = Span.whole(path)
    return found


def _files_of_tar(path: Path) -> dict[str, Span]:
    """Return where in a tar its files lie; nothing is extracted, names are only compared."""
    found = {}
    try:
        with tarfile.open(path, "r:") as tar:
            for count, member in enumerate(tar):
                if count >= _MEMBERS:
                    raise unsupported("The tar holds more files than a bundle does.")
                if member.isfile() and not member.issparse() and member.size:
                    name = member.name.rsplit("/", 1)[-1]
                    found[name] = Span(path=path, start=member.offset_data, size=member.size)
    except tarfile.TarError:
        raise incomplete(
            "The file is no uncompressed tar, or ends early; unpack a compressed one first."
        ) from None
    whole = path.stat().st_size
    return {name: span for name, span in found.items() if span.start + span.size <= whole}


def _mtl_text(files: Mapping[str, Span]) -> str:
    names = [name for name in files if name.endswith(_MTL)]
    if not names:
        raise incomplete("The bundle has no MTL text (its name ends in _MTL.txt).")
    if len(names) > 1:
        raise unsupported("There are several MTL texts here; put each bundle in its own folder.")
    content = read_limited(files[names[0]], limit=_MTL_LIMIT, what="The MTL text")
    return content.decode("utf-8", "replace")


def _group(groups: Groups, name: str) -> Mapping[str, str]:
    if name not in groups or TOP not in groups:
        raise invalid(
            f"The MTL text has no group {name if TOP in groups else TOP}, so its values can't be "
            "told from those of other levels. Take the text that came with the Level-2 product "
            "of Collection 2."
        )
    return groups[name]


def _value(group: Mapping[str, str], key: str) -> str:
    if not group.get(key):
        raise invalid(
            f"The MTL text does not say {key} in the group where it belongs. Fetch the bundle "
            "again from its source."
        )
    return group[key]


def _tokens(contents: Mapping[str, str]) -> Mapping[str, str]:
    """Return the tokens of the product's identifier, once its level is one that is read."""
    level = _value(contents, "PROCESSING_LEVEL")
    if level.startswith("L1"):
        raise unsupported(
            "This is a Level-1 product: reflectance at the top of the atmosphere. Get the Level-2 "
            "product (L2SP or L2SR) of the same scene."
        )
    match = _ID.fullmatch(_value(contents, "LANDSAT_PRODUCT_ID"))
    if match is None or match["level"] != level:
        raise unsupported(
            "The MTL text is not that of a Level-2 product (L2SP or L2SR) of Collection 2 with "
            "its identifier. Get the bundle again from its source."
        )
    return {**match.groupdict(), "ref": match[0]}


def _platform(attributes: Mapping[str, str]) -> str:
    return _value(attributes, "SPACECRAFT_ID").lower().replace("_", "-")


def _sensor(attributes: Mapping[str, str], tokens: Mapping[str, str]) -> Sensor:
    platform = _platform(attributes)
    if platform not in LANDSAT_C2_L2.platforms:
        raise unsupported(
            "The spacecraft is none whose bands are known here: "
            f"{', '.join(LANDSAT_C2_L2.platforms)}."
        )
    told = (_value(attributes, "WRS_PATH").zfill(3), _value(attributes, "WRS_ROW").zfill(3))
    if platform != f"landsat-{int(tokens['number'])}" or "".join(told) != tokens["tile"]:
        raise _contradicts("spacecraft, path or row")
    return LANDSAT_C2_L2.on(platform)


def _contradicts(what: str) -> Exception:
    return invalid(
        f"The MTL text says another {what} than its product identifier. Fetch the bundle again "
        "from its source."
    )


def _sensed_at(attributes: Mapping[str, str], tokens: Mapping[str, str]) -> datetime:
    date, time = _value(attributes, "DATE_ACQUIRED"), _value(attributes, "SCENE_CENTER_TIME")
    if date.replace("-", "") != tokens["date"]:
        raise _contradicts("date")
    return instant_of(f"{date}T{time}", what="DATE_ACQUIRED with SCENE_CENTER_TIME")


def _layers(
    contents: Mapping[str, str], sensor: Sensor, ref: str
) -> tuple[dict[str, _Listed], dict[str, str]]:
    """Return by part the layer that the metadata list, and what they lack with the reason."""
    found: dict[str, _Listed] = {}
    lacking = {}
    for band in sensor.bands:
        if band.unit == "kelvin" and contents["PROCESSING_LEVEL"] == "L2SR":
            lacking[band.name] = "a product of level L2SR has no surface temperature"
            continue
        file = _value(contents, f"FILE_NAME_BAND_{band.name.removeprefix('SR_B')}")
        found[band.role.value] = _Listed(name=band.name, file=_bare(file))
    for part, (name, key) in _QUALITY_KEYS.items():
        found[part] = _Listed(name=name, file=_bare(contents.get(key) or f"{ref}_{name}.TIF"))
    return found, lacking


def _bare(name: str) -> str:
    if "/" in name or "\\" in name:
        raise invalid(
            "The MTL text names a file outside of its own folder. Fetch the bundle again from "
            "its source."
        )
    return name


def _stated(groups: Groups, band: Band) -> Scaling:
    name, quantity, suffix = _REFLECTANCE, "REFLECTANCE", band.name.removeprefix("SR_B")
    if band.unit == "kelvin":
        name, quantity, suffix = _TEMPERATURE, "TEMPERATURE", band.name
    group = _group(groups, name)
    try:
        return Scaling(
            scale=float(_value(group, f"{quantity}_MULT_BAND_{suffix}")),
            offset=float(_value(group, f"{quantity}_ADD_BAND_{suffix}")),
        )
    except ValueError:
        raise invalid(
            f"The group {name} states a scale or an offset that is no such number. Fetch the "
            "bundle again from its source."
        ) from None


def _left_out(files: Mapping[str, Span], sent: set[str]) -> dict[str, str]:
    rest = [name for name in files if name.upper().endswith(".TIF") and name not in sent]
    return {
        "_".join(Path(name).stem.split("_")[7:]) or name: "no index and no quality rule uses it"
        for name in rest
    }
