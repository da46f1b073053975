"""The archive of files: named by their content, complete or not there at all.

::

    root/incoming/<random>          being written; worth nothing after a crash
    root/archive/ab/<sha256>.tif    kept; `ab` are the digest's first two digits

A file is moved into place after its bytes are on the disk, so that whatever is named by a
digest has that content. Bytes come before rows: a file that no row wants is swept later.
"""

import os
import re
import secrets
import shutil
import threading
from collections.abc import Callable, Iterator, Set
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import Final

import fasteners

from service.clock import now
from service.errors import NotFound
from service.tiles.intake import SUFFIXES, find_driver

_DIGEST: Final = re.compile(r"[0-9a-f]{64}\Z")
_OTHER_SUFFIX: Final = ".bin"
# A lock between processes does not hold between the threads of one.
_THREADS: Final = threading.Lock()


class Archive:
    """Files by the SHA-256 of their content.

    Safe to use from several threads and processes on one folder.

    Parameters
    ----------
    root
        Folder of the archive, made if it is not there; all of it on one file system.
    """

    def __init__(self, root: Path) -> None:
        self._kept = root / "archive"
        self._incoming = root / "incoming"
        self._lock_path = root / "archive.lock"
        self._kept.mkdir(parents=True, exist_ok=True)
        self._incoming.mkdir(parents=True, exist_ok=True)
        self._root = root

    @contextmanager
    def incoming(self) -> Iterator[Path]:
        """Give a new empty file under a name of our own; gone at the end unless kept."""
        path = self._incoming / secrets.token_hex(16)
        path.touch(mode=0o600, exist_ok=False)
        try:
            yield path
        finally:
            path.unlink(missing_ok=True)

    def keep(self, temp_path: Path, digest: str) -> Path:
        """Move a written file to the name of its content, durably; return where it is.

        Content that is there already stays, counts as new for `remove_orphans`, and the
        given file is dropped. The caller has hashed what it wrote.
        """
        driver = find_driver(temp_path)
        suffix = SUFFIXES[driver] if driver else _OTHER_SUFFIX
        target = self._folder_of(digest) / f"{digest}{suffix}"
        _sync(temp_path)
        with self._lock():
            if _same_size(target, temp_path):
                os.utime(target)
                temp_path.unlink()
            else:
                target.parent.mkdir(exist_ok=True)
                # From now on the sweep counts its age, however long the upload took.
                os.utime(temp_path)
                temp_path.replace(target)
        for folder in (target.parent, self._kept):
            _sync(folder)
        return target

    def path_of(self, digest: str) -> Path:
        """Return where the content with this digest is, or raise `NotFound`."""
        stem = self._folder_of(digest) / digest
        for suffix in (*SUFFIXES.values(), _OTHER_SUFFIX):
            path = stem.with_suffix(suffix)
            if path.is_file():
                return path
        raise NotFound("file-missing", "The archive does not hold this file; send it again.")

    def bytes_used(self) -> int:
        """Return the bytes of all files, kept and incoming."""
        return sum(_size(path) for path in (*self._kept_files(), *self._incoming.iterdir()))

    def free_bytes(self) -> int:
        """Return the bytes free on the file system."""
        return shutil.disk_usage(self._root).free

    def remove_orphans(
        self, wanted: Callable[[str], bool] | Set[str], *, older_than_seconds: float
    ) -> int:
        """Delete kept files that no one wants; return how many.

        Parameters
        ----------
        wanted
            The digests to spare, or a function that tells. It is asked before the age is
            looked at, so a file kept again in between is spared.
        older_than_seconds
            Younger files are spared: their rows may not be committed yet.
        """
        is_wanted = wanted if callable(wanted) else wanted.__contains__
        removed = 0
        for path in self._kept_files():
            if is_wanted(path.stem):
                continue
            with self._lock():
                if _age_seconds(path) > older_than_seconds:
                    path.unlink(missing_ok=True)
                    removed += 1
        return removed

    def clear_incoming(self, *, older_than_seconds: float = 0.0) -> int:
        """Delete what interrupted uploads left behind; return how many files.

        Without an age it is for the start, before any upload is taken.
        """
        removed = 0
        for path in list(self._incoming.iterdir()):
            if _age_seconds(path) >= older_than_seconds:
                path.unlink(missing_ok=True)
                removed += 1
        return removed

    def _folder_of(self, digest: str) -> Path:
        if not _DIGEST.match(digest):
            raise ValueError("a digest is 64 lower-case hexadecimal digits")
        return self._kept / digest[:2]

    def _kept_files(self) -> list[Path]:
        return [path for path in self._kept.glob("??/*") if _DIGEST.match(path.stem)]

    @contextmanager
    def _lock(self) -> Iterator[None]:
        with _THREADS, fasteners.InterProcessLock(self._lock_path):
            yield


def _same_size(target: Path, other: Path) -> bool:
    """Whether the target is there in full; a damaged disk may have cut it."""
    return target.is_file() and _size(target) == _size(other)


def _size(path: Path) -> int:
    with suppress(FileNotFoundError):
        return path.stat().st_size
    return 0


def _age_seconds(path: Path) -> float:
    """Return the time since the file was kept; negative for one that has just gone."""
    with suppress(FileNotFoundError):
        return now().timestamp() - path.stat().st_mtime
    return -1.0


def _sync(path: Path) -> None:
    """Put a file's or folder's content on the disk."""
    handle = os.open(path, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)
