"""The odds that an alert is a false one: how many as strong the quiet past would have given.

After Storey 2002: among alerts of a strength, the expected number of false ones over the
number there is. The past holds real events that nobody marked; how many of its
alarms are false is told by what parcels do on the better side, where no event drives them
(decoys, after Elias and Gygi 2007 and Barber and Candès 2015).
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Final

import numpy as np
from numpy.typing import NDArray

KERNEL: Final = 0.3
"""Alerts whose strengths differ by this in their logarithm are still much alike."""
UNSEEN: Final = 0.25
"""False alerts of a strength that never came up."""
MOST: Final = 0.97
EVIDENCE: Final[Mapping[str, float]] = {
    "flood": 0.2,
    "burn": 0.2,
    "moisture_stress": 0.2,
    "undetermined": 3.0,
    "residual_cloud": 3.0,
    "snow": 3.0,
}
"""By what a cause multiplies the odds of being false. What several bands agree on is seldom
noise, and what fits no cause often is. Set on simulated histories."""
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


def odds_of_false(
    strength: NDArray[np.float64], decoys: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Return the odds that each alarm is false, by the alarms of the better side.

    As many decoys of at least its strength as there are such alarms make it surely false. A
    stronger alarm is never more likely to be false than a weaker one.

    Parameters
    ----------
    strength
        Of the alarms, shape (alarms,).
    decoys
        Strengths of the alarms that the same looks give with the sides exchanged, (decoys,).
    """
    order = np.argsort(strength, kind="stable")
    ranked = strength[order]
    alarms = ranked.size - np.searchsorted(ranked, ranked, side="left")
    mirrored = decoys.size - np.searchsorted(np.sort(decoys), ranked, side="left")
    share = np.minimum.accumulate(np.minimum(1.0, (mirrored + 0.5) / alarms))
    odds = np.empty(strength.size)
    odds[order] = share
    return odds


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Odds:
    """Alarms that replaying the finished seasons gave, without those known to be right.

    `strength`, `day` (of season) and `weight`, the odds that it was a false one, of each,
    shape (alarms,); `seasons` were replayed, and in them `parcels` parcels a season.
    """

    seasons: int = 0
    parcels: float = 0.0
    strength: NDArray[np.float64] = field(default_factory=lambda: np.empty(0))
    day: NDArray[np.int64] = field(default_factory=lambda: np.empty(0, dtype=np.int64))
    weight: NDArray[np.float64] = field(default_factory=lambda: np.empty(0))

    def chance(
        self, strength: float, so_far: Sequence[float], *, day: int, parcels: int, cause: str
    ) -> float | None:
        """Return the odds that an alert is a false one, None without a replayed season.

        False alarms of about its strength (within some 30 %) over all of them, in a past
        season and the running one together: the past alone while the season is young, and
        the season's own count more and more.

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
        cause
            Its likely cause.
        """
        if self.seasons == 0:
            return None
        near = _kernel(self.strength, strength)
        a_season = (parcels / self.parcels if self.parcels > 0 else 1.0) / self.seasons
        by_now = self.day <= day
        false = a_season * float((self.weight * near * (1.0 + by_now)).sum())
        alarms = a_season * float(near.sum())
        alarms += float(_kernel(np.array(so_far), strength).sum())
        share = min((false + UNSEEN) / (alarms + UNSEEN), MOST)
        odds = share / (1.0 - share) * EVIDENCE.get(cause, 1.0)
        return odds / (1.0 + odds)


def _kernel(strength: NDArray[np.float64], at: float) -> NDArray[np.float64]:
    near: NDArray[np.float64] = np.exp(-0.5 * (np.log(strength / at) / KERNEL) ** 2)
    return near
