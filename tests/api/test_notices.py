"""Regional notices: one event where all crops share a shift, and no flood of alerts."""

from collections.abc import Iterable
from typing import Any

import pytest

from tests.hooks import hooked, open_to_loopback, register
from tests.judged_land import Land, alerts_of, judge_all, problem
from tests.quiet_seasons import PARCELS, RUNNING, Event, lines, send
from tests.serving import Service, serving

DRY = [Event(kind="moisture_stress", parcel=ref, passes=range(4, 99)) for ref in PARCELS]
PASSES = range(3, 9)


def dry(numbers: Iterable[int]) -> list[str]:
    """Return the figures of passes in which all parcels are short of water."""
    return [line for number in numbers for line in lines(number, events=DRY)]


def notices_of(service: Service, **params: Any) -> list[dict[str, Any]]:
    found: list[dict[str, Any]] = service.get("/v1/notices", params=params)["notices"]
    return found


def standing(service: Service) -> list[tuple[Any, ...]]:
    """Return what must not depend on how figures arrived."""
    names = ("id", "state", "opened_at", "closed_at", "shift", "crops", "measure", "kind")
    return [
        tuple(str(notice[name]) for name in names)
        for notice in notices_of(service)
        if notice["state"] != "retracted"
    ]


def test_a_drought_is_one_notice_and_not_as_many_alerts(land: Land) -> None:
    filled = land.stages(land.kind, "remembering").copy(land.folder / "data")
    with hooked() as hook, serving(open_to_loopback(filled)) as service:
        register(service, hook.url, "region.opened", "region.closed")
        send(service, dry(PASSES))
        (notice,) = notices_of(service)
        assert (notice["kind"], notice["measure"]) == ("dry_spell", "ndmi")
        assert (notice["state"], notice["closed_at"]) == ("open", None)
        assert notice["shift"] < -0.045
        assert len(notice["crops"]) >= 3
        assert notice["season_start"] == "10-01"
        assert "Check on the ground" in notice["caution"]
        assert service.get(f"/v1/notices/{notice['id']}") == notice
        assert len(alerts_of(service)) < len(PARCELS) / 10
        event = hook.event()
        assert (event["type"], event["subject"]) == (
            "app.furrowlight.region.opened",
            notice["id"],
        )
        assert event["data"]["crops"] == notice["crops"]
        # It rained after all: the figures were wrong.
        send(service, [line for number in PASSES for line in lines(number, events=[])])
        (gone,) = notices_of(service)
        assert (gone["id"], gone["state"]) == (notice["id"], "retracted")
        over = hook.event()
        assert over["type"].endswith("region.closed")
        assert over["data"]["state"] == "retracted"
        # And then again not: under its old name.
        send(service, dry(PASSES))
        assert notices_of(service) == [{**notice, "recorded_at": gone["recorded_at"]}]
        assert hook.event()["type"].endswith("region.opened")
        _check_seen_by_key(service, notice)


def _check_seen_by_key(service: Service, notice: dict[str, Any]) -> None:
    address = f"/v1/notices/{notice['id']}"
    limited = service.key("read", holdings=["north"])
    (seen,) = service.get("/v1/notices", key=limited)["notices"]
    assert seen["crops"] == ["barley"]
    assert service.get(address, key=limited) == seen
    nobody = service.key("read", holdings=["elsewhere"])
    assert service.get("/v1/notices", key=nobody)["notices"] == []
    problem(service.call("GET", address, key=nobody), 404, "notice-not-found")
    problem(service.call("GET", "/v1/notices/ntc_none"), 404, "notice-not-found")
    problem(service.call("GET", address, key=service.key("ingest")), 403, "scope-missing")


@pytest.mark.parametrize("order", ["backwards", "twice"])
def test_another_order_of_arrival_ends_in_the_same_notices(land: Land, order: str) -> None:
    with land.at("remembering", "in-order") as service:
        send(service, dry(PASSES))
        expected = standing(service)
        assert expected
    with land.at("remembering", "otherwise") as service:
        if order == "twice":
            send(service, [line for number in PASSES for line in lines(number, events=[])])
        for number in reversed(PASSES):
            send(service, dry([number]), wait=False)
        judge_all(service)
        assert standing(service) == expected


def test_an_ordinary_season_has_no_notice_and_filters_are_checked(judged: Service) -> None:
    assert notices_of(judged) == []
    for params, parameter in [
        ({"state": "opened"}, "state"),
        ({"since": "yesterday"}, "since"),
        ({"cursor": "nonsense"}, "cursor"),
        ({"kind": "dry_spell"}, "kind"),
    ]:
        answer = judged.call("GET", "/v1/notices", params=params)
        assert problem(answer, 422, "invalid-parameter")["errors"][0]["parameter"] == parameter


def test_notices_are_found_by_state_and_time(land: Land) -> None:
    with land.at("remembering") as service:
        send(service, dry(PASSES))
        (notice,) = notices_of(service, state="open", since=f"{RUNNING}-01-01")
        assert notices_of(service, state="closed,retracted") == []
        assert notices_of(service, since=f"{RUNNING + 1}-01-01") == []
        assert notices_of(service, since=notice["opened_at"]) == [notice]


def test_a_webhook_of_some_holdings_is_not_told_of_regions(land: Land) -> None:
    with land.at("settled") as service:
        sent = {
            "url": "https://fields.example/",
            "events": ["region.opened"],
            "holdings": ["north"],
        }
        answer = service.call("POST", "/v1/webhooks", json=sent)
        assert problem(answer, 422, "invalid-input")["errors"][0]["pointer"] == "/events"
