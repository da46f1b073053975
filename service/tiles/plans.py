"""Plans of parcels on grids, kept on disk between scenes.

::

    root/<key>.plan          complete, or it is not believed
    root/<key>.<random>.part being written; worth nothing after a crash

A plan depends on the outlines, the grids and the code, and the key is a hash of all three, so
that a kept plan is never out of date: it is a cache, and may be deleted at any time. The outlines'
bytes are hashed, not their ids, which another database could have used for others.

A file holds a line of JSON (what lies where, with a checksum of each array) and the arrays as
they are in memory, so that it is mapped, not read; it is used only if every checksum fits.
"""

import hashlib
import inspect
import json
import mmap
import os
import secrets
import zlib
from collections.abc import Iterator, Sequence
from contextlib import suppress
from itertools import pairwise
from pathlib import Path
from typing import Any, Final

import numpy as np
import shapely
from numpy.typing import NDArray

from service.clock import now
from service.compiled import source_digest
from service.tiles.reading import Grids
from service.zonal import coverage, plan
from service.zonal.coverage import Zones, joined, project, zones_on
from service.zonal.grid import Grid
from service.zonal.plan import Plan, View, plan_of

_MAGIC: Final = b"furrowlight plan 1\n"
_ALIGNED: Final = 64
_OUTLINES_AT_ONCE: Final = 10_000
_MOST_PLANS: Final = 500
_UNFINISHED_SECONDS: Final = 3600.0
_PIECE: Final = 1 << 20
_OWN_ARRAYS: Final = ("order", "indptr", "at", "weights", "totals", "cells")

Arrays = dict[str, NDArray[Any]]


class Plans:
    """Plans by what they were made of.

    Safe to use from several threads and processes on one folder.

    Parameters
    ----------
    root
        Folder of the plans, made if it is not there.
    limit_bytes
        How much `tidy` leaves there.
    """

    def __init__(self, root: Path, *, limit_bytes: int) -> None:
        self._root = root
        self._limit_bytes = limit_bytes
        root.mkdir(parents=True, exist_ok=True)

    def plan_for(self, grids: Grids, outlines: Sequence[bytes]) -> Plan:
        """Return the plan of some boundaries on the grids of a scene, kept or made.

        Parameters
        ----------
        grids
            The grids of the scene.
        outlines
            The boundaries in WGS 84, as WKB.
        """
        path = self._root / f"{_key(grids, outlines)}.plan"
        kept = _kept(path, grids)
        if kept is not None:
            # For `tidy`: it was of use.
            with suppress(FileNotFoundError):
                os.utime(path)
            return kept
        made = plan_of(grids.measuring, _zones(grids.measuring, outlines), grids.others)
        # A cache that can't be written is no reason not to measure.
        with suppress(OSError):
            self._keep(path, made)
        return made

    def tidy(self) -> int:
        """Remove the plans longest out of use, above the limit, and leftovers; return how many."""
        removed = 0
        for path in self._root.glob("*.part"):
            if _age_seconds(path) > _UNFINISHED_SECONDS:
                path.unlink(missing_ok=True)
                removed += 1
        held = 0
        for place, path in enumerate(sorted(self._root.glob("*.plan"), key=_age_seconds)):
            held += _size(path)
            if held > self._limit_bytes or place >= _MOST_PLANS:
                path.unlink(missing_ok=True)
                removed += 1
        return removed

    def _keep(self, path: Path, made: Plan) -> None:
        """Write a plan aside, and give it its name once its bytes are on the disk."""
        aside = path.with_name(f"{path.stem}.{secrets.token_hex(8)}.part")
        try:
            with aside.open("wb") as file:
                for piece in _written(_arrays(made)):
                    file.write(piece)
                file.flush()
                os.fsync(file.fileno())
            aside.replace(path)
        finally:
            aside.unlink(missing_ok=True)


def _key(grids: Grids, outlines: Sequence[bytes]) -> str:
    """Return a hash of everything that a plan depends on."""
    digest = hashlib.sha256(_MAGIC + _code_digest().encode())
    for grid in (grids.measuring, *grids.others):
        digest.update(repr((grid.crs, tuple(grid.transform), grid.shape)).encode())
    for outline in outlines:
        digest.update(len(outline).to_bytes(8, "little"))
        digest.update(outline)
    return digest.hexdigest()


