"""Why a cause is likely, in a sentence that names the measures and by how much they moved."""

from collections.abc import Sequence
from typing import Final

from service.alerts.evidence import HAZE, Evidence

WATER_SHARE: Final = 0.5
"""Share of cells classed as water that speaks for a flood."""
_NAMED: Final = 2
_WORDS: Final = {
    "ndvi": "NDVI",
    "ndmi": "NDMI",
    "nbr": "NBR",
    "ndwi": "NDWI",
    "nir": "near-infrared",
    "swir16": "short-wave infrared",
    "swir22": "short-wave infrared at 2.2 µm",
    HAZE: "haze (blue less half of red)",
}


def because_snow(evidence: Evidence) -> str:
    """Say why it is snow."""
    how = "" if "ndsi" in evidence.observed else ", from the parcel's mean green and short-wave"
    return (
        f"NDSI is {evidence.snow_index:.2f}{how} and green reflectance "
        f"{evidence.seen('green'):.2f}: bright and dark in the short-wave infrared, as snow is"
    )


def because_haze(evidence: Evidence) -> str:
    """Say why it is cloud that slipped through."""
    return f"{_change(evidence, HAZE)}: thin cloud or haze that the quality layer let through"


def because_shadow(evidence: Evidence) -> str:
    """Say why it is the shadow of a cloud."""
    return (
        f"{_change(evidence, 'nir')}, {_change(evidence, 'swir16')} and "
        f"{_change(evidence, 'green')}, while NDVI ({evidence.short('ndvi'):+.2f}) and NDMI "
        f"({evidence.short('ndmi'):+.2f}) hardly moved: darker in all bands alike, as in a shadow"
    )


def because_flood(evidence: Evidence) -> str:
    """Say why it is water."""
    fell = [_change(evidence, band) for band in ("nir", "swir16") if evidence.short(band) < 0]
    said = f"{_joined(fell)}, while {_change(evidence, 'ndwi')}"
    if evidence.water is not None and evidence.water > WATER_SHARE:
        said += f"; {evidence.water:.0%} of the cells are classed as water"
    return said


def because_burn(evidence: Evidence) -> str:
    """Say why it is a fire."""
    return (
        f"{_change(evidence, 'nbr')}, more than NDVI ({evidence.short('ndvi'):+.2f}); "
        f"{_change(evidence, 'nir')}, and short-wave infrared did not rise with it "
        f"({evidence.short('swir16'):+.2f})"
    )


def because_late_growth(evidence: Evidence) -> str:
    """Say why it is growth that comes late."""
    return (
        f"{_change(evidence, 'ndvi')} at a time when it is expected to rise (by "
        f"{evidence.rising or 0.0:.2f} in 20 days), and the parcel did not lose cover: "
        f"{evidence.seen('ndvi'):.2f} now, at best {evidence.best or 0.0:.2f} in the past 25 days"
    )


def because_removal(evidence: Evidence) -> str:
    """Say why the cover was removed."""
    came = "at once" if evidence.suddenness is not None else "in a gap between looks"
    return (
        f"{_change(evidence, 'ndvi')} and came down to {evidence.seen('ndvi'):.2f}, {came}: "
        "the green cover is gone"
    )


def because_moisture_stress(evidence: Evidence) -> str:
    """Say why it is a lack of water."""
    return (
        f"{_change(evidence, 'ndmi')} and {_change(evidence, 'swir16')}, while the cover is "
        f"still green (NDVI {evidence.seen('ndvi'):.2f}, {evidence.short('ndvi'):+.2f})"
    )


def because_partial_loss(evidence: Evidence) -> str:
    """Say why a part of the cover was lost at once."""
    share = "" if evidence.suddenness is None else f", {evidence.suddenness:.0%} of it at once"
    came = "between two looks" if share else "in a gap between looks"
    return (
        f"{_change(evidence, 'ndvi')}{share}, and near-infrared by {evidence.short('nir'):+.2f}; "
        f"it came {came} and did not grow since, and NDVI {evidence.seen('ndvi'):.2f} is left"
    )


def because_decline(evidence: Evidence) -> str:
    """Say why it is a slow loss."""
    came = "" if evidence.suddenness is None else ", and it came little by little"
    return (
        f"{_change(evidence, 'ndvi')} (NDMI {evidence.short('ndmi'):+.2f}, short-wave infrared "
        f"{evidence.short('swir16'):+.2f}){came}"
    )


def because_unclear(evidence: Evidence) -> str:
    """Say why a small departure after a gap tells nothing of its cause."""
    return (
        f"{_largest(evidence)}; the looks before are too long ago to tell a sudden from a slow "
        "change"
    )


def because_undetermined(evidence: Evidence) -> str:
    """Say what departed when no cause fits."""
    return f"{_largest(evidence)}; this fits none of the known causes"


def _largest(evidence: Evidence) -> str:
    known = sorted(evidence.departures, key=lambda name: -abs(evidence.departures[name]))
    return _joined([_change(evidence, name) for name in known[:_NAMED]])


def _change(evidence: Evidence, measure: str) -> str:
    size = evidence.short(measure)
    side = "below" if size < 0 else "above"
    return f"{_WORDS.get(measure, measure)} is {abs(size):.2f} {side} what was expected"


def _joined(parts: Sequence[str]) -> str:
    return " and ".join(parts)
