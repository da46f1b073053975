"""Products of a folder into which they are still being copied."""

from collections.abc import Callable, Iterator
from pathlib import Path

from service.errors import RejectedInput

Fingerprint = frozenset[tuple[str, int, int]]
"""Name, size and time of change of every file of a product."""


class Watch:
    """What a folder held at the last look, and what is done with.

    Parameters
    ----------
    folder
        Where products come to lie, each a folder or an archive of its own.
    fits
        Whether an entry of the folder looks like a product.
    """

    def __init__(self, folder: Path, *, fits: Callable[[Path], bool]) -> None:
        self._folder = folder
        self._fits = fits
        self._seen: dict[Path, Fingerprint] = {}
        self._done: dict[Path, Fingerprint] = {}

    def look(self) -> list[Path]:
        """Return the products that did not change since the last look and are not done with.

        Raises
        ------
        RejectedInput
            The folder is no longer there.
        """
        before, self._seen = self._seen, {}
        try:
            for path in sorted(self._folder.iterdir()):
                if self._fits(path):
                    self._seen[path] = fingerprint(path)
        except OSError:
            # A product may be moved away while it is looked at; the folder may not.
            if not self._folder.is_dir():
                raise RejectedInput("no-folder", "The watched folder is no longer there.") from None
        return [
            path
            for path, now in self._seen.items()
            if before.get(path) == now and self._done.get(path) != now
        ]

    def is_done(self, path: Path) -> None:
        """Leave a product alone until it changes."""
        self._done[path] = self._seen[path]


def fingerprint(path: Path) -> Fingerprint:
    """Return what tells whether a product is still being written."""
    return frozenset(_files(path))


def _files(path: Path) -> Iterator[tuple[str, int, int]]:
    for file in (path, *path.rglob("*")) if path.is_dir() else (path,):
        try:
            told = file.stat()
        except OSError:
            # Moved away between two looks at it; the next look will tell.
            continue
        yield str(file), told.st_size if file.is_file() else 0, told.st_mtime_ns
