"""Receiving multipart/form-data (RFC 7578): each part goes to its own sink as it comes."""

import hashlib
from collections.abc import Callable
from pathlib import Path
from typing import IO, Any, Final, Protocol

from fastapi import Request
from python_multipart.exceptions import FormParserError
from python_multipart.multipart import MultipartParser, parse_options_header

from service.api.bodies import stream_to, unsupported_media_type
from service.errors import RejectedInput

_HEADER_LIMIT: Final = 8_192


class Sink(Protocol):
    """Where a part goes."""

    def write(self, data: bytes) -> None:
        """Take the next bytes."""

    def close(self) -> None:
        """Take note that the part is complete."""


class FileSink:
    """A part that is hashed while it is written to a file of our own name."""

    def __init__(self, path: Path, file: IO[bytes]) -> None:
        self.path = path
        self.size = 0
        self._file = file
        self._hashed = hashlib.sha256()

    @property
    def digest(self) -> str:
        """SHA-256 of what was written."""
        return self._hashed.hexdigest()

    def write(self, data: bytes) -> None:
        """Write and hash."""
        self.size += len(data)
        self._hashed.update(data)
        self._file.write(data)

    def close(self) -> None:
        """Close the file."""
        self._file.close()


class TextSink:
    """A short part that is kept in memory."""

    def __init__(self, *, pointer: str, limit: int) -> None:
        self.content = bytearray()
        self._pointer = pointer
        self._limit = limit

    def write(self, data: bytes) -> None:
        """Keep the bytes, as long as they are few."""
        self.content += data
        if len(self.content) > self._limit:
            raise RejectedInput.at(self._pointer, "This part is too long.")

    def close(self) -> None:
        """Do nothing more."""


class _Parts:
    """Takes the parser's events and passes each part on to the sink that is opened for it."""

    def __init__(self, open_part: Callable[[str], Sink]) -> None:
        self._open_part = open_part
        self._sink: Sink | None = None
        self._headers: dict[bytes, bytes] = {}
        self._field = self._value = b""
        self.is_complete = False

    def parser(self, boundary: bytes) -> MultipartParser:
        """Return the parser that drives this."""
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

    def _begin(self) -> None:
        self._headers = {}

    def _header_field(self, data: bytes, start: int, end: int) -> None:
        self._field += data[start:end]
        self._check_header()

    def _header_value(self, data: bytes, start: int, end: int) -> None:
        self._value += data[start:end]
        self._check_header()

    def _check_header(self) -> None:
        if len(self._field) + len(self._value) > _HEADER_LIMIT:
            raise RejectedInput("malformed-body", "A part's header is too long.")

    def _header_end(self) -> None:
        self._headers[self._field.lower()] = self._value
        self._field = self._value = b""

    def _open(self) -> None:
        _, options = parse_options_header(self._headers.get(b"content-disposition", b""))
        self._sink = self._open_part(options.get(b"name", b"").decode("utf-8", "replace"))

    def _data(self, data: bytes, start: int, end: int) -> None:
        if self._sink is not None:
            self._sink.write(data[start:end])

    def _close(self) -> None:
        if self._sink is not None:
            self._sink.close()
        self._sink = None

    def _end(self) -> None:
        self.is_complete = True


async def receive_parts(request: Request, open_part: Callable[[str], Any], *, limit: int) -> None:
    """Pass a multipart body on, part by part.

    Parameters
    ----------
    open_part
        Gives the sink for a part of a name, or refuses it.
    limit
        Largest body in bytes.

    Raises
    ------
    RejectedInput
        The body is no multipart/form-data, is cut short, or over the limit.
    """
    kind, options = parse_options_header(request.headers.get("Content-Type", ""))
    boundary = options.get(b"boundary")
    if kind != b"multipart/form-data" or not boundary:
        raise unsupported_media_type("multipart/form-data")
    parts = _Parts(open_part)
    try:
        parser = parts.parser(boundary)
        await stream_to(request, parser.write, limit=limit)
        parser.finalize()
    except FormParserError as error:
        raise RejectedInput(
            "malformed-body", "The body is not well-formed multipart/form-data (RFC 7578)."
        ) from error
    if not parts.is_complete:
        raise RejectedInput("malformed-body", "The multipart body ended before its last part.")
