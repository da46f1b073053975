"""What became of the parcels in a scene, in numbers and reasons."""

from collections import Counter
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any, Final

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


def scene_counts(rows: Iterable[Observed]) -> dict[str, Any]:
    """Count the parcels of a scene: in the footprint, measured, unseen by reason, small."""
    parcels = [parcel_in_scene(row) for row in rows]
    looks = [parcel for parcel in parcels if parcel.is_look]
    unseen = Counter(parcel.reason for parcel in parcels if not parcel.is_look)
    return {
        "parcels_in_footprint": len(parcels),
        "parcels_measured": len(looks),
        "parcels_unseen": dict(sorted(unseen.items(), key=lambda item: str(item[0]))),
        "parcels_small": sum(parcel.is_small for parcel in looks),
    }


def out_of_range(rows: Iterable[Observed], index_ids: Iterable[str]) -> dict[str, int]:
    """Count by normalised index the parcels where it leaves [-1, 1]: flagged, never clipped."""
    ids = list(index_ids)
    counts = dict.fromkeys(ids, 0)
    for row in rows:
        for index_id in ids:
            low, high = row.figure(f"{index_id}.min"), row.figure(f"{index_id}.max")
            if low is not None and high is not None and (low < -1 or high > 1):
                counts[index_id] += 1
    return counts