def _code_digest() -> str:
    sources = "".join(inspect.getsource(module) for module in (coverage, plan))
    return source_digest() + hashlib.sha256(sources.encode()).hexdigest()


def _zones(grid: Grid, outlines: Sequence[bytes]) -> Zones:
    """Lay outlines over a grid, some at a time: as geometries they take much more memory."""
    parts = []
    for first in range(0, len(outlines), _OUTLINES_AT_ONCE):
        some = shapely.from_wkb(list(outlines[first : first + _OUTLINES_AT_ONCE]))
        parts.append(zones_on(grid, project(some, grid.crs)))
    return joined(parts)


def _arrays(made: Plan) -> Arrays:
    arrays: Arrays = {name: getattr(made, name) for name in _OWN_ARRAYS}
    for place, view in enumerate(made.views):
        arrays[f"cells {place}"] = view.cells
        arrays[f"at {place}"] = view.at
    return arrays


def _written(arrays: Arrays) -> Iterator[bytes | memoryview]:
    """Yield a file's content: what lies where, and the arrays, each at a multiple of 64 bytes."""
    entries = [
        {"name": name, "dtype": array.dtype.str, "shape": array.shape, "checksum": _sum_of(array)}
        for name, array in arrays.items()
    ]
    head = _MAGIC + json.dumps(entries).encode() + b"\n"
    head += f"{zlib.crc32(head):08x}\n".encode()
    yield head
    at = len(head)
    for array in arrays.values():
        yield bytes(-at % _ALIGNED)
        yield array.reshape(-1).view(np.uint8).data
        at += -at % _ALIGNED + array.nbytes


def _kept(path: Path, grids: Grids) -> Plan | None:
    """Return the plan in a file, or None if there is none that is whole."""
    try:
        with path.open("rb") as file:
            content = mmap.mmap(file.fileno(), 0, access=mmap.ACCESS_COPY)
    except (OSError, ValueError):
        return None
    try:
        arrays = _read(content)
        views = tuple(
            View(grid=grid, cells=arrays[f"cells {place}"], at=arrays[f"at {place}"])
            for place, grid in enumerate(grids.others)
        )
        return Plan(
            grid=grids.measuring, views=views, **{name: arrays[name] for name in _OWN_ARRAYS}
        )
    except (ValueError, KeyError, TypeError):
        return None


def _read(content: mmap.mmap) -> Arrays:
    """Return the arrays in a file's content, mapped; raise `ValueError` if it is damaged."""
    start = content.find(b"\n", len(_MAGIC)) + 1
    head = content[:start]
    sum_line = content[start : start + 9]
    if not head.startswith(_MAGIC) or sum_line != f"{zlib.crc32(head):08x}\n".encode():
        raise ValueError("the head of the plan is damaged")
    arrays: Arrays = {}
    at = start + len(sum_line)
    for entry in json.loads(head[len(_MAGIC) :]):
        at += -at % _ALIGNED
        dtype, count = np.dtype(entry["dtype"]), int(np.prod(entry["shape"], dtype=np.int64))
        array = np.frombuffer(content, dtype=dtype, count=count, offset=at)
        if _sum_of(array) != entry["checksum"]:
            raise ValueError("an array of the plan is damaged")
        arrays[entry["name"]] = array.reshape(entry["shape"])
        at += array.nbytes
    return arrays


def _sum_of(array: NDArray[Any]) -> int:
    content = array.reshape(-1).view(np.uint8).data
    total = 0
    for first, last in pairwise([*range(0, len(content), _PIECE), len(content)]):
        total = zlib.crc32(content[first:last], total)
    return total


def _size(path: Path) -> int:
    with suppress(FileNotFoundError):
        return path.stat().st_size
    return 0


def _age_seconds(path: Path) -> float:
    """Return the time since a file was written or of use; negative for one that has just gone."""
    with suppress(FileNotFoundError):
        return now().timestamp() - path.stat().st_mtime
    return -1.0
