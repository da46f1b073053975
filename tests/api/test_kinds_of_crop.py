"""Each crop is compared with its own kind, wherever its season lies in the calendar.

Wheat and rape are sown before the crop year begins on 1 October, two crops follow each other
in one year, and in the south, where the crop year begins on 1 April, a winter and a summer
crop grow. Courses of NDVI are of our own invention.
"""

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from datetime import UTC, date, datetime, timedelta
from typing import Any

import numpy as np
import pytest

from tests.serving import Service

PARCELS = 8
PAST = (2020, 2021, 2022)
RUNNING = 2023
EVERY = timedelta(days=16)
BARE = 0.15


@dataclass(frozen=True, kw_only=True)
class Kind:
    """A crop: how many days after its sowing it greens, is full, ripens and is harvested.

    `sown` is month and day, `top` the NDVI of full cover.
    """

    crop: str
    field: str
    south: bool
    sown: tuple[int, int]
    stages: tuple[int, int, int, int]
    top: float

    def interval(self, year: int) -> tuple[date, date]:
        """Return first and last day of the season sown in a year."""
        first = date(year, *self.sown)
        return first, first + timedelta(days=self.stages[3])

    def green(self, day: date, year: int) -> float:
        """Return NDVI on a day of the season sown in a year."""
        n = (day - date(year, *self.sown)).days
        emerged, full, ripe, cut = self.stages
        return float(
            np.interp(n, [emerged, full, ripe, cut], [BARE, self.top, self.top, BARE + 0.1])
        )


KINDS = (
    Kind(crop="wheat", field="w", south=False, sown=(9, 10), stages=(8, 30, 260, 315), top=0.75),
    Kind(crop="rape", field="r", south=False, sown=(8, 20), stages=(6, 40, 280, 330), top=0.9),
    Kind(crop="barley", field="d", south=False, sown=(10, 5), stages=(10, 60, 230, 265), top=0.7),
    Kind(crop="maize", field="d", south=False, sown=(7, 5), stages=(10, 45, 70, 88), top=0.85),
    Kind(crop="canola", field="c", south=True, sown=(4, 25), stages=(10, 60, 150, 210), top=0.8),
    Kind(crop="cotton", field="t", south=True, sown=(10, 15), stages=(15, 70, 130, 190), top=0.82),
)
FIELDS = {kind.field: kind.south for kind in KINDS}


def refs(field: str) -> list[str]:
    return [f"{field}{number}" for number in range(PARCELS)]


def outline(ref: str) -> dict[str, Any]:
    """Return a parcel of about four hectares, on its hemisphere."""
    field, number = ref[0], int(ref[1:])
    lon = 15 + 0.01 * number
    lat = (-30.0 if FIELDS[field] else 50.0) + 0.01 * "wrdct".index(field)
    ring = [[lon, lat], [lon + 0.003, lat], [lon + 0.003, lat + 0.002], [lon, lat + 0.002]]
    return {
        "type": "Feature",
        "properties": {"ref": ref, "holding": "south" if FIELDS[field] else "north"},
        "geometry": {"type": "Polygon", "coordinates": [[*ring, ring[0]]]},
    }


def looks(year: int) -> Iterator[datetime]:
    """Yield the looks of the twelve months from 16 August of a year on."""
    at = datetime(year, 8, 16, 10, 30, tzinfo=UTC)
    while at < datetime(year + 1, 8, 16, tzinfo=UTC):
        yield at
        at += EVERY


def growing(field: str, day: date) -> tuple[Kind, int] | None:
    """Return what grows on a field on a day, and the year in which it was sown."""
    for kind in KINDS:
        for year in (day.year, day.year - 1):
            first, last = kind.interval(year)
            if kind.field == field and first <= day <= last:
                return kind, year
    return None


def figures(year: int, *, falls: Mapping[str, date] | None = None) -> list[dict[str, Any]]:
    """Return NDVI of all parcels; a parcel that falls loses its green from a day on."""
    rows = []
    for at in looks(year):
        noise = np.random.default_rng([year, at.timetuple().tm_yday])
        for ref in (ref for field in FIELDS for ref in refs(field)):
            grown = growing(ref[0], at.date())
            green = BARE if grown is None else grown[0].green(at.date(), grown[1])
            since = (falls or {}).get(ref)
            if since is not None and at.date() >= since:
                green = BARE
            mean = round(green + float(noise.normal(0, 0.006)), 4)
            rows.append(
                {"parcel": ref, "index": "ndvi", "observed_at": at.isoformat(), "mean": mean}
            )
    return rows


