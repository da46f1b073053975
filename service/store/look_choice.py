"""Which observations are looks: of each scene what its writes say, of each pass one scene.

The choice of `looks.one_per_pass` for many parcels at once, on arrays.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from service.store.columns import microseconds
from service.store.looks import PASS_GAP, Places

Numbers = NDArray[np.int64]
Values = NDArray[np.float32]
Flags = NDArray[np.bool_]

SHARE, WATER, MEASURES = 0, 1, 2
"""Columns of the figures: shares of the look, then the measures."""
_GAP_US: Final = PASS_GAP // PASS_GAP.resolution


@dataclass(frozen=True, slots=True, kw_only=True)
class CurrentWrite:
    """A current write, with what its scene tells."""

    id: int
    layout: int
    ref: str
    platform: str
    processing_baseline: str
    acquired_at: datetime


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Rows:
    """Observations: of which parcel, by which write, and the figures (rows, 2 + measures)."""

    parcel_ids: Numbers
    write: Numbers
    figures: Values

    def kept(self, which: NDArray[Any]) -> "Rows":
        """Return some of the rows, by place or by flag."""
        return Rows(
            parcel_ids=self.parcel_ids[which],
            write=self.write[which],
            figures=self.figures[which],
        )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Looks:
    """Looks of parcels, one per parcel and pass, by parcel.

    Attributes
    ----------
    parcel_ids
        Shape (looks,).
    scene
        Place of each look's scene in `refs`, `platforms` and `acquired_at`, shape (looks,).
    valid_share, water
        Shares of the parcel, shape (looks,); an unknown valid share is 0, water NaN.
    values
        Means of the measures as stored, shape (looks, measures), NaN = unknown.
    refs, platforms, acquired_at
        Of the scenes, by platform and then by acquisition.
    """

    parcel_ids: Numbers
    scene: Numbers
    valid_share: Values
    water: Values
    values: Values
    refs: Sequence[str]
    platforms: Sequence[str]
    acquired_at: Sequence[datetime]

    def __len__(self) -> int:
        return int(self.parcel_ids.size)

    def instants(self) -> Numbers:
        """Return when each look was acquired, in microseconds since 1970."""
        at = np.array([microseconds(at) for at in self.acquired_at], dtype=np.int64)
        return at[self.scene]

    def kept(self, which: NDArray[Any]) -> "Looks":
        """Return some of the looks, by place or by flag."""
        return Looks(
            parcel_ids=self.parcel_ids[which],
            scene=self.scene[which],
            valid_share=self.valid_share[which],
            water=self.water[which],
            values=self.values[which],
            refs=self.refs,
            platforms=self.platforms,
            acquired_at=self.acquired_at,
        )

    def begun(self) -> list[datetime]:
        """Return by scene when its pass began; scenes without a look here begin none.

        Scenes of one platform within 10 minutes of the first are one pass.
        """
        begun = list(self.acquired_at)
        first: tuple[str, datetime] | None = None
        for place in np.unique(self.scene).tolist():
            platform, at = self.platforms[place], self.acquired_at[place]
            if first is None or first[0] != platform or at - first[1] > PASS_GAP:
                first = platform, at
            begun[place] = first[1]
        return begun


def one_per_scene(
    rows: Rows,
    writes: Sequence[CurrentWrite],
    layouts: Mapping[int, Places],
    measures: Sequence[str],
) -> Rows:
    """Return what each scene says of each parcel, of rows by parcel and write.

    Of each measure the figure is that of the newest write that has it. Of the writes whose
    figures count the one with the least valid share tells of the look; of equals the newest.
    """
    first = np.flatnonzero(_is_first(rows, writes))
    if first.size == rows.write.size:
        return rows
    group = np.repeat(np.arange(first.size), np.diff(np.append(first, rows.write.size)))
    turn = np.arange(group.size) - first[group]
    layout = np.array([write.layout for write in writes])[rows.write]
    every = [*measures, *sorted({m for each in layouts.values() for m in each.measures})]
    held = {
        each: np.array([places.has(measure) for measure in every], dtype=bool)
        for each, places in layouts.items()
    }
    merged = np.full((first.size, rows.figures.shape[1]), np.nan, dtype=np.float32)
    is_told = np.zeros((first.size, len(every)), dtype=bool)
    # From the last write of each scene to its first: what a later one holds stays.
    for each in range(int(turn.max()), -1, -1):
        for layout_id, holds in held.items():
            some = np.flatnonzero((turn == each) & (layout == layout_id))
            _tell(merged, is_told, rows.figures[some], group[some], holds)
    is_silent = ~is_told.any(axis=1)
    last = np.append(first[1:], rows.write.size) - 1
    merged[is_silent, :MEASURES] = rows.figures[last[is_silent], :MEASURES]
    return Rows(parcel_ids=rows.parcel_ids[first], write=rows.write[first], figures=merged)


def _is_first(rows: Rows, writes: Sequence[CurrentWrite]) -> Flags:
    """Whether a row is the first of its parcel in its scene."""
    scene, _ = _scenes(writes)
    return _changes(rows.parcel_ids) | _changes(scene[rows.write])


def _tell(merged: Values, is_told: Flags, figures: Values, group: Numbers, holds: Flags) -> None:
    """Add rows of one layout, at most one of a group, to what later rows of their groups say."""
    is_new = holds & ~is_told[group]
    for column in range(figures.shape[1] - MEASURES):
        some = is_new[:, column]
        merged[group[some], MEASURES + column] = figures[some, MEASURES + column]
    share = np.nan_to_num(merged[group, SHARE], nan=np.inf)
    tells = is_new.any(axis=1) & (np.nan_to_num(figures[:, SHARE]) < share)
    merged[group[tells], SHARE] = np.nan_to_num(figures[tells, SHARE])
    merged[group[tells], WATER] = figures[tells, WATER]
    is_told[group] |= holds


def one_per_pass(rows: Rows, writes: Sequence[CurrentWrite]) -> Looks:
    """Choose of each pass of each parcel the look, of rows by parcel and write.

    The one with the larger valid share, then the newer processing, then by ref.
    """
    scene, of_scene = _scenes(writes)
    scene_of_row = scene[rows.write]
    share = np.nan_to_num(rows.figures[:, SHARE])
    starts = _pass_starts(rows.parcel_ids, scene_of_row, of_scene)
    numbers = np.cumsum(starts) - 1
    if not starts.all():
        ranked = sorted(
            range(len(of_scene)),
            key=lambda at: (of_scene[at].processing_baseline, of_scene[at].ref),
        )
        rank = np.empty(len(of_scene), dtype=np.int64)
        rank[ranked] = np.arange(len(of_scene))
        order = np.lexsort((rank[scene_of_row], share, numbers))
        best = order[np.append(np.diff(numbers[order]) > 0, np.True_)]
    else:
        best = np.arange(share.size)
    return Looks(
        parcel_ids=rows.parcel_ids[best],
        scene=scene_of_row[best],
        valid_share=share[best],
        water=rows.figures[best, WATER],
        values=rows.figures[best, MEASURES:],
        refs=[write.ref for write in of_scene],
        platforms=[write.platform for write in of_scene],
        acquired_at=[write.acquired_at for write in of_scene],
    )


def _scenes(writes: Sequence[CurrentWrite]) -> tuple[Numbers, list[CurrentWrite]]:
    """Return the number of each write's scene, and a write of each scene, in the same order."""
    number = np.zeros(len(writes), dtype=np.int64)
    of_scene: list[CurrentWrite] = []
    for at, write in enumerate(writes):
        if not of_scene or of_scene[-1].ref != write.ref:
            of_scene.append(write)
        number[at] = len(of_scene) - 1
    return number, of_scene


def _pass_starts(parcel_ids: Numbers, scene: Numbers, of_scene: Sequence[CurrentWrite]) -> Flags:
    """Whether each row, by parcel and scene, begins a pass of its parcel."""
    platforms = np.unique([write.platform for write in of_scene], return_inverse=True)[1]
    instants = np.array([microseconds(write.acquired_at) for write in of_scene], dtype=np.int64)
    if scene.size == 0:
        return np.zeros(0, dtype=bool)
    at = instants[scene]
    starts = _changes(parcel_ids) | _changes(platforms[scene])
    starts[1:] |= np.diff(at) > _GAP_US
    while True:
        begun = np.maximum.accumulate(np.where(starts, np.arange(at.size), 0))
        beyond = at - at[begun] > _GAP_US
        if not beyond.any():
            return starts
        # The first row beyond the gap of the one that began its pass begins the next.
        starts[1:] |= beyond[1:] & ~beyond[:-1]


def _changes(numbers: Numbers) -> Flags:
    """Whether each number differs from the one before it; the first does."""
    changes = np.ones(numbers.size, dtype=bool)
    changes[1:] = numbers[1:] != numbers[:-1]
    return changes
