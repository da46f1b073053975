"""What became of the parcels in a scene, in numbers and reasons."""

from collections import Counter
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from service.store.looks import LOOK_SHARE, Observed

LOSSES: Final = ("cloud", "shadow", "snow", "nodata", "saturation")
SMALL_LOOK_PIXELS: Final = 4.0
"""Below this many usable cells a look rests on little."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ParcelInScene:
    """One parcel in one scene: a look, or unseen with the reason that cost most."""

    observed: Observed
    is_look: bool
    reason: str | None
    is_small: bool


def parcel_in_scene(row: Observed) -> ParcelInScene:
    """Judge whether an observation is a look, and else why not."""
    is_look = row.of_look("valid_share") >= LOOK_SHARE
    lost = {loss: row.of_look(loss) for loss in LOSSES}
    return ParcelInScene(
        observed=row,
        is_look=is_look,
        reason=None if is_look else max(lost, key=lambda loss: lost[loss]),
        is_small=row.of_look("pixels") < SMALL_LOOK_PIXELS,
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class SceneFigures:
    """The figures of some parcels in a scene, all with the same columns.

    `rule` is the one of the look; `figures` has the shape (parcels, columns), NaN where unknown.
    """

    columns: Sequence[str]
    rule: str
    figures: NDArray[np.float32]

    def column(self, name: str) -> NDArray[np.float32]:
        """Return one figure of each parcel, NaN where it was not measured."""
        if name not in self.columns:
            return np.full(len(self.figures), np.nan, dtype=np.float32)
        return self.figures[:, self.columns.index(name)]

    def of_look(self, figure: str) -> NDArray[np.float32]:
        """Return a figure of the look itself, 0 where unknown."""
        return np.nan_to_num(self.column(f"{self.rule}.{figure}"))


def figures_of(rows: Iterable[Observed]) -> list[SceneFigures]:
    """Return the figures of observations, those with the same columns together."""
    by_places: dict[int, list[Observed]] = {}
    for row in rows:
        by_places.setdefault(id(row.places), []).append(row)
    return [
        SceneFigures(
            columns=list(some[0].places.by_column),
            rule=some[0].places.rule,
            figures=np.stack([row.figures for row in some]),
        )
        for some in by_places.values()
    ]


def scene_counts(parts: Iterable[SceneFigures]) -> dict[str, Any]:
    """Count the parcels of a scene: in the footprint, measured, unseen by reason, small."""
    count, seen, small = 0, 0, 0
    unseen: Counter[str] = Counter()
    for part in parts:
        is_look = part.of_look("valid_share") >= np.float32(LOOK_SHARE)
        costliest = np.argmax([part.of_look(loss) for loss in LOSSES], axis=0)
        unseen.update(LOSSES[place] for place in costliest[~is_look].tolist())
        count += len(is_look)
        seen += int(is_look.sum())
        small += int((part.of_look("pixels")[is_look] < SMALL_LOOK_PIXELS).sum())
    return {
        "parcels_in_footprint": count,
        "parcels_measured": seen,
        "parcels_unseen": dict(sorted(unseen.items())),
        "parcels_small": small,
    }


def out_of_range(parts: Iterable[SceneFigures], index_ids: Iterable[str]) -> dict[str, int]:
    """Count by normalised index the parcels where it leaves [-1, 1]: flagged, never clipped."""
    counts = dict.fromkeys(index_ids, 0)
    for part in parts:
        for index_id in counts:
            low, high = part.column(f"{index_id}.min"), part.column(f"{index_id}.max")
            counts[index_id] += int(((low < -1) | (high > 1)).sum())
    return counts