def send(service: Service, rows: list[dict[str, Any]], *, assess: bool) -> None:
    answer = service.call(
        "POST",
        "/v1/observations",
        params={"assess": "true"} if assess else {},
        json=rows,
        headers={"Prefer": "wait=60"},
    )
    assert answer.status_code == 200, answer.text


def settle(service: Service) -> None:
    """Put the parcels, what grew where, and the past."""
    every = [ref for field in FIELDS for ref in refs(field)]
    assert service.put_parcels(*(outline(ref) for ref in every)).json()["created"] == len(every)
    seasons = []
    for kind in KINDS:
        for year in range(PAST[0] - 1, RUNNING + 2):
            first, last = kind.interval(year)
            seasons += [
                {"parcel": ref, "crop": kind.crop, "from_on": str(first), "until_on": str(last)}
                for ref in refs(kind.field)
            ]
    assert service.call("POST", "/v1/seasons", json=seasons).status_code == 200
    for year in PAST:
        send(service, figures(year), assess=False)


@pytest.fixture
def settled(service: Service) -> Service:
    settle(service)
    return service


def beside(service: Service, ref: str) -> Iterator[tuple[date, str | None, float, float | None]]:
    """Yield day, crop, figure and expected value of the looks of the running year."""
    since, until = f"{RUNNING}-08-16", f"{RUNNING + 1}-08-16"
    columns = service.series(ref, **{"with": "baseline", "from": since, "to": until})
    for at, crop, mean, mid in zip(
        columns["observed_at"],
        columns["crop"],
        columns["mean"],
        columns["baseline"]["mid"],
        strict=True,
    ):
        yield date.fromisoformat(at[:10]), crop, mean, mid


def test_each_crop_is_compared_with_its_own_kind(settled: Service) -> None:
    send(settled, figures(RUNNING), assess=True)
    assert settled.get("/v1/alerts")["alerts"] == []
    compared: dict[str, list[date]] = {}
    for field in FIELDS:
        for day, crop, mean, mid in beside(settled, f"{field}3"):
            if crop is not None and mid is not None:
                assert mid == pytest.approx(mean, abs=0.06), (crop, day)
                compared.setdefault(crop, []).append(day)
    assert set(compared) == {kind.crop for kind in KINDS}
    # Seasons that begin before the crop year does are compared from their first weeks on.
    assert min(compared["wheat"]) < date(RUNNING, 10, 1)
    assert min(compared["rape"]) < date(RUNNING, 9, 10)
    # Two crops in one crop year, each by its own course.
    year = (date(RUNNING, 10, 1), date(RUNNING + 1, 9, 30))
    for crop in ("barley", "maize"):
        assert sum(year[0] <= day <= year[1] for day in compared[crop]) >= 2
    # In the south crop years begin on 1 April: the winter crop of one and the summer crop.
    assert settled.get("/v1/parcels/c0/baseline")["days"][0][5:] == "04-01"
    assert settled.get("/v1/parcels/w0/baseline")["days"][0][5:] == "10-01"
    for crop in ("canola", "cotton"):
        assert len(compared[crop]) >= 8


def test_what_departs_from_its_own_kind_is_found_where_another_kind_would_be_normal(
    settled: Service,
) -> None:
    """Bare ground is normal for one crop just when it is not for another."""
    falls = {
        "w1": date(RUNNING, 12, 1),
        "r2": date(RUNNING + 1, 3, 1),
        "c4": date(RUNNING, 8, 25),
        "t5": date(RUNNING + 1, 1, 10),
    }
    send(settled, figures(RUNNING, falls=falls), assess=True)
    found = {a["parcel"]: a for a in settled.get("/v1/alerts")["alerts"]}
    assert set(found) == set(falls)
    crops = {"w1": "wheat", "r2": "rape", "c4": "canola", "t5": "cotton"}
    for parcel, alert in found.items():
        assert alert["crop"] == crops[parcel]
        first = date.fromisoformat(alert["first_departure_at"][:10])
        assert falls[parcel] <= first <= falls[parcel] + 2 * EVERY
        assert alert["direction"] == "below"
