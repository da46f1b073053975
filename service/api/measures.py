"""Naming measures and formats in a query."""

from collections.abc import Mapping, Sequence
from typing import Final

from service.errors import RejectedInput
from service.jobs.measuring import WATCHED
from service.spectral.indices import INDICES
from service.spectral.roles import BandRole

STATS: Final = ("mean", "sd", "min", "p10", "p50", "p90", "max", "valid_share", "pixels")
BAND_STATS: Final = ("mean", "sd", "valid_share", "pixels")
WATCHED_IDS: Final = tuple(index.id for index in WATCHED)


def split(values: Sequence[str]) -> list[str]:
    """Return names sent comma-separated, repeated or both, each once and in order."""
    return list(dict.fromkeys(name for value in values for name in value.split(",")))


def measures_in(values: Sequence[str] | None) -> list[str]:
    """Return the measures that a query names; by default the watched indices.

    Raises
    ------
    RejectedInput
        One of them is neither a watched index nor a band role.
    """
    if values is None:
        return list(WATCHED_IDS)
    names = split(values)
    for name in names:
        if name in WATCHED_IDS or name in set(BandRole):
            continue
        reason = (
            "This index is not watched, so it is not measured."
            if name in INDICES
            else "There is no such index."
        )
        raise RejectedInput.parameter(
            "index", f"{reason} There are {', '.join(WATCHED_IDS)}, and the band roles."
        )
    return names


def stats_in(values: Sequence[str] | None, measures: Sequence[str]) -> list[str]:
    """Return the statistics that a query names; by default mean and valid share.

    Raises
    ------
    RejectedInput
        One of them is unknown, or is not kept of a band.
    """
    names = split(values) if values is not None else ["mean", "valid_share"]
    is_band = any(measure in set(BandRole) for measure in measures)
    for name in names:
        if name not in STATS:
            raise RejectedInput.parameter("stat", f"Statistics are {', '.join(STATS)}.")
        if is_band and name not in BAND_STATS:
            raise RejectedInput.parameter(
                "stat", f"Of bands, {', '.join(BAND_STATS)} are kept; ask for indices apart."
            )
    return names


def media_type_in(format_name: str | None, accept: str, offered: Mapping[str, str]) -> str:
    """Return the media type to write, by `format` or else by the Accept header.

    Parameters
    ----------
    offered
        Media types in order of preference, each with its short name.

    Raises
    ------
    RejectedInput
        Neither names one that is offered.
    """
    if format_name is not None:
        for media_type, name in offered.items():
            if name == format_name:
                return media_type
        raise RejectedInput.parameter("format", f"Formats are {', '.join(offered.values())}.")
    wanted = [_quality(entry) for entry in (accept or "*/*").split(",")]
    for quality, pattern in sorted(wanted, key=lambda pair: -pair[0]):
        for media_type in offered:
            if quality > 0 and pattern in (media_type, f"{media_type.split('/')[0]}/*", "*/*"):
                return media_type
    raise RejectedInput(
        "not-acceptable", f"This can be written as {', '.join(offered)}; ask for one of them."
    )


def _quality(entry: str) -> tuple[float, str]:
    """Return weight and pattern of one entry of an Accept header (RFC 9110)."""
    pattern, *parameters = (part.strip() for part in entry.split(";"))
    quality = next((p[2:] for p in parameters if p.startswith("q=")), "1")
    try:
        return float(quality), pattern.lower()
    except ValueError:
        return 0.0, pattern.lower()
