"""Reading bodies: streamed to disk under a cap while they are hashed; CSV row by row."""

import base64
import csv
import hashlib
import io
import tempfile
from collections.abc import AsyncIterator, Callable, Iterator, Mapping
from dataclasses import dataclass
from typing import IO, Annotated, Any, Final

from fastapi import Depends, Request
from starlette.concurrency import run_in_threadpool

from service.api.preferences import preferences_of
from service.errors import RejectedInput
from service.streams import BULK_LIMIT_ROWS, too_many

MEBIBYTE: Final = 1024**2
BULK_LIMIT_BYTES: Final = 64 * MEBIBYTE
JSON_LIMIT_BYTES: Final = 2 * MEBIBYTE
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
                raise too_many()
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
