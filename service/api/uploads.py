"""Receiving a scene: multipart parts streamed to the archive's incoming files while hashed."""

import hashlib
from collections.abc import AsyncIterator
from contextlib import ExitStack
from dataclasses import dataclass, field
from pathlib import Path
from typing import Annotated, Any, Final

from fastapi import Depends, Request
from python_multipart.exceptions import FormParserError
from python_multipart.multipart import MultipartParser, parse_options_header

from service.api.bodies import JSON_LIMIT_BYTES, stream_to, unsupported_media_type
from service.api.context import Ctx
from service.errors import RejectedInput, Unavailable
from service.settings import Settings
from service.spectral.gathered import QUALITY, SATURATION
from service.spectral.roles import BandRole
from service.tiles.archive import Archive

SCENE: Final = "scene"
STACK: Final = "stack"
_PARTS: Final = frozenset({SCENE, STACK, QUALITY, SATURATION, *(role.value for role in BandRole)})
_HEADER_LIMIT: Final = 8_192


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


@dataclass(slots=True)
class _Part:
    """The part that is being received."""

    headers: dict[bytes, bytes] = field(default_factory=dict)
    name: str = ""
    header_field: bytes = b""
    header_value: bytes = b""
    size: int = 0
    hashed: Any = field(default_factory=hashlib.sha256)
    file: Any = None
    path: Path | None = None


class _Receiver:
    """Takes the parser's events: each part goes to its own file, ``scene`` to memory."""

    def __init__(self, archive: Archive, settings: Settings, stack: ExitStack) -> None:
        self._archive = archive
        self._settings = settings
        self._stack = stack
        self._part = _Part()
        self._scene: bytearray | None = None
        self._files: dict[str, FileReceived] = {}
        self._is_complete = False

    def parser(self, boundary: bytes) -> MultipartParser:
        """Return the parser that drives this receiver."""
        return MultipartParser(
            boundary,
            {
                "on_part_begin": self._begin,
                "on_header_field": self._header_field,
                "on_header_value": self._header_value,
                "on_header_end": self._header_end,
                "on_headers_finished": self._open,
                "on_part_data": self._data,
                "on_part_end": self._close,
                "on_end": self._end,
            },
        )

    def received(self) -> SceneReceived:
        """Return what was received, once the body has ended."""
        if not self._is_complete:
            raise RejectedInput("malformed-body", "The multipart body ended before its last part.")
        if self._scene is None:
            raise _scene_first()
        return SceneReceived(scene=bytes(self._scene), files=self._files)

    def _begin(self) -> None:
        self._part = _Part()

    def _header_field(self, data: bytes, start: int, end: int) -> None:
        self._part.header_field += data[start:end]
        self._check_header()

    def _header_value(self, data: bytes, start: int, end: int) -> None:
        self._part.header_value += data[start:end]
        self._check_header()

    def _check_header(self) -> None:
        if len(self._part.header_field) + len(self._part.header_value) > _HEADER_LIMIT:
            raise RejectedInput("malformed-body", "A part's header is too long.")

    def _header_end(self) -> None:
        part = self._part
        part.headers[part.header_field.lower()] = part.header_value
        part.header_field = part.header_value = b""

    def _open(self) -> None:
        _, options = parse_options_header(self._part.headers.get(b"content-disposition", b""))
        name = options.get(b"name", b"").decode("utf-8", "replace")
        if name not in _PARTS:
            raise RejectedInput(
                "invalid-input",
                "A part has a name that means nothing here. Parts are `scene`, then files named "
                f"by band role ({', '.join(BandRole)}), `quality`, `saturation`, or one `stack`.",
            )
        self._part.name = name
        if name == SCENE:
            if self._scene is not None or self._files:
                raise _scene_first()
            self._scene = bytearray()
            return
        if self._scene is None:
            raise _scene_first()
        if name in self._files:
            raise RejectedInput.at(f"/{name}", "Two parts have this name; send one.")
        check_disk(self._archive, self._settings)
        self._part.path = self._stack.enter_context(self._archive.incoming())
        self._part.file = self._stack.enter_context(self._part.path.open("wb"))

    def _data(self, data: bytes, start: int, end: int) -> None:
        part = self._part
        part.size += end - start
        if part.file is None:
            assert self._scene is not None  # noqa: S101 - `_open` made it
            if part.size > JSON_LIMIT_BYTES:
                raise RejectedInput.at(f"/{SCENE}", "The scene part is too large.")
            self._scene += data[start:end]
            return
        piece = data[start:end]
        part.hashed.update(piece)
        part.file.write(piece)

    def _close(self) -> None:
        part = self._part
        if part.file is not None and part.path is not None:
            part.file.close()
            self._files[part.name] = FileReceived(
                path=part.path, digest=part.hashed.hexdigest(), size=part.size
            )

    def _end(self) -> None:
        self._is_complete = True


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


async def _receive(request: Request, context: Ctx) -> AsyncIterator[SceneReceived]:
    kind, options = parse_options_header(request.headers.get("Content-Type", ""))
    boundary = options.get(b"boundary")
    if kind != b"multipart/form-data" or not boundary:
        raise unsupported_media_type("multipart/form-data")
    with ExitStack() as stack:
        receiver = _Receiver(context.archive, context.settings, stack)
        try:
            parser = receiver.parser(boundary)
            limit = context.settings.scene_upload_limit_bytes
            await stream_to(request, parser.write, limit=limit)
            parser.finalize()
        except FormParserError as error:
            raise RejectedInput(
                "malformed-body", "The body is not well-formed multipart/form-data (RFC 7578)."
            ) from error
        yield receiver.received()


SceneUpload = Annotated[SceneReceived, Depends(_receive)]
