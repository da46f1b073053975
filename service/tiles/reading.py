"""Reading a scene's numbers in the cells of a plan, in bounded memory.

Every band is gathered on its own grid. A cell of the measuring grid takes the number at its
centre, nearest only, whether or not the grids nest: no number leaves here that is not in a
file. Scaling is left to the reader of the numbers.

The quality layer comes first. Where it says that no cell of a block can count, bands are
decoded only until it is known that some band has a number there, which is what tells a cell
under cloud from one without data: usually one band, and the coarsest comes first.
"""

from collections.abc import Callable, Iterable, Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from service.errors import RejectedInput
from service.spectral.gathered import Gathered, Layer, Meaning
from service.spectral.roles import BandRole
from service.tiles.gathering import BUFFER_BYTES, Cursor, OpenFile
from service.tiles.intake import Header, check_together, inspect, open_raster
from service.tiles.scene_source import BandSource, SceneSource
from service.zonal.grid import Grid
from service.zonal.plan import Plan, View, row_starts

__all__ = ["BandSource", "Grids", "SceneSource", "grids_of", "measuring_grid", "read_strips"]

MayCount = Callable[[NDArray[Any]], NDArray[np.bool_]]

STRIP_CELLS: Final = 4_000_000
"""About how many cells are gathered at once; a cell takes some 15 bytes."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Grids:
    """The grids of a scene: that which is measured on, and the others."""

    measuring: Grid
    others: tuple[Grid, ...]


def grids_of(source: SceneSource) -> Grids:
    """Return the finest of the bands' grids, the first of equally fine ones, and all others."""
    layers = [(layer, inspect(layer.path, pointer=layer.pointer).grid) for layer in source.layers]
    measuring = _finest(grid for layer, grid in layers if layer in source.bands)
    others = dict.fromkeys(grid for _, grid in layers if grid != measuring)
    return Grids(measuring=measuring, others=tuple(others))


def measuring_grid(source: SceneSource) -> Grid:
    """Return the finest of the bands' grids, the first of equally fine ones."""
    return grids_of(source).measuring


def read_strips(
    source: SceneSource,
    plan: Plan,
    *,
    may_count: MayCount | None = None,
    strip_cells: int = STRIP_CELLS,
) -> Iterator[Gathered]:
    """Yield the numbers of a scene in the cells of a plan, in ascending order.

    Parameters
    ----------
    source
        The scene's files.
    plan
        Made for the grids of the scene, as `grids_of` gives them.
    may_count
        Tells by numbers of the quality layer which cells any figure could rest on. Of others
        only one band's number is sure to be read. Without it all is read.
    strip_cells
        About how many cells to gather at once.

    Yields
    ------
    Gathered
        The cells of some rows of the grid, each cell of the plan once. In a cell that a file
        does not have, a band has no number.

    Raises
    ------
    RejectedInput
        As `inspect` and `check_together` do, and with code ``unreadable-pixels`` for
        pixels that can't be decoded.
    """
    with _opened(source) as files:
        buffer = np.empty(BUFFER_BYTES, dtype=np.uint8)
        edges = _strip_edges(plan, [file.header for file in files], strip_cells)
        spans = {
            grid: _spans(plan.view(grid), edges) for grid in {file.header.grid for file in files}
        }
        passages = [_Passage.through(file, plan, spans[file.header.grid], buffer) for file in files]
        for place, (first, last) in enumerate(pairwise(edges)):
            strip = Gathered(first, last)
            counts = None
            for passage in passages:
                passage.give(strip, place, counts)
                if counts is None and may_count is not None:
                    counts = _counting(strip, may_count)
            yield strip


