"""A STAC Item, version 1.0 or 1.1, understood as a scene.

Sources: STAC Item specification 1.0.0 and 1.1.0; the extensions eo, raster, projection, grid,
processing, and those of the agencies' own properties (``s2:…``, ``landsat:…``). No file is
opened here and nothing is fetched: a file is the address that the Item names.
"""

import re
from collections.abc import Callable, Iterable, Mapping
from pathlib import Path
from typing import Any, Final, TypeVar
from urllib.parse import unquote, urljoin, urlsplit

from service.errors import RejectedInput
from service.products.pointed import Node
from service.products.product import Found, Product
from service.products.stac_assets import Asset, assets_of, check_aligned, one_crs
from service.products.stac_properties import (
    acquired_at,
    baseline_of,
    check_level,
    sensor_of,
    tile_of,
)
from service.products.stac_roles import Resolved, parts_of
from service.products.stac_scaling import Known, check_nodata, flag_of, scaling_sent
from service.spectral.gathered import QUALITY, SATURATION
from service.spectral.roles import BandRole
from service.spectral.sensors import Sensor
from service.streams import json_document

ITEM_LIMIT_BYTES: Final = 2 * 1024**2
STACK: Final = "stack"
_VERSION: Final = re.compile(r"1\.[01]\.[0-9]+(?:-.+)?")
_SCHEME: Final = re.compile(r"[a-z][a-z0-9+.-]*:", re.IGNORECASE)
_NO_REASON: Final = "no band that a scene of this sensor takes"

Place = TypeVar("Place", str, Path | str)


def product_of(document: object) -> Product[str]:
    """Return an Item as a scene; its files are addresses, those relative to its own resolved.

    Raises
    ------
    RejectedInput
        It is no such Item, or can't be read without guessing; the pointer leads into it.
    """
    item = _item(document)
    base = _self_of(item)
    return _product(item, lambda href: _resolved(base, href))


def read_item(path: Path) -> Product[Path | str]:
    """Return an Item in a file as a scene.

    A relative address is that of a file beside the Item if there is one, else it is
    relative to the Item's ``self`` link.

    Raises
    ------
    RejectedInput
        As for `product_of`, or the file is too large.
    """
    with path.open("rb") as file:
        if path.stat().st_size > ITEM_LIMIT_BYTES:
            raise RejectedInput(
                "body-too-large", f"An Item has up to {ITEM_LIMIT_BYTES // 1024**2} MiB."
            )
        item = _item(json_document(file))
    base = _self_of(item)
    return _product(item, lambda href: _beside(path.parent, href) or _resolved(base, href))


def assets_by_part(product: Product[Any]) -> dict[str, str]:
    """Return by part which asset it is; the bands of a stack lead to the stack's."""
    return {found.part: found.source for found in product.found}


def _item(document: object) -> Node:
    item = Node(value=document)
    if item.must_be_object().member("type").text() != "Feature":
        raise item.member("type").refused("A STAC Item is a GeoJSON Feature; send one Item.")
    version = item.member("stac_version")
    if not _VERSION.fullmatch(version.text() or ""):
        raise version.refused("STAC Items are read in versions 1.0 and 1.1.")
    item.member("properties").must_be_object()
    return item


def _product(item: Node, place: Callable[[str], Place]) -> Product[Place]:
    properties = item.member("properties")
    sensor, platform = sensor_of(properties)
    check_level(properties, sensor)
    assets, left_out = assets_of(item)
    chosen, passed_over = _chosen([told for asset in assets for told in parts_of(asset, sensor)])
    used = {told.asset.key: told.asset for told in chosen.values()}
    _check_quality(item.member("assets"), chosen, sensor)
    for asset in used.values():
        check_aligned(asset)
    one_crs(used.values(), properties)
    bands = {
        BandRole(part): told.band
        for part, told in chosen.items()
        if part not in (QUALITY, SATURATION)
    }
    check_nodata(bands, sensor)
    baseline = baseline_of(properties, sensor)
    known = Known(sensor=sensor, baseline=baseline, is_applied=flag_of(properties))
    stack = _stack(used.values(), chosen)
    scene = {
        "ref": item.member("id").text(),
        "sensor": sensor.id,
        "acquired_at": acquired_at(properties),
        "platform": platform,
        "tile": tile_of(properties),
        "processing_baseline": baseline,
        "scaling": scaling_sent(bands, known) if bands else None,
        STACK: stack,
    }
    left_out |= {
        asset.key: passed_over.get(asset.key, _NO_REASON)
        for asset in assets
        if asset.key not in used
    }
    return Product(
        kind=f"STAC Item {item.member('stac_version').text()}",
        scene={name: value for name, value in scene.items() if value is not None},
        files=_files(chosen, used, place),
        found=tuple(
            Found(part=part, source=told.asset.key, by=told.by) for part, told in chosen.items()
        ),
        left_out=left_out,
    )


