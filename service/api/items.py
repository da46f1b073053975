"""STAC Items as scenes: read, their assets fetched, and faults named by places in the Item."""

import io
import json
from collections.abc import Iterable, Mapping
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass, replace
from typing import Any, Final

from service.api.context import Context
from service.api.multipart import FileSink
from service.api.uploads import SCENE, STACK, FileReceived, SceneReceived, check_disk
from service.errors import Fault, RejectedInput, pointer_of
from service.products.product import Product
from service.products.stac import product_of
from service.streams import json_document
from service.tiles.assets import named

_PLACES: Final = {
    "ref": "/id",
    "sensor": "/properties/platform",
    "platform": "/properties/platform",
    "acquired_at": "/properties/datetime",
    "scaling": "/assets",
}
"""By member of the ``scene`` part where the Item says it; what is not here, in its properties."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ItemReceived:
    """A STAC Item, understood; nothing is fetched yet.

    `digest` is of the Item as it was sent, and `is_replacing` what the request said.
    """

    product: Product[str]
    digest: str
    is_replacing: bool

    @property
    def found(self) -> list[dict[str, str]]:
        """How each part was found, as it is kept with the scene."""
        return [
            {"part": found.part, "asset": found.source, "by": found.by}
            for found in self.product.found
        ]


def item_received(body: bytes, *, digest: str, is_replacing: bool) -> ItemReceived:
    """Return the Item that is a body.

    Raises
    ------
    RejectedInput
        It is no Item that can be read without guessing.
    """
    product = product_of(json_document(io.BytesIO(body)))
    return ItemReceived(product=product, digest=digest, is_replacing=is_replacing)


def fetched(item: ItemReceived, context: Context, stack: ExitStack) -> SceneReceived:
    """Return an Item's scene with its files, copied to incoming files that end with the stack.

    Every address is looked at before the first file is fetched.

    Raises
    ------
    RejectedInput
        An address is under no allowed root, a file is not there, or they are too large.
    Unavailable
        A file can't be had now or in time, or other Items are being fetched.
    """
    assets = context.assets
    pointers = {part: _asset_pointer(item, part) for part in item.product.files}
    sources = {}
    for part, href in item.product.files.items():
        with named(f"{pointers[part]}/href"):
            sources[part] = assets.source(href)
    left = context.settings.scene_upload_limit_bytes
    files = {}
    with assets.turn() as deadline:
        for part, source in sources.items():
            check_disk(context.archive, context.settings)
            path = stack.enter_context(context.archive.incoming())
            with path.open("wb") as file, named(f"{pointers[part]}/href"):
                sink = FileSink(path, file)
                assets.copy(source, sink.write, deadline=deadline, size=left)
            left -= sink.size
            files[part] = FileReceived(path=path, digest=sink.digest, size=sink.size)
    scene = {**item.product.scene, "replace": item.is_replacing}
    return SceneReceived(scene=json.dumps(scene).encode(), files=files)


def _asset_pointer(item: ItemReceived, part: str) -> str:
    keys = _keys(item.found, item.product.scene.get(STACK))
    return pointer_of(("assets", keys[part]))


def _keys(found: Iterable[Mapping[str, str]], stack: Iterable[str | None] | None) -> dict[str, str]:
    """Return by part the key of its asset; a stack's is that of any of its bands."""
    keys = {one["part"]: one["asset"] for one in found}
    in_stack = [keys[role] for role in stack or () if role in keys]
    return keys | ({STACK: in_stack[0]} if in_stack else {})


@contextmanager
def told_of_item(item: ItemReceived) -> Any:
    """Name what is wrong with a scene by where the Item says it."""
    try:
        yield
    except RejectedInput as error:
        keys = _keys(item.found, item.product.scene.get(STACK))
        faults = [replace(fault, pointer=_place(fault.pointer, keys)) for fault in error.faults]
        raise RejectedInput(error.code, error.detail, faults) from error


def faults_of_item(
    faults: Iterable[Mapping[str, str]],
    found: Iterable[Mapping[str, str]],
    details: Mapping[str, Any],
) -> list[dict[str, str]]:
    """Return the faults of a failed scene, by places in the Item that it was."""
    keys = _keys(found, details.get(STACK))
    placed = (
        Fault(
            detail=fault["detail"],
            pointer=_place(fault.get("pointer"), keys),
            parameter=fault.get("parameter"),
        )
        for fault in faults
    )
    return [fault.as_dict() for fault in placed]


def _place(pointer: str | None, keys: Mapping[str, str]) -> str | None:
    if pointer is None:
        return None
    _, first, *rest = (*pointer.split("/"), "")[:3]
    member = rest[0] if rest else ""
    if first == SCENE:
        if member == STACK and STACK in keys:
            return pointer_of(("assets", keys[STACK]))
        return _PLACES.get(member, "/properties")
    return pointer_of(("assets", keys[first])) if first in keys else "/assets"
