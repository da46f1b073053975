"""How rare a score is among those of the past: conformal p-values (Vovk et al. 2005).

p = (1 + number of past scores at least as high) / (N + 1), where past scores are taken with
the look's own season left out of its baseline. No distribution is assumed.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from service.seasons.medians import Counts, Figures

LOOKS_OF_CROP: Final = 2_000
"""From so many past scores on a crop is ranked among its own."""
KEPT_EXACTLY: Final = 4_096
"""So many of the highest scores are kept one by one, and as many of the others by rank."""
POOLED: Final = "*"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Ranking:
    """Some of many scores, ascending, and how many of all were at least as high as each."""

    scores: NDArray[np.float32]
    at_least: Counts
    total: int

    @classmethod
    def of(cls, scores: Figures) -> "Ranking":
        """Return the ranking of scores, unknown ones left out."""
        known = np.sort(scores[np.isfinite(scores)].astype(np.float32))
        rest = max(known.size - KEPT_EXACTLY, 0)
        step = max(rest // KEPT_EXACTLY, 1)
        kept = np.concatenate([np.arange(0, rest, step), np.arange(rest, known.size)])
        return cls(
            scores=known[kept],
            at_least=(known.size - kept).astype(np.int64),
            total=int(known.size),
        )

    def p(self, scores: Figures) -> Figures:
        """Return the p-value of each score, NaN where it is unknown."""
        place = np.searchsorted(self.scores, scores.astype(np.float32), side="left")
        as_high = np.append(self.at_least, 0)[place]
        found: Figures = np.where(np.isfinite(scores), (1 + as_high) / (self.total + 1), np.nan)
        return found


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Ranks:
    """Rankings by crop, and of all labelled crops together under `POOLED`."""

    by_crop: Mapping[str, Ranking]

    @classmethod
    def of(cls, crops: Sequence[str], crop: Counts, scores: Figures) -> "Ranks":
        """Return the rankings of past scores, `crop` being the place of each look's crop."""
        by_crop = {name: Ranking.of(scores[crop == at]) for at, name in enumerate(crops) if name}
        own = {name: each for name, each in by_crop.items() if each.total >= LOOKS_OF_CROP}
        labelled = np.flatnonzero([bool(name) for name in crops])
        pooled = Ranking.of(scores[np.isin(crop, labelled)])
        return cls(by_crop={**own, POOLED: pooled} if pooled.total else {})

    def p(self, crops: Sequence[str], scores: Figures) -> Figures:
        """Return the p-value of each score among those of its crop, NaN without a past."""
        found = np.full(scores.shape, np.nan)
        names = np.array(crops, dtype=np.str_)
        for crop in sorted(set(crops)):
            ranking = self.by_crop.get(crop) or self.by_crop.get(POOLED)
            if ranking is not None and crop:
                found[names == crop] = ranking.p(scores[names == crop])
        return found

    def to_arrays(self) -> dict[str, NDArray[Any]]:
        """Return plain arrays that `from_arrays` reads."""
        names = list(self.by_crop)
        each = [self.by_crop[name] for name in names]
        return {
            "rank_crops": np.array(names, dtype=np.str_),
            "rank_totals": np.array([one.total for one in each], dtype=np.int64),
            "rank_sizes": np.array([one.scores.size for one in each], dtype=np.int64),
            "rank_scores": np.concatenate(
                [np.empty(0, dtype=np.float32), *(one.scores for one in each)]
            ),
            "rank_at_least": np.concatenate(
                [np.empty(0, dtype=np.int64), *(one.at_least for one in each)]
            ),
        }

    @classmethod
    def from_arrays(cls, arrays: Mapping[str, NDArray[Any]]) -> "Ranks":
        """Return the rankings that `to_arrays` wrote."""
        if "rank_sizes" not in arrays:
            return cls(by_crop={})
        ends = arrays["rank_sizes"].cumsum()
        spans = zip(
            arrays["rank_crops"].tolist(),
            ends - arrays["rank_sizes"],
            ends,
            arrays["rank_totals"].tolist(),
            strict=True,
        )
        return cls(
            by_crop={
                crop: Ranking(
                    scores=arrays["rank_scores"][first:last],
                    at_least=arrays["rank_at_least"][first:last],
                    total=total,
                )
                for crop, first, last, total in spans
            }
        )
