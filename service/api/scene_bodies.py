"""What a scene is posted as: parts of a multipart body, or a STAC Item that names its files."""

from collections.abc import AsyncIterator
from contextlib import ExitStack
from dataclasses import replace
from datetime import datetime
from typing import Annotated, Final, Literal

from fastapi import Depends, Query, Request
from starlette.concurrency import run_in_threadpool

from service.api.batches import model_of
from service.api.bodies import JSON_LIMIT_BYTES, stream_to, unsupported_media_type
from service.api.context import Context, Ctx
from service.api.items import ItemReceived, fetched, item_received, told_of_item
from service.api.scene_checks import SceneIn, checked_scene
from service.api.uploads import SCENE, SceneReceived, parts_received
from service.errors import RejectedInput
from service.store.scenes import SceneSent

_MULTIPART: Final = "multipart/form-data"
_ITEM: Final = ("application/json", "application/geo+json")
MEDIA_TYPES: Final = (_MULTIPART, *_ITEM)


async def _receive(
    request: Request,
    context: Ctx,
    is_replacing: Annotated[
        Literal["true", "false"] | None,
        Query(alias="replace", description="For a STAC Item, as `replace` of the `scene` part."),
    ] = None,
) -> AsyncIterator[SceneReceived | ItemReceived]:
    media_type = request.headers.get("Content-Type", "").partition(";")[0].strip().lower()
    if media_type in _ITEM:
        body = bytearray()
        digest = await stream_to(request, body.extend, limit=JSON_LIMIT_BYTES)
        yield await run_in_threadpool(
            item_received, bytes(body), digest=digest, is_replacing=is_replacing == "true"
        )
        return
    if media_type != _MULTIPART:
        raise unsupported_media_type(*MEDIA_TYPES)
    if is_replacing is not None:
        raise RejectedInput.parameter(
            "replace", "This is for a STAC Item; in a multipart body the `scene` part says it."
        )
    with ExitStack() as stack:
        yield await parts_received(request, context, stack)


SceneBody = Annotated[SceneReceived | ItemReceived, Depends(_receive)]


def fingerprint_of(received: SceneReceived | ItemReceived) -> str | None:
    """Return what makes two requests the same before any file is there; None for parts."""
    return f"item\n{received.digest}" if isinstance(received, ItemReceived) else None


def ref_of(received: SceneReceived | ItemReceived) -> str:
    """Return the ref of an Item."""
    scene = received.product.scene if isinstance(received, ItemReceived) else {}
    return str(scene.get("ref", ""))


def ready(
    received: SceneReceived | ItemReceived, context: Context, stack: ExitStack, *, at: datetime
) -> SceneSent:
    """Return a scene that may be kept; its files are in the archive.

    Raises
    ------
    RejectedInput
        Its metadata or its files' headers break a rule; an Item's pointers lead into the Item.
    Unavailable
        A file that an Item names can't be had now.
    """
    if isinstance(received, SceneReceived):
        return _archived(received, context, at=at)
    with told_of_item(received):
        model_of(SceneIn, received.product.scene, f"/{SCENE}")
    parts = fetched(received, context, stack)
    with told_of_item(received):
        return replace(_archived(parts, context, at=at), found=received.found)


def _archived(parts: SceneReceived, context: Context, *, at: datetime) -> SceneSent:
    sent, paths = checked_scene(parts, context.sessions, at=at)
    for file in sent.files:
        context.archive.keep(paths[file.part], file.digest)
    return sent
