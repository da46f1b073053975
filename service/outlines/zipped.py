"""Zip archives, of which only expected members are read, into files without names.

Nothing is extracted by name, so that no name can lead anywhere. What the directory claims is
checked before the library lists it (a directory of a million entries takes a gigabyte), and
what a member unpacks to is counted while it does.

Layout: PKWARE .ZIP File Format Specification (APPNOTE), 4.3.
"""

import struct
import tempfile
import zipfile
import zlib
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path, PurePosixPath
from typing import IO, Final

from service.outlines.features import too_large, unreadable

MAGIC: Final = b"PK\x03\x04"
MEBIBYTE: Final = 1024**2
MOST_MEMBERS: Final = 100
MOST_BYTES: Final = 256 * MEBIBYTE
"""Unpacked, of all members that are read together."""
MOST_RATIO: Final = 250
"""Blank table cells shrink a hundredfold; a bomb of one layer a thousandfold."""
_RATIO_FROM: Final = MEBIBYTE
_MOST_DIRECTORY_BYTES: Final = 256 * 1024
_END: Final = struct.Struct("<4s4H2LH")
_END_MAGIC: Final = b"PK\x05\x06"
_END64_MAGIC: Final = b"PK\x06\x07"
_END64_BYTES: Final = 20
_MOST_COMMENT: Final = 65_535
_METHODS: Final = (zipfile.ZIP_STORED, zipfile.ZIP_DEFLATED)
_ENCRYPTED: Final = 0x1
_PIECE: Final = MEBIBYTE
_IN_MEMORY: Final = MEBIBYTE


class Archive:
    """An open zip archive."""

    def __init__(self, archive: zipfile.ZipFile) -> None:
        self._archive = archive
        self._left = MOST_BYTES
        self._members = {
            info.filename: info for info in archive.infolist() if _is_wanted(info.filename)
        }

    def names(self) -> list[str]:
        """Return the names of all members that are files, less what systems put beside them."""
        return list(self._members)

    @contextmanager
    def member(self, name: str) -> Iterator[IO[bytes]]:
        """Give the content of a member, unpacked under the limits.

        Raises
        ------
        RejectedInput
            It is encrypted, damaged, packed in another way, or unpacks to too much.
        """
        info = self._members[name]
        if info.flag_bits & _ENCRYPTED or info.compress_type not in _METHODS:
            raise unreadable(
                "The zip archive is encrypted, or packed by a method other than deflate. Pack it "
                "again."
            )
        with tempfile.SpooledTemporaryFile(max_size=_IN_MEMORY) as file:
            try:
                self._unpack(info, file)
            except (zipfile.BadZipFile, zlib.error, EOFError, OSError, ValueError) as error:
                raise _damaged() from error
            file.seek(0)
            yield file

    def _unpack(self, info: zipfile.ZipInfo, file: IO[bytes]) -> None:
        size = 0
        with self._archive.open(info) as packed:
            while piece := packed.read(_PIECE):
                size += len(piece)
                self._left -= len(piece)
                is_bomb = size > _RATIO_FROM and size > MOST_RATIO * info.compress_size
                if self._left < 0 or is_bomb:
                    raise too_large(
                        "The zip archive unpacks to more than is taken: up to "
                        f"{MOST_BYTES // MEBIBYTE} MiB, and {MOST_RATIO} times its size. Send it "
                        "in several parts."
                    )
                file.write(piece)


def _is_wanted(name: str) -> bool:
    path = PurePosixPath(name)
    return not (name.endswith("/") or path.parts[:1] == ("__MACOSX",) or path.name[:1] == ".")


@contextmanager
def open_archive(path: Path) -> Iterator[Archive]:
    """Open a zip archive whose directory keeps the limits.

    Raises
    ------
    RejectedInput
        It is damaged, has too many members, or names that would lead out of a folder.
    """
    with path.open("rb") as file:
        _check_directory(file)
        try:
            archive = zipfile.ZipFile(file)
        except (zipfile.BadZipFile, ValueError, OSError) as error:
            raise _damaged() from error
        with archive:
            names = archive.namelist()
            if len(names) > MOST_MEMBERS:
                raise _too_many()
            if any(_leads_out(name) for name in names) or len(set(names)) < len(names):
                raise unreadable(
                    "The zip archive has a member whose name leads out of its folder, or two of "
                    "one name. Pack it again."
                )
            yield Archive(archive)


def _leads_out(name: str) -> bool:
    path = PurePosixPath(name)
    return path.is_absolute() or ".." in path.parts or "\\" in name or ":" in name


def _check_directory(file: IO[bytes]) -> None:
    """Check what the archive's end says of its directory, before anything is made of it."""
    size = file.seek(0, 2)
    tail_start = max(0, size - _MOST_COMMENT - _END.size - _END64_BYTES)
    file.seek(tail_start)
    tail = file.read()
    at = tail.rfind(_END_MAGIC)
    if at < 0 or at + _END.size > len(tail):
        raise _damaged()
    _, disk, start_disk, here, entries, directory_bytes, _, _ = _END.unpack_from(tail, at)
    is_large = tail[max(0, at - _END64_BYTES) : at].startswith(_END64_MAGIC)
    if disk or start_disk or here != entries or is_large:
        raise unreadable(
            "Zip archives in several parts, or over 4 GiB, are not read. Pack it anew."
        )
    if entries > MOST_MEMBERS or directory_bytes > _MOST_DIRECTORY_BYTES:
        raise _too_many()


def _damaged() -> Exception:
    return unreadable("The zip archive is damaged or cut short. Pack it again.")


def _too_many() -> Exception:
    return too_large(
        f"The zip archive has more than {MOST_MEMBERS} members. Pack the layer's own files alone."
    )
