"""A small invented land for tests of judging: three crops, ten parcels each, four seasons.

Its looks hold a little noise and nothing else, so that what departs is what a test lets
depart. Spectra are mixed from the end members of `simulated_seasons`; no service code is
used to make them.
"""

from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from tests.serving import Service, square
from tests.simulated_seasons import (
    BANDS,
    CHAR,
    DRIED,
    DRY_SOIL,
    FRESH,
    MEASURES,
    WATER,
    WET_SOIL,
    measures_of,
)

CROPS: Final = {
    "barley": (40.0, 100.0, 190.0, 212.0),
    "maize": (130.0, 180.0, 262.0, 285.0),
    "beet": (110.0, 160.0, 290.0, 310.0),
}
"""Crop: days of the year of emergence, full cover, ripening and harvest."""
PER_CROP: Final = 10
PARCELS: Final = tuple(f"{crop}-{at}" for crop in CROPS for at in range(PER_CROP))
HOLDINGS: Final = {"barley": "north", "maize": "south", "beet": "south"}
PAST: Final = (2021, 2022, 2023)
RUNNING: Final = 2024
PASSES: Final = 14
HEADER: Final = "parcel,index,observed_at,mean,sensor,source\n"
CELLS: Final = 4
"""Side of a parcel in 10 m cells."""
_PER_ROW: Final = 6
_TILE: Final = 48
_SOIL: Final = 0.5 * DRY_SOIL + 0.5 * WET_SOIL


@dataclass(frozen=True, kw_only=True)
class Event:
    """What befalls a parcel in some passes of the running season."""

    kind: str
    parcel: str
    passes: range


EVENTS: Final = (
    Event(kind="burn", parcel="barley-7", passes=range(6, 8)),
    Event(kind="removal", parcel="maize-4", passes=range(9, PASSES)),
    Event(kind="moisture_stress", parcel="maize-8", passes=range(9, PASSES)),
    # The flood falls, the parcel returns, and is flooded again.
    Event(kind="flood", parcel="beet-3", passes=range(6, 9)),
    Event(kind="flood", parcel="beet-3", passes=range(11, 13)),
)
FLOODED: Final = "beet-3"


def at_pass(number: int, year: int = RUNNING) -> datetime:
    """Return when a pass of a season was acquired."""
    day = 90 + 12 * number + 4 * (year % 3)
    return datetime(year, 1, 1, 10, 30, tzinfo=UTC) + timedelta(days=day - 1)


def stamp(instant: datetime) -> str:
    """Return an instant as RFC 3339."""
    return instant.isoformat().replace("+00:00", "Z")


def spectra(
    number: int, year: int = RUNNING, *, events: Iterable[Event] = EVENTS
) -> NDArray[np.float64]:
    """Return the reflectance (parcels, bands) of a pass; events befall the running season."""
    lasting = np.random.default_rng(7)
    late = lasting.normal(0, 2, len(PARCELS))
    vigour = lasting.normal(1, 0.03, len(PARCELS))
    cover = vigour * _cover(at_pass(number, year).timetuple().tm_yday - late)
    canopy = np.tile(FRESH, (len(PARCELS), 1))
    other, share = np.tile(WATER, (len(PARCELS), 1)), np.zeros(len(PARCELS))
    for event in events if year == RUNNING else ():
        at = PARCELS.index(event.parcel)
        if number not in event.passes:
            continue
        if event.kind == "flood":
            share[at] = 0.8
        elif event.kind == "burn":
            other[at], share[at] = CHAR, 0.85
        elif event.kind == "removal":
            cover[at] = 0.08
        else:
            dried = min(1.0, 0.4 * (number - event.passes.start + 1))
            canopy[at] = (1 - dried) * FRESH + dried * DRIED
    mixed = cover[:, None] * canopy + (1 - cover[:, None]) * _SOIL
    bands = (1 - share[:, None]) * mixed + share[:, None] * other
    noise = np.random.default_rng([year, number])
    return np.asarray(bands * noise.normal(1, 0.012, bands.shape))


def _cover(day: NDArray[np.float64]) -> NDArray[np.float64]:
    stages = [CROPS[parcel.partition("-")[0]] for parcel in PARCELS]
    emergence, full, ripe, harvest = np.array(stages).T
    rise = 1 / (1 + np.exp(-(day - (emergence + full) / 2) / ((full - emergence) / 9)))
    fall = 1 / (1 + np.exp((day - (ripe + harvest) / 2) / ((harvest - ripe) / 7)))
    return np.asarray(0.04 + 0.88 * rise * fall)


def lines(number: int, year: int = RUNNING, *, events: Iterable[Event] = EVENTS) -> Iterator[str]:
    """Yield the figures of a pass as lines of CSV."""
    table = measures_of(spectra(number, year, events=events))
    at = stamp(at_pass(number, year))
    for parcel, row in zip(PARCELS, table, strict=True):
        for measure, value in zip(MEASURES, row, strict=True):
            yield f"{parcel},{measure},{at},{value:.5f},archive-sensor,archive\n"


def history() -> list[str]:
    """Return the figures of the finished seasons."""
    return [line for year in PAST for number in range(PASSES) for line in lines(number, year)]


def running(numbers: Iterable[int] = range(PASSES)) -> list[str]:
    """Return the figures of passes of the running season."""
    return [line for number in numbers for line in lines(number)]


def settle(service: Service) -> None:
    """Put the parcels and say what grew where."""
    parcels = [
        square(
            ref,
            col=1 + 8 * (at % _PER_ROW),
            row=1 + 8 * (at // _PER_ROW),
            size=CELLS,
            holding=HOLDINGS[ref.partition("-")[0]],
        )
        for at, ref in enumerate(PARCELS)
    ]
    assert service.put_parcels(*parcels).json()["created"] == len(PARCELS)
    seasons = [
        {"parcel": ref, "crop": ref.partition("-")[0], "year": year}
        for ref in PARCELS
        for year in (*PAST, RUNNING, RUNNING + 1)
    ]
    assert service.call("POST", "/v1/seasons", json=seasons).status_code == 200


def send(
    service: Service, rows: Sequence[str], *, assess: bool = True, wait: bool = True
) -> Mapping[str, Any]:
    """Import lines of CSV; hold on until nothing is left to judge."""
    answer = service.call(
        "POST",
        "/v1/observations",
        params={"assess": "true"} if assess else {},
        content=(HEADER + "".join(rows)).encode(),
        headers={"Content-Type": "text/csv", **({"Prefer": "wait=60"} if wait else {})},
    )
    assert answer.status_code == 200, answer.text
    told: Mapping[str, Any] = answer.json()
    return told


def images(bands: NDArray[np.float64]) -> dict[str, NDArray[np.uint16]]:
    """Return images of a tile by band: every parcel has its own spectrum, wet soil between.

    Digital number = reflectance * 10,000 + 1,000, as of processing baseline 05.10.
    """
    table = np.tile(WET_SOIL[:, None, None], (1, _TILE, _TILE))
    for at, spectrum in enumerate(bands):
        col, row = 1 + 8 * (at % _PER_ROW), 1 + 8 * (at // _PER_ROW)
        table[:, row - 1 : row + CELLS + 1, col - 1 : col + CELLS + 1] = spectrum[:, None, None]
    numbers = np.round(table * 10_000 + 1_000).astype(np.uint16)
    return dict(zip(BANDS, numbers, strict=True))
