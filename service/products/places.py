"""Where a product's bytes are, and what may be read of them."""

from collections.abc import Iterator
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Final

from service.errors import RejectedInput

INCOMPLETE: Final = "incomplete-product"
"""Something of the product is not there; it may be on its way."""
UNSUPPORTED: Final = "unsupported-product"
INVALID: Final = "invalid-product"

_CHUNK_BYTES: Final = 2**20


@dataclass(frozen=True, slots=True, kw_only=True)
class Span:
    """Bytes of a file on this machine: all of it, or a member of an archive."""

    path: Path
    start: int = 0
    size: int

    @classmethod
    def whole(cls, path: Path) -> "Span":
        """Return all of a file."""
        return cls(path=path, size=path.stat().st_size)

    def chunks(self) -> Iterator[bytes]:
        """Yield the bytes in pieces of at most a mebibyte.

        Raises
        ------
        RejectedInput
            The file is shorter than it was when it was looked at.
        """
        left = self.size
        with self.path.open("rb") as file:
            file.seek(self.start)
            while left:
                piece = file.read(min(left, _CHUNK_BYTES))
                if not piece:
                    raise incomplete("A file became shorter while it was read.")
                left -= len(piece)
                yield piece


def incomplete(detail: str) -> RejectedInput:
    """Return the error for a product of which something is missing."""
    return RejectedInput(
        INCOMPLETE, f"{detail} Copy the product again in full, from where it came."
    )


def unsupported(detail: str) -> RejectedInput:
    """Return the error for a product of a kind that is not read here."""
    return RejectedInput(UNSUPPORTED, detail)


def invalid(detail: str) -> RejectedInput:
    """Return the error for a product that contradicts itself or its format."""
    return RejectedInput(INVALID, detail)


def file_inside(folder: Path, name: str) -> Path | None:
    """Return a file of a folder by its relative name, None if it isn't there or is empty.

    Raises
    ------
    RejectedInput
        The name leads out of the folder, by its steps or through a link.
    """
    root = folder.resolve()
    path = (root / name).resolve() if "\0" not in name else root
    if path == root or not path.is_relative_to(root):
        raise invalid(
            "The product names a file outside of its own folder. Put every file of it into the "
            "folder, and name it relative to that."
        )
    return path if path.is_file() and path.stat().st_size else None


def read_limited(span: Span, *, limit: int, what: str) -> bytes:
    """Return the bytes of a small file.

    Raises
    ------
    RejectedInput
        It is larger than `limit` bytes.
    """
    if span.size > limit:
        raise invalid(
            f"{what} is over {limit // 2**20} MiB, which no agency's is. Fetch the product again."
        )
    return b"".join(span.chunks())


def instant_of(text: str, *, what: str) -> datetime:
    """Return an instant that metadata give with its offset from UTC.

    Raises
    ------
    RejectedInput
        It is none.
    """
    try:
        at = datetime.fromisoformat(text.strip())
    except ValueError:
        at = None
    if at is None or at.tzinfo is None:
        raise invalid(f"{what} is no instant in UTC. Fetch the product again from its source.")
    return at.astimezone(UTC)


def written(at: datetime) -> str:
    """Return an instant as the ``scene`` part has it."""
    return at.isoformat().replace("+00:00", "Z")
