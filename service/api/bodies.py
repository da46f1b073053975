"""Reading bodies: streamed to disk under a cap while they are hashed, parsed item by item."""

import base64
import csv
import hashlib
import io
import tempfile
from collections.abc import AsyncIterator, Callable, Iterator, Mapping
from dataclasses import dataclass
from typing import IO, Annotated, Any, Final

import ijson
from fastapi import Depends, Request
from starlette.concurrency import run_in_threadpool

from service.api.preferences import preferences_of
from service.errors import RejectedInput

MEBIBYTE: Final = 1024**2
BULK_LIMIT_BYTES: Final = 64 * MEBIBYTE
JSON_LIMIT_BYTES: Final = 2 * MEBIBYTE
BULK_LIMIT_ROWS: Final = 100_000
MAX_DEPTH: Final = 32
_IN_MEMORY: Final = MEBIBYTE


@dataclass(frozen=True, slots=True, kw_only=True)
class BulkBody:
    """A bulk body on disk: its media type, its SHA-256, and whether good items may land alone."""

    file: IO[bytes]
    media_type: str
    digest: str
    is_lenient: bool


def too_large(limit: int) -> RejectedInput:
    """Return the error for a body over a limit."""
    return RejectedInput(
        "body-too-large",
        f"This address takes bodies of up to {limit // MEBIBYTE} MiB. Send it in several parts.",
    )


async def stream_to(request: Request, write: Callable[[bytes], object], *, limit: int) -> str:
    """Pass a body on in pieces of about a mebibyte, in a thread; return its SHA-256.

    Raises
    ------
    RejectedInput
        The body is over the limit, or is not what its Content-Digest says.
    """
    declared = request.headers.get("Content-Length", "0")
    if declared.isdecimal() and int(declared) > limit:
        raise too_large(limit)
    hashed, piece, size = hashlib.sha256(), bytearray(), 0

    def pass_on(data: bytes) -> None:
        hashed.update(data)
        write(data)

    async for chunk in request.stream():
        size += len(chunk)
        if size > limit:
            raise too_large(limit)
        piece += chunk
        if len(piece) >= MEBIBYTE:
            await run_in_threadpool(pass_on, bytes(piece))
            piece.clear()
    await run_in_threadpool(pass_on, bytes(piece))
    _check_digest(request, hashed.digest())
    return hashed.hexdigest()


def _check_digest(request: Request, digest: bytes) -> None:
    """Compare with the Content-Digest, if one of the algorithms sent is SHA-256 (RFC 9530)."""
    for entry in request.headers.get("Content-Digest", "").split(","):
        algorithm, _, value = entry.strip().partition("=")
        if algorithm.lower() == "sha-256" and value != f":{base64.b64encode(digest).decode()}:":
            raise RejectedInput(
                "digest-mismatch",
                "The body does not have the SHA-256 that Content-Digest says. Send it again.",
            )


async def _bulk_body(request: Request) -> AsyncIterator[BulkBody]:
    with tempfile.SpooledTemporaryFile(max_size=_IN_MEMORY) as file:
        digest = await stream_to(request, file.write, limit=BULK_LIMIT_BYTES)
        file.seek(0)
        media_type = request.headers.get("Content-Type", "").partition(";")[0].strip().lower()
        yield BulkBody(
            file=file,
            media_type=media_type,
            digest=digest,
            is_lenient=preferences_of(request).get("handling") == "lenient",
        )


Bulk = Annotated[BulkBody, Depends(_bulk_body)]


def unsupported_media_type(*taken: str) -> RejectedInput:
    """Return the error for a Content-Type that an address does not take."""
    return RejectedInput(
        "unsupported-media-type", f"This address takes the Content-Type {' or '.join(taken)}."
    )


def json_items(file: IO[bytes], prefix: str) -> Iterator[Any]:
    """Yield the items of a JSON array, one in memory at a time.

    Raises
    ------
    RejectedInput
        The body is not JSON, or has more items than a call may bring.
    """
    for _ in _flat_events(file):
        pass
    file.seek(0)
    try:
        for number, item in enumerate(ijson.items(file, prefix, use_float=True)):
            if number >= BULK_LIMIT_ROWS:
                raise _too_many()
            yield item
    except (ijson.JSONError, UnicodeDecodeError, ValueError, OverflowError) as error:
        raise RejectedInput("malformed-json", "The body is not valid JSON.") from error