@dataclass(slots=True, kw_only=True, eq=False)
class _Passage:
    """One file's way through the strips.

    `spans` says which of the file's own cells each strip takes, `keeps` from which on one is
    still wanted by that strip or a later one.
    """

    cursor: Cursor
    at: NDArray[np.int32] | None
    spans: list[tuple[int, int]]
    keeps: list[int]

    @classmethod
    def through(
        cls, file: OpenFile, plan: Plan, spans: list[tuple[int, int]], buffer: NDArray[np.uint8]
    ) -> "_Passage":
        view = plan.view(file.header.grid)
        cells = plan.cells if view is None else view.cells
        keep = max((last for _, last in spans), default=0)
        keeps = [keep]
        for first, last in reversed(spans):
            keep = min(keep, first) if last > first else keep
            keeps.insert(0, keep)
        return cls(
            cursor=Cursor(file, cells, buffer),
            at=None if view is None else view.at,
            spans=spans,
            keeps=keeps,
        )

    def give(self, strip: Gathered, place: int, counts: NDArray[np.bool_] | None) -> None:
        """Add this file's layers to a strip; `counts` says which cells may count, if known."""
        first, last = self.spans[place]
        at = None if self.at is None else self.at[strip.first : strip.last]
        if last > first:
            self.cursor.go(self.keeps[place], first, last, self._wanted(strip, place, counts))
        layers = self.cursor.layers(first, last, at)
        for source, layer in zip(self.cursor.file.layers, layers, strict=True):
            _add(strip, source, layer)
        if self.cursor.file.cloud_buffer is not None:
            strip.near_cloud = self.cursor.near_cloud(first, last, at)

    def _wanted(
        self, strip: Gathered, place: int, counts: NDArray[np.bool_] | None
    ) -> NDArray[np.bool_]:
        """Return which of the file's own cells have to be read for a strip."""
        first, last = self.spans[place]
        wanted = None if counts is None else counts | ~strip.seen
        is_band = all(isinstance(layer.role, BandRole) for layer in self.cursor.file.layers)
        if wanted is None or not is_band or wanted.all():
            return np.ones(last - first, dtype=np.bool_)
        if self.at is None:
            return wanted
        own = np.zeros(last - first, dtype=np.bool_)
        at = self.at[strip.first : strip.last][wanted]
        own[at[at >= 0] - first] = True
        # What the next strips take too is read now or never.
        own[max(self.keeps[place + 1] - first, 0) :] = True
        return own


def _counting(strip: Gathered, may_count: MayCount) -> NDArray[np.bool_] | None:
    """Return which cells may count by the quality layer, if it has come already."""
    if strip.classes is None:
        return None
    counts = strip.classes.spread(may_count(strip.classes.numbers))
    return counts if strip.near_cloud is None else counts & ~strip.near_cloud


def _spans(view: View | None, edges: list[int]) -> list[tuple[int, int]]:
    """Return which cells of a grid each strip takes: the first, and the one after the last."""
    spans = []
    for first, last in pairwise(edges):
        if view is None:
            spans.append((first, last))
            continue
        there = view.at[first:last]
        there = there[there >= 0]
        spans.append((int(there.min()), int(there.max()) + 1) if len(there) else (0, 0))
    return spans


def _add(strip: Gathered, source: BandSource, layer: Layer) -> None:
    if source.role == "quality":
        strip.classes = layer
    elif source.role == "saturation":
        strip.bits = layer
    elif source.scaling is not None:
        meaning = Meaning(
            scaling=source.scaling,
            nodata=source.nodata,
            saturated=source.saturated,
            bit=source.saturation_bit,
        )
        strip.take(BandRole(source.role), layer, meaning)


def _strip_edges(plan: Plan, headers: Iterable[Header], strip_cells: int) -> list[int]:
    """Return where among the plan's cells the strips begin and end: at rows of blocks."""
    rows = plan.grid.shape[0]
    height = max(header.block_shape[0] for header in headers if header.grid == plan.grid)
    starts = row_starts(plan.cells, plan.grid.shape)
    ends = starts[np.append(np.arange(height, rows, height), rows)].tolist()
    edges = [0]
    for here, beyond in zip(ends, [*ends[1:], ends[-1] + strip_cells], strict=True):
        if beyond - edges[-1] > strip_cells and here > edges[-1]:
            edges.append(here)
    if edges[-1] < ends[-1]:
        edges.append(ends[-1])
    return edges


def _finest(grids: Iterable[Grid]) -> Grid:
    return min(grids, key=lambda grid: grid.cell_area_m2)


@contextmanager
def _opened(source: SceneSource) -> Iterator[list[OpenFile]]:
    """Open every file once, checked as at intake: it may have changed on the disk since.

    Layers beside the bands come first, then the coarsest.
    """
    layers: dict[Path, list[BandSource]] = {}
    for layer in (*source.beside_bands, *source.bands):
        layers.setdefault(layer.path, []).append(layer)
    headers = {path: inspect(path, pointer=of[0].pointer) for path, of in layers.items()}
    check_together({layers[path][0].pointer: header for path, header in headers.items()})
    _check_bands(source, headers)
    beside = {layer.path for layer in source.beside_bands}
    order = sorted(layers, key=lambda path: (path not in beside, -_cell_size(headers[path])))
    with ExitStack() as stack:
        yield [
            OpenFile(
                dataset=stack.enter_context(
                    open_raster(path, headers[path].driver, pointer=layers[path][0].pointer)
                ),
                header=headers[path],
                layers=tuple(layers[path]),
                cloud_buffer=source.cloud_buffer if source.quality in layers[path] else None,
            )
            for path in order
        ]


def _cell_size(header: Header) -> float:
    return header.grid.cell_area_m2


def _check_bands(source: SceneSource, headers: dict[Path, Header]) -> None:
    for layer in source.layers:
        if not 1 <= layer.band <= headers[layer.path].count:
            raise RejectedInput.at(
                layer.pointer,
                "The file has fewer bands than the scene names; name one role for each band.",
                code="band-missing",
            )
