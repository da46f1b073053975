"""A small invented history in which one parcel departs, for tests of what is told of it.

Eight parcels of two holdings grow one crop. In two finished seasons and at the start of a third
they are alike but for a little noise; then some of them lose some of their green.
"""

from collections.abc import Iterable, Mapping
from datetime import UTC, datetime, timedelta
from typing import Any

import numpy as np

from tests.serving import Service, square

HOLDINGS = {f"P{number}": "north" if number <= 4 else "south" for number in range(1, 9)}
PAST = (2022, 2023)
RUNNING = 2024
PASSES = 6
FIRST = datetime(RUNNING, 5, 20, 10, 30, tzinfo=UTC)
EVERY = timedelta(days=5)
BREAK = 4
"""The pass from which on a departing parcel departs."""
USUAL = 0.80
FALL = 0.45
"""How far NDVI falls where the green cover goes."""


def figures(
    season: int, passes: Iterable[int], *, falls: Mapping[str, float] | None = None
) -> list[dict[str, Any]]:
    """Return NDVI of every parcel in some passes of a season, the same each time it is asked.

    `falls`: how far it falls from the break on, by parcel.
    """
    found = []
    for number in passes:
        at = FIRST.replace(year=season) + number * EVERY
        noise = np.random.default_rng([season, number]).normal(0, 0.01, len(HOLDINGS))
        for ref, error in zip(HOLDINGS, noise, strict=True):
            fall = (falls or {}).get(ref, 0.0) if number >= BREAK else 0.0
            found.append(
                {
                    "parcel": ref,
                    "index": "ndvi",
                    "observed_at": at.isoformat(),
                    "mean": round(USUAL - fall + float(error), 4),
                    "valid_share": 1.0,
                }
            )
    return found


def send(service: Service, rows: list[dict[str, Any]], *, assess: bool, wait: int = 0) -> None:
    """Import figures; with `wait`, hold on until they are judged."""
    answer = service.call(
        "POST",
        "/v1/observations",
        params={"assess": "true"} if assess else {},
        json=rows,
        headers={"Prefer": f"wait={wait}"} if wait else {},
    )
    assert answer.status_code == 200, answer.text
    assert answer.json()["created"] == len(rows)


def settle(service: Service) -> None:
    """Put the parcels, their crop and all that went before the break."""
    parcels = [
        square(ref, col=20 * at, row=0, holding=holding)
        for at, (ref, holding) in enumerate(HOLDINGS.items())
    ]
    assert service.put_parcels(*parcels).json()["created"] == len(parcels)
    seasons = [
        {"parcel": ref, "crop": "barley", "from_on": f"{year}-03-01", "until_on": f"{year}-09-20"}
        for year in (*PAST, RUNNING)
        for ref in HOLDINGS
    ]
    assert service.call("POST", "/v1/seasons", json=seasons).status_code == 200
    for year in PAST:
        send(service, figures(year, range(PASSES)), assess=False)
    send(service, figures(RUNNING, range(BREAK)), assess=True, wait=30)


def depart(service: Service, falls: Mapping[str, float], *, wait: int = 30) -> None:
    """Send the passes in which these parcels depart, and have them judged."""
    rows = figures(RUNNING, range(BREAK, PASSES), falls=falls)
    send(service, rows, assess=True, wait=wait)
