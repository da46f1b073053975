"""The odds that an alert is a false one: how many as strong the quiet past would have given.

After Storey 2002: among alerts of at least some strength, the expected number of false ones
over the number there is.
"""

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Final

import numpy as np
from numpy.typing import NDArray

FACTOR: Final = 2.0
"""How many times as many false alerts as the replayed past had are reckoned with: a baseline
has seen the seasons that are replayed, but not the running one. Set on simulated histories."""
UNSEEN: Final = 0.5
"""Alerts of a strength that never came up, over all seasons replayed."""
SINGLE_SHARE: Final = 3.0


def strength_of(scores: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the strength of alerts from the scores of their last three looks.

    The second largest, or a third of the largest if that is more.

    Parameters
    ----------
    scores
        Shape (..., looks); NaN where there was no look.
    """
    known = np.sort(np.where(np.isnan(scores), -np.inf, scores), axis=-1)
    largest = known[..., -1] / SINGLE_SHARE
    strength: NDArray[np.float64] = (
        np.maximum(known[..., -2], largest) if scores.shape[-1] > 1 else largest
    )
    return strength


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Odds:
    """Alarms that replaying the finished seasons gave, without those known to be right.

    `strength` and `day` (of season) of each, shape (alarms,); `seasons` were replayed, and in
    them `parcels` parcels a season.
    """

    seasons: int = 0
    parcels: float = 0.0
    strength: NDArray[np.float64] = field(default_factory=lambda: np.empty(0))
    day: NDArray[np.int64] = field(default_factory=lambda: np.empty(0, dtype=np.int64))

    def chance(
        self, strength: float, so_far: Sequence[float], *, day: int, parcels: int
    ) -> float | None:
        """Return the odds that an alert is a false one, None without a replayed season.

        Parameters
        ----------
        strength
            Of the alert.
        so_far
            Strengths of the alerts of the running season up to this one, it included.
        day
            Day of the season on which it opens.
        parcels
            Parcels watched in the running season.
        """
        if self.seasons == 0:
            return None
        as_strong = np.count_nonzero((self.strength >= strength) & (self.day <= day))
        false = (as_strong + UNSEEN) / self.seasons
        if self.parcels > 0:
            false *= parcels / self.parcels
        alerts = sum(each >= strength for each in so_far)
        return float(min(1.0, FACTOR * false / max(alerts, 1)))
