"""A history sent to the service as a client would, and what it answers, look by look."""

import time
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

import httpx

from service.cli.client import call
from service.errors import Unavailable

_CSV: Final = {"Content-Type": "text/csv"}
_JSON: Final = {"Content-Type": "application/json"}
_GEOJSON: Final = {"Content-Type": "application/geo+json"}
WAIT_SECONDS: Final = 60
_TRIES: Final = 20
_PAGE: Final = 1000


@dataclass(frozen=True, slots=True, kw_only=True)
class Sent:
    """What a client sends: bodies of outlines, crop seasons, past figures, and of each pass."""

    outlines: bytes
    seasons: bytes
    past: Iterable[bytes]
    passes: Iterable[bytes]


@dataclass(frozen=True, slots=True, kw_only=True)
class Answered:
    """What the service said.

    `alerts` are as they stood when they were first seen, right after the pass that opened
    them, also those that were retracted later. `notices` are None where the service knows
    none. Seconds are those of importing the past and of sending and judging the season.
    """

    alerts: Sequence[Mapping[str, Any]]
    notices: Sequence[Mapping[str, Any]] | None
    import_seconds: float
    judging_seconds: float


def ask(
    client: httpx.Client, sent: Sent, tell: Callable[[float], None], *, passes: int
) -> Answered:
    """Register, import the past, send the season pass by pass, and return what came of it.

    `tell` is told the share of the passes (0-1) that are judged.
    """
    started = time.monotonic()
    call(client, "PUT", "/v1/parcels", content=sent.outlines, headers=_GEOJSON)
    call(client, "POST", "/v1/seasons", content=sent.seasons, headers=_JSON)
    for body in sent.past:
        call(client, "POST", "/v1/observations", content=body, headers=_CSV)
    imported = time.monotonic()
    alerts: dict[str, Mapping[str, Any]] = {}
    for number, body in enumerate(sent.passes, start=1):
        judge_pass(client, body)
        for alert in listed(client, "alerts"):
            alerts.setdefault(alert["id"], alert)
        tell(number / passes)
    return Answered(
        alerts=list(alerts.values()),
        notices=_notices(client),
        import_seconds=imported - started,
        judging_seconds=time.monotonic() - imported,
    )


def judge_pass(client: httpx.Client, body: bytes) -> None:
    """Send figures of a pass as if just measured, and wait until they are judged.

    Raises
    ------
    Unavailable
        They are not judged after a long time.
    """
    waiting = {**_CSV, "Prefer": f"wait={WAIT_SECONDS}"}
    for _ in range(_TRIES):
        asked = time.monotonic()
        call(client, "POST", "/v1/observations?assess=true", content=body, headers=waiting)
        # An answer that took all of the wait says nothing of the judging: the same figures
        # again change nothing and wait further.
        if time.monotonic() - asked < WAIT_SECONDS:
            return
    raise Unavailable("not-judged", "The service did not get done with judging a pass.")


def listed(client: httpx.Client, what: str) -> list[dict[str, Any]]:
    """Return a whole list of the API, page by page."""
    found: list[dict[str, Any]] = []
    path: str | None = f"/v1/{what}?limit={_PAGE}"
    while path is not None:
        response = client.get(path)
        if response.is_error:
            # Asked once more, to raise what it says.
            call(client, "GET", path)
        found += response.json()[what]
        path = response.links.get("next", {}).get("url")
    return found


def p_values(client: httpx.Client, parcel: str, since: str) -> dict[str, float] | None:
    """Return the p-value of a parcel's looks by instant; None where the service states none."""
    params = {"index": "ndvi", "with": "departure", "from": since}
    series = call(client, "GET", f"/v1/parcels/{parcel}/series", params=params)
    columns = series["indices"]["ndvi"]
    if "p" not in columns:
        return None
    pairs = zip(columns["observed_at"], columns["p"], strict=True)
    return {at: p for at, p in pairs if p is not None}


def _notices(client: httpx.Client) -> list[dict[str, Any]] | None:
    """Return regional notices, None where the service has no such list."""
    if client.get("/v1/notices").status_code == httpx.codes.NOT_FOUND:
        return None
    return listed(client, "notices")
