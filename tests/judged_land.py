"""The land of `quiet_seasons` on each kind of database, filled once and then copied."""

import shutil
from collections.abc import Callable, Iterable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import httpx
from sqlalchemy import make_url

from service.settings import Settings
from tests.conftest import _new_database
from tests.quiet_seasons import at_pass, send, stamp
from tests.serving import Service, serving

Alert = dict[str, Any]
FLOOD, AGAIN = stamp(at_pass(6)), stamp(at_pass(11))


@dataclass(frozen=True, kw_only=True)
class Filled:
    """A deployment at rest, to be copied: of one kind of database, filled up to some stage."""

    settings: Settings
    alerts: list[Alert]

    def copy(self, data: Path) -> Settings:
        """Return the settings of a copy."""
        shutil.copytree(self.settings.data, data)
        url = self.settings.database_url
        if url:
            url = _new_database(url, template=make_url(url).database)
        return self.settings.model_copy(update={"data": data, "database_url": url})


def fill(settings: Settings, *works: Callable[[Service], object]) -> Filled:
    with serving(settings) as service:
        for work in works:
            work(service)
        return Filled(settings=settings, alerts=alerts_of(service))


@dataclass(frozen=True, kw_only=True)
class Land:
    """Services on copies of the land, on one kind of database."""

    kind: str
    folder: Path
    stages: Callable[[str, str], Filled]

    @contextmanager
    def at(self, stage: str, copy: str = "data") -> Iterator[Service]:
        """Serve a copy of the land at a stage."""
        with serving(self.stages(self.kind, stage).copy(self.folder / copy)) as service:
            yield service

    @property
    def alerts(self) -> list[Alert]:
        """The alerts that the whole story ends in, sent in order."""
        return self.stages(self.kind, "judged").alerts


def alerts_of(service: Service, **params: Any) -> list[Alert]:
    alerts: list[Alert] = service.get("/v1/alerts", params=params)["alerts"]
    return alerts


def of_parcel(service: Service, parcel: str, **params: Any) -> list[Alert]:
    """Return the alerts of a parcel, the first opened first."""
    return alerts_of(service, parcel=parcel, **params)[::-1]


def told(alerts: Iterable[Alert]) -> list[tuple[Any, ...]]:
    """Return what must not depend on how figures arrived."""
    names = ("id", "parcel", "state", "opened_at", "closed_at", "score", "severity", "looks")
    names += ("chance", "p", "baseline", "crop")
    return sorted(
        (*(alert[name] for name in names), alert["cause"]["kind"], alert["cause"]["because"])
        for alert in alerts
        if alert["state"] != "retracted"
    )


def act(
    service: Service, alert: str, verb: str, *, match: str | None = "", **request: Any
) -> httpx.Response:
    """Act on an alert; `match` is the If-Match sent, by default that of the alert as it is."""
    address = f"/v1/alerts/{alert}"
    if match == "":
        match = service.call("GET", address).headers["ETag"]
    headers = {"If-Match": match} if match else {}
    headers |= request.pop("headers", {})
    return service.call("POST", f"{address}/{verb}", headers=headers, **request)


def close(service: Service, alert: str, verdict: str, **request: Any) -> Alert:
    """Close an alert and wait until judging has taken it up."""
    answer = act(service, alert, "close", json={"verdict": verdict}, **request)
    assert answer.status_code == 200, answer.text
    judge_all(service)
    closed: Alert = answer.json()
    return closed


def judge_all(service: Service) -> None:
    """Wait until nothing is left to judge."""
    assert send(service, [])["created"] == 0


def problem(answer: httpx.Response, status: int, code: str) -> dict[str, Any]:
    """Return a problem document after checking its status and type."""
    assert (answer.status_code, answer.json()["type"]) == (status, f"/problems/{code}"), answer.text
    assert answer.headers["Content-Type"] == "application/problem+json"
    document: dict[str, Any] = answer.json()
    return document