def json_array(file: IO[bytes]) -> Iterator[Any]:
    """Yield the items of a body that must be a JSON array.

    Raises
    ------
    RejectedInput
        The body is not JSON, is no array, or has more items than a call may bring.
    """
    _, first, _ = next(_flat_events(file))
    if first != "start_array":
        raise RejectedInput.at("", "The body must be a JSON array of objects.")
    file.seek(0)
    yield from json_items(file, "item")


def json_members(file: IO[bytes], *, but: str) -> dict[str, Any]:
    """Return the plain members of a JSON object, without reading one member's array into memory.

    Of that member only the kind of its value is told: ``start_array``, ``number`` …
    """
    found: dict[str, Any] = {}
    name = None
    for depth, kind, value in _flat_events(file):
        if depth == 0 and kind not in ("start_map", "end_map"):
            raise RejectedInput.at("", "The body must be a JSON object.")
        if depth == 1 and kind == "map_key":
            name = value
            found[name] = None
        elif depth == 1 and name is not None and not kind.startswith("end"):
            found[name] = kind if name == but else value
    file.seek(0)
    return found


def _flat_events(file: IO[bytes]) -> Iterator[tuple[int, str, Any]]:
    """Yield a JSON body's events, each with the depth it stands at.

    Paths to what is nested take time and memory by the square of the depth (a body of 100 kB
    held a process up for minutes), so a body that is nested deeply is refused before they are
    made.
    """
    depth = 0
    try:
        for kind, value in ijson.basic_parse(file, use_float=True):
            depth -= kind in ("end_map", "end_array")
            yield depth, kind, value
            depth += kind in ("start_map", "start_array")
            if depth > MAX_DEPTH:
                raise RejectedInput.at("", f"JSON is taken up to {MAX_DEPTH} levels deep.")
    except (ijson.JSONError, UnicodeDecodeError, ValueError, OverflowError) as error:
        raise RejectedInput("malformed-json", "The body is not valid JSON.") from error


def csv_rows(file: IO[bytes], columns: Mapping[str, bool]) -> Iterator[tuple[int, dict[str, Any]]]:
    """Yield the rows of a CSV body with the line each ends on; empty cells are left out.

    Parameters
    ----------
    columns
        Names that the header may have, and whether each must be there.

    Raises
    ------
    RejectedInput
        The header lacks a column or has one too many, a row has another length than the
        header, or the text is not UTF-8.
    """
    text = io.TextIOWrapper(file, encoding="utf-8-sig", newline="")
    reader = csv.reader(text, strict=True)
    try:
        header = next(reader, [])
        _check_header(header, columns)
        for number, cells in enumerate(reader):
            if number >= BULK_LIMIT_ROWS:
                raise _too_many()
            if len(cells) != len(header):
                raise RejectedInput.at(
                    f"/{number}",
                    f"Line {reader.line_num} has {len(cells)} cells, the header {len(header)}.",
                )
            yield (
                reader.line_num,
                {name: cell for name, cell in zip(header, cells, strict=True) if cell != ""},
            )
    except (csv.Error, UnicodeDecodeError) as error:
        raise RejectedInput("malformed-body", "The body is not CSV in UTF-8 (RFC 4180).") from error
    finally:
        text.detach()


def _check_header(header: list[str], columns: Mapping[str, bool]) -> None:
    missing = [name for name, needed in columns.items() if needed and name not in header]
    if missing or len(set(header)) != len(header) or not set(header) <= set(columns):
        raise RejectedInput.at(
            "",
            "The first line must name the columns, separated by commas: "
            f"{', '.join(name for name, needed in columns.items() if needed)}, and of "
            f"{', '.join(name for name, needed in columns.items() if not needed)} those you have.",
        )


def _too_many() -> RejectedInput:
    return RejectedInput.at(
        "", f"A call takes up to {BULK_LIMIT_ROWS:,} items. Send them in several calls."
    )
