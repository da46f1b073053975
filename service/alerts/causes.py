"""Why a parcel may have departed: the first cause whose rule fits, and the next candidates.

A cause is one entry in `CAUSES`; their order is the order in which they are tried. The
published works name the measures that tell the causes apart; the limits are those of the
method's design, set on simulated histories.
"""

from collections.abc import Callable, Mapping
from dataclasses import asdict, dataclass
from typing import Any, Final

from service.alerts.evidence import HAZE, Evidence
from service.alerts.reasons import (
    because_burn,
    because_decline,
    because_flood,
    because_haze,
    because_late_growth,
    because_moisture_stress,
    because_partial_loss,
    because_removal,
    because_shadow,
    because_snow,
    because_unclear,
    because_undetermined,
)


@dataclass(frozen=True, slots=True, kw_only=True)
class CauseEntry:
    """One way of telling a kind of cause: when it fits, and how to say why.

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


def attribute(evidence: Evidence) -> Cause:
    """Return the first cause that fits; the others that fit too are the next candidates."""
    fitting = [entry for entry in CAUSES if entry.fits(evidence)]
    chosen = fitting[0] if fitting else UNDETERMINED
    others = dict.fromkeys(entry.kind for entry in fitting[1:])
    others.pop(chosen.kind, None)
    others.pop(UNDETERMINED.kind, None)
    return Cause(kind=chosen.kind, because=chosen.because(evidence), others=tuple(others))


def keeps_label(kind: str) -> bool:
    """Whether an alert with this cause keeps it."""
    return any(entry.keeps_label for entry in CAUSES if entry.kind == kind)


def _fits_snow(evidence: Evidence) -> bool:
    return evidence.snow_index > 0.15 and evidence.seen("green") > 0.18


def _fits_haze(evidence: Evidence) -> bool:
    haze = evidence.short(HAZE)
    is_dark = evidence.short("nir") < -0.04 and evidence.short("swir16") < -0.04
    return haze > 0.02 and not (is_dark and haze < 0.06)


def _fits_flood(evidence: Evidence) -> bool:
    wetter, dryness = evidence.short("ndwi"), evidence.short("swir16")
    # What is burnt lowers NBR; water does not.
    if not (wetter > 0.06 and dryness < -0.03) or evidence.short("nbr") < -0.15:
        return False
    moisture, is_dark = evidence.short("ndmi"), evidence.short("nir") < -0.04
    is_mixed = wetter > 0.2 and evidence.short("nir") < -0.12 and moisture > -0.14
    return moisture > 0.03 or (is_dark and moisture > -0.06) or is_mixed


def _fits_shadow(evidence: Evidence) -> bool:
    return (
        evidence.short("nir") < -0.03
        and evidence.short("swir16") < -0.03
        and abs(evidence.short("ndvi")) < 0.05
        and abs(evidence.short("ndmi")) < 0.05
        and evidence.short("green") < -0.01
    )


def _fits_burn(evidence: Evidence) -> bool:
    burn, greenness = evidence.short("nbr"), evidence.short("ndvi")
    if not (burn < -0.10 and evidence.short("nir") < -0.025 and evidence.may_be_sudden):
        return False
    # Char takes the difference between the two short-wave bands away; bare soil is bright in
    # both, and a thinner canopy moves both alike.
    contrast = evidence.short("swir22") - evidence.short("swir16")
    is_char = evidence.short("swir16") < 0.035 and not contrast <= 0.05
    return is_char and (evidence.seen("nbr") < -0.05 or burn < 1.25 * min(greenness, 0.0))


def _fits_late_growth(evidence: Evidence) -> bool:
    if evidence.rising is None or evidence.best is None:
        return False
    return (
        evidence.short("ndvi") < -0.08
        and evidence.rising > 0.04
        and evidence.seen("ndvi") >= evidence.best - 0.08
    )


def _fits_removal(evidence: Evidence) -> bool:
    fall, left = evidence.short("ndvi"), evidence.seen("ndvi")
    is_gone = (fall < -0.25 and left < 0.42) or (fall < -0.38 and left < 0.6)
    return is_gone and evidence.may_be_sudden


def _fits_moisture_stress(evidence: Evidence) -> bool:
    greenness, moisture = evidence.short("ndvi"), evidence.short("ndmi")
    dryness, light = evidence.short("swir16"), evidence.short("nir")
    return (
        moisture < -0.05
        and dryness > 0.015
        and dryness > 0.17 * abs(greenness)
        and moisture < 0.7 * greenness
        and evidence.seen("ndvi") > 0.3
        # Dry leaves still scatter; leaves that are gone do not.
        and not light < -0.9 * dryness - 0.015
    )


def _lost_cover(evidence: Evidence) -> bool:
    # Under a dense canopy NDVI hardly falls while near-infrared does.
    is_thinner = evidence.short("nir") < -0.03 and evidence.short("ndmi") < -0.02
    return evidence.short("ndvi") < -0.04 or is_thinner


def _is_unclear(evidence: Evidence) -> bool:
    return (
        evidence.suddenness is None
        and evidence.short("ndvi") > -0.10
        and not evidence.short("nir") < -0.03
    )


def _fits_partial_loss(evidence: Evidence) -> bool:
    is_sudden = evidence.suddenness is None or evidence.suddenness > 0.8
    return _lost_cover(evidence) and is_sudden and evidence.growth < 1.3


CAUSES: Final = (
    CauseEntry(
        kind="snow",
        fits=_fits_snow,
        because=because_snow,
        source="Hall et al. 1995, Remote Sensing of Environment 54, 127-140",
    ),
    CauseEntry(
        kind="residual_cloud",
        fits=_fits_haze,
        because=because_haze,
        source="Zhang, Guindon and Cihlar 2002, Remote Sensing of Environment 82, 173-187",
    ),
    CauseEntry(
        kind="flood",
        fits=_fits_flood,
        because=because_flood,
        source="McFeeters 1996, Int. J. Remote Sensing 17, 1425-1432",
        keeps_label=True,
    ),
    CauseEntry(
        kind="residual_cloud",
        fits=_fits_shadow,
        because=because_shadow,
        source="a shadow darkens all bands and leaves their ratios, common practice",
    ),
    CauseEntry(
        kind="burn",
        fits=_fits_burn,
        because=because_burn,
        source="Key and Benson 2006, FIREMON, RMRS-GTR-164; Trigg and Flasse 2001",
        keeps_label=True,
    ),
    CauseEntry(
        kind="late_growth",
        fits=_fits_late_growth,
        because=because_late_growth,
        source="a parcel that lost nothing while its crop grows on, common practice",
    ),
    CauseEntry(
        kind="removal",
        fits=_fits_removal,
        because=because_removal,
        source="NDVI of soil and residue, common practice",
    ),
    CauseEntry(
        kind="moisture_stress",
        fits=_fits_moisture_stress,
        because=because_moisture_stress,
        source="Gao 1996, Remote Sensing of Environment 58, 257-266",
    ),
    CauseEntry(
        kind="undetermined",
        fits=_is_unclear,
        because=because_unclear,
        source="a small change after a gap tells nothing of its cause, common practice",
    ),
    CauseEntry(
        kind="partial_loss",
        fits=_fits_partial_loss,
        because=because_partial_loss,
        source="part of the cover lost from one look to the next, common practice",
    ),
    CauseEntry(
        kind="decline",
        fits=_lost_cover,
        because=because_decline,
        source="cover lost little by little, common practice",
    ),
)
UNDETERMINED: Final = CauseEntry(
    kind="undetermined",
    fits=lambda _evidence: True,
    because=because_undetermined,
    source="what is left when no other cause fits",
)
