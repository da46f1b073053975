"""Receiving a scene: multipart parts streamed to the archive's incoming files while hashed."""

from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path
from typing import Final

from fastapi import Request

from service.api.bodies import JSON_LIMIT_BYTES
from service.api.context import Context
from service.api.multipart import FileSink, Sink, TextSink, receive_parts
from service.errors import RejectedInput, Unavailable
from service.settings import Settings
from service.spectral.gathered import QUALITY, SATURATION
from service.spectral.roles import BandRole
from service.tiles.archive import Archive

SCENE: Final = "scene"
STACK: Final = "stack"
_PARTS: Final = frozenset({SCENE, STACK, QUALITY, SATURATION, *(role.value for role in BandRole)})


@dataclass(frozen=True, slots=True, kw_only=True)
class FileReceived:
    """A file part on disk, under a name of our own."""

    path: Path
    digest: str
    size: int


@dataclass(frozen=True, slots=True, kw_only=True)
class SceneReceived:
    """A scene's parts: the bytes of the ``scene`` part, and the files by part name."""

    scene: bytes
    files: dict[str, FileReceived]


class _SceneParts:
    """Opens the parts of a scene: ``scene`` first, to memory, then files."""

    def __init__(self, archive: Archive, settings: Settings, stack: ExitStack) -> None:
        self._archive = archive
        self._settings = settings
        self._stack = stack
        self._scene: TextSink | None = None
        self._files: dict[str, FileSink] = {}

    def open(self, name: str) -> Sink:
        """Return where a part goes."""
        if name not in _PARTS:
            raise RejectedInput(
                "invalid-input",
                "A part has a name that means nothing here. Parts are `scene`, then files named "
                f"by band role ({', '.join(BandRole)}), `quality`, `saturation`, or one `stack`.",
            )
        if (name == SCENE) != (self._scene is None):
            raise _scene_first()
        if name == SCENE:
            self._scene = TextSink(pointer=f"/{SCENE}", limit=JSON_LIMIT_BYTES)
            return self._scene
        if name in self._files:
            raise RejectedInput.at(f"/{name}", "Two parts have this name; send one.")
        check_disk(self._archive, self._settings)
        path = self._stack.enter_context(self._archive.incoming())
        self._files[name] = FileSink(path, self._stack.enter_context(path.open("wb")))
        return self._files[name]

    def received(self) -> SceneReceived:
        """Return what was received, once the body has ended."""
        if self._scene is None:
            raise _scene_first()
        return SceneReceived(
            scene=bytes(self._scene.content),
            files={
                name: FileReceived(path=file.path, digest=file.digest, size=file.size)
                for name, file in self._files.items()
            },
        )


def _scene_first() -> RejectedInput:
    return RejectedInput.at(
        f"/{SCENE}", "The first part must be `scene`, once: JSON that says what the files are."
    )


def check_disk(archive: Archive, settings: Settings) -> None:
    """Refuse an upload while the disk is too full to take it.

    Raises
    ------
    Unavailable
        The reserve is touched, or the archive is at its limit.
    """
    limit = settings.archive_limit_bytes
    if archive.free_bytes() < settings.disk_reserve_bytes or (
        limit and archive.bytes_used() >= limit
    ):
        raise Unavailable(
            "disk-full",
            "The service's disk is too full to take scenes; nothing was kept. Send it again once "
            "the operator has made room.",
            retry_after_seconds=600,
        )


async def parts_received(request: Request, context: Context, stack: ExitStack) -> SceneReceived:
    """Return a scene's parts; their files end with the stack."""
    parts = _SceneParts(context.archive, context.settings, stack)
    limit = context.settings.scene_upload_limit_bytes
    await receive_parts(request, parts.open, limit=limit)
    return parts.received()