def _chosen(candidates: Iterable[Resolved]) -> tuple[dict[str, Resolved], dict[str, str]]:
    """Return for each part the best of its bands, and why other assets were passed over.

    The finest resolution counts first, then that it is GeoTIFF, then that it is a file of its
    own, then the Item's order.
    """
    chosen: dict[str, Resolved] = {}
    passed_over: dict[str, str] = {}
    for told in sorted(candidates, key=_rank):
        best = chosen.setdefault(told.part, told)
        if best is not told:
            is_finer = _rank(best)[0] < _rank(told)[0]
            passed_over[told.asset.key] = (
                f"{told.part} is taken from {best.asset.key}, which "
                f"{'is finer' if is_finer else 'is as fine and preferred'}"
            )
    return dict(sorted(chosen.items())), passed_over


def _rank(told: Resolved) -> tuple[float, bool, int]:
    resolution_m = told.asset.resolution_m
    is_known = resolution_m is not None and resolution_m > 0
    finest = float(resolution_m or 0) if is_known else float("inf")
    return finest, not told.asset.is_geotiff, len(told.asset.bands)


def _check_quality(assets: Node, chosen: Mapping[str, Resolved], sensor: Sensor) -> None:
    if sensor.quality is not None and QUALITY not in chosen:
        raise assets.refused(
            f"The Item has no asset of the quality layer {sensor.quality.id.upper()}, by key or "
            "band name. Add it; a product without one is posted as files, where that can be said.",
            code="wrong-quality-layer",
        )


def _stack(used: Iterable[Asset], chosen: Mapping[str, Resolved]) -> list[str | None] | None:
    """Return what the bands of the one asset of several are, None if there is none.

    Raises
    ------
    RejectedInput
        There are two of them.
    """
    several = [asset for asset in used if len(asset.bands) > 1]
    if len(several) > 1:
        raise several[1].node.refused(
            "A scene takes one file of several bands, and this is the second. Give its bands as "
            "assets of their own."
        )
    if not several:
        return None
    (asset,) = several
    by_number = {told.band.number: part for part, told in chosen.items() if told.asset is asset}
    return [by_number.get(band.number) for band in asset.bands]


def _files(
    chosen: Mapping[str, Resolved], used: Mapping[str, Asset], place: Callable[[str], Place]
) -> dict[str, Place]:
    places = {key: place(_href(asset)) for key, asset in used.items()}
    return {
        part if len(told.asset.bands) == 1 else STACK: places[told.asset.key]
        for part, told in chosen.items()
    }


def _href(asset: Asset) -> str:
    node = asset.node.member("href")
    href = node.text()
    if href is None or not href.isprintable():
        raise node.refused("An asset's `href` is the address of its file, in printable characters.")
    return href


def _self_of(item: Node) -> str | None:
    """Return the address of the Item itself, None if it does not say."""
    for link in item.member("links").items():
        if link.must_be_object().member("rel").text() == "self":
            return link.member("href").text()
    return None


def _resolved(base: str | None, href: str) -> str:
    """Return an address as it is meant where the Item stands (RFC 3986, 5); else as it is."""
    if _SCHEME.match(href) or base is None or not _SCHEME.match(base):
        return href
    scheme, _, rest = base.partition(":")
    if scheme.lower() != "s3":
        return urljoin(base, href)
    # The standard library resolves the schemes that it knows.
    return f"s3:{urljoin(f'https:{rest}', href).partition(':')[2]}"


def _beside(folder: Path, href: str) -> Path | None:
    """Return the file on this machine that an address names, None if it names none."""
    parts = urlsplit(href)
    if parts.scheme == "file":
        return Path(unquote(parts.path))
    if parts.scheme or parts.netloc:
        return None
    found = (folder / name for name in (href, unquote(parts.path)))
    return next((path for path in found if path.is_file()), None)
