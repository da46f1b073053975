"""Why a parcel may have departed: the first cause whose rule fits, and the next candidates.

A cause is one entry in `CAUSES`; their order is the order in which they are tried. Rules
after Gao 1996 (moisture), Key and Benson 2006 (burn) and McFeeters 1996 (water); their
limits were set on simulated histories.
"""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import asdict, dataclass
from math import nan
from typing import Any, Final

from service.alerts.looks import DepartedLook

SUDDEN: Final = 0.5
"""Share of a shortfall that came with its first look, from which on it is sudden."""
WATER_SHARE: Final = 0.5
"""Share of cells classed as water that speaks for a flood."""
_LOOKS: Final = 2
_WORDS: Final = {
    "ndvi": "NDVI",
    "ndmi": "NDMI",
    "nbr": "NBR",
    "ndwi": "NDWI",
    "nir": "near-infrared",
    "swir16": "short-wave infrared",
    "swir22": "short-wave infrared at 2.2 µm",
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Evidence:
    """Mean figures of the last one or two departed looks; unknown measures are missing.

    `suddenness` is the share of the leading shortfall that came with the first departing
    look, None where that is unknown; `water` the share of cells classed as water.
    """

    observed: Mapping[str, float]
    shortfall: Mapping[str, float]
    departures: Mapping[str, float]
    water: float | None
    suddenness: float | None

    def short(self, measure: str) -> float:
        """Return the mean shortfall of a measure, NaN where unknown: no limit holds then."""
        return self.shortfall.get(measure, nan)

    def seen(self, measure: str) -> float:
        """Return the mean observed value of a measure, NaN where unknown."""
        return self.observed.get(measure, nan)

    @property
    def may_be_sudden(self) -> bool:
        """Whether the departure was sudden, or it is unknown whether it was."""
        return self.suddenness is None or self.suddenness >= SUDDEN


@dataclass(frozen=True, slots=True, kw_only=True)
class CauseEntry:
    """A kind of cause: when it fits, and how to say why.

    `keeps_label` = once an alert carries it, later looks do not revise it: what follows a
    flood or a fire no longer looks like one.
    """

    kind: str
    fits: Callable[[Evidence], bool]
    because: Callable[[Evidence], str]
    source: str
    keeps_label: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class Cause:
    """The likely cause of an alert, with its evidence and the next candidates."""

    kind: str
    because: str
    others: tuple[str, ...]

    def as_dict(self) -> dict[str, Any]:
        """Return plain members, fit for JSON."""
        return {**asdict(self), "others": list(self.others)}

    @classmethod
    def from_dict(cls, members: Mapping[str, Any]) -> "Cause":
        """Return the cause that `as_dict` wrote."""
        return cls(
            kind=members["kind"], because=members["because"], others=tuple(members["others"])
        )


def evidence_of(looks: Sequence[DepartedLook], suddenness: float | None) -> Evidence:
    """Return the evidence of the last one or two of some departed looks, in order of time."""
    last = looks[-_LOOKS:]
    water = [look.water for look in last if look.water is not None]
    return Evidence(
        observed=_means([look.observed for look in last]),
        shortfall=_means([look.shortfall for look in last]),
        departures=_means([look.departures for look in last]),
        water=sum(water) / len(water) if water else None,
        suddenness=suddenness,
    )


def attribute(evidence: Evidence) -> Cause:
    """Return the first cause that fits; the others that fit too are the next candidates."""
    fitting = [entry for entry in CAUSES if entry.fits(evidence)]
    chosen = fitting[0] if fitting else UNDETERMINED
    return Cause(
        kind=chosen.kind,
        because=chosen.because(evidence),
        others=tuple(entry.kind for entry in fitting[1:]),
    )


def keeps_label(kind: str) -> bool:
    """Whether an alert with this cause keeps it."""
    return any(entry.keeps_label for entry in CAUSES if entry.kind == kind)


def _means(figures: Sequence[Mapping[str, float]]) -> dict[str, float]:
    known = {name: [each[name] for each in figures if name in each] for name in figures[-1]}
    return {name: sum(values) / len(values) for name, values in known.items()}


def _fits_flood(evidence: Evidence) -> bool:
    if not (evidence.short("ndwi") > 0.06 and evidence.short("swir16") < -0.03):
        return False
    moisture = evidence.short("ndmi")
    return moisture > 0.03 or (evidence.short("nir") < -0.04 and moisture > -0.06)


def _fits_burn(evidence: Evidence) -> bool:
    burn = evidence.short("nbr")
    return (
        burn < -0.10
        and evidence.short("nir") < -0.025
        and evidence.short("swir16") < 0.012
        and burn < 1.25 * min(evidence.short("ndvi"), 0.0)
        and evidence.may_be_sudden
    )


def _fits_removal(evidence: Evidence) -> bool:
    return (
        evidence.short("ndvi") < -0.25 and evidence.seen("ndvi") < 0.42 and evidence.may_be_sudden
    )


def _fits_moisture_stress(evidence: Evidence) -> bool:
    greenness, moisture = evidence.short("ndvi"), evidence.short("ndmi")
    dryness = evidence.short("swir16")
    return (
        moisture < -0.05
        and dryness > 0.015
        and dryness > 0.17 * abs(greenness)
        and moisture < 0.7 * greenness
        and evidence.seen("ndvi") > 0.3
    )


def _change(evidence: Evidence, measure: str) -> str:
    size = evidence.short(measure)
    side = "below" if size < 0 else "above"
    return f"{_WORDS.get(measure, measure)} is {abs(size):.2f} {side} what was expected"


def _because_flood(evidence: Evidence) -> str:
    fell = [_change(evidence, band) for band in ("nir", "swir16") if evidence.short(band) < 0]
    said = f"{_joined(fell)}, while {_change(evidence, 'ndwi')}"
    if evidence.water is not None and evidence.water > WATER_SHARE:
        said += f"; {evidence.water:.0%} of the cells are classed as water"
    return said


def _because_burn(evidence: Evidence) -> str:
    return (
        f"{_change(evidence, 'nbr')}, more than NDVI ({evidence.short('ndvi'):+.2f}); "
        f"{_change(evidence, 'nir')}, and short-wave infrared did not rise with it "
        f"({evidence.short('swir16'):+.2f})"
    )


def _because_removal(evidence: Evidence) -> str:
    came = "at once" if evidence.suddenness is not None else "in a gap between looks"
    return (
        f"{_change(evidence, 'ndvi')} and came down to {evidence.seen('ndvi'):.2f}, {came}: "
        "the green cover is gone"
    )


def _because_moisture_stress(evidence: Evidence) -> str:
    return (
        f"{_change(evidence, 'ndmi')} and {_change(evidence, 'swir16')}, while the cover is "
        f"still green (NDVI {evidence.seen('ndvi'):.2f}, {evidence.short('ndvi'):+.2f})"
    )


def _because_undetermined(evidence: Evidence) -> str:
    known = sorted(evidence.departures, key=lambda name: -abs(evidence.departures[name]))
    told = _joined([_change(evidence, name) for name in known[:_LOOKS]])
    return f"{told}; this fits none of the known causes"


def _joined(parts: Sequence[str]) -> str:
    return " and ".join(parts)


CAUSES: Final = (
    CauseEntry(
        kind="flood",
        fits=_fits_flood,
        because=_because_flood,
        source="McFeeters 1996, Int. J. Remote Sensing 17, 1425-1432",
        keeps_label=True,
    ),
    CauseEntry(
        kind="burn",
        fits=_fits_burn,
        because=_because_burn,
        source="Key and Benson 2006, FIREMON, RMRS-GTR-164",
        keeps_label=True,
    ),
    CauseEntry(
        kind="removal",
        fits=_fits_removal,
        because=_because_removal,
        source="NDVI of soil and residue, common practice",
    ),
    CauseEntry(
        kind="moisture_stress",
        fits=_fits_moisture_stress,
        because=_because_moisture_stress,
        source="Gao 1996, Remote Sensing of Environment 58, 257-266",
    ),
)
UNDETERMINED: Final = CauseEntry(
    kind="undetermined",
    fits=lambda _evidence: True,
    because=_because_undetermined,
    source="what is left when no other cause fits",
)
