"""A rehearsal says what a rule would have raised, by the code that judges."""

from typing import Any

import httpx
import pytest

from tests.judged_land import Land, act, alerts_of, close, judge_all, of_parcel, problem, told
from tests.quiet_seasons import FLOODED, PAST, RUNNING, at_pass, running, send
from tests.serving import Service

SEASON = {"from": f"{RUNNING}-01-01", "to": f"{RUNNING}-12-31"}
DEFAULT = [
    {"index": "ndvi", "direction": "below"},
    {"index": "ndmi", "direction": "below"},
    {"index": "nbr", "direction": "below"},
    {"index": "ndwi", "direction": "above"},
]


def ask(service: Service, rule: Any, **request: Any) -> httpx.Response:
    interval = request.pop("interval", SEASON)
    sent = {"rule": rule, **interval}
    answer: httpx.Response = service.call("POST", "/v1/rules/rehearse", json=sent, **request)
    return answer


def rehearsed(service: Service, rule: Any, **request: Any) -> dict[str, Any]:
    answer = ask(service, rule, **request)
    assert answer.status_code == 200, answer.text
    found: dict[str, Any] = answer.json()
    return found


def same(alarms: list[dict[str, Any]], *, with_id: bool = True) -> list[tuple[Any, ...]]:
    """Return what live judging and a rehearsal must agree about."""
    names = ["parcel", "opened_at", "closed_at", "crop", "index", "score", "severity"]
    names += ["id"] if with_id else []
    found = []
    for alarm in alarms:
        cause = alarm["cause"] if isinstance(alarm["cause"], str) else alarm["cause"]["kind"]
        found.append((*(alarm[name] for name in names), cause))
    return sorted(found, key=str)


def test_live_judging_and_a_rehearsal_of_one_rule_agree_alarm_by_alarm(judged: Service) -> None:
    live = alerts_of(judged)
    by_id = rehearsed(judged, "default")
    assert by_id["alarms_total"] == len(live) == 5
    assert same(by_id["alarms"]) == same(live)
    # The same rule as it would be put, and of another day's making: alarms have other names.
    put = rehearsed(judged, {"measures": DEFAULT})
    assert same(put["alarms"], with_id=False) == same(live, with_id=False)
    # A rule of one's own, put afterwards, opens what its rehearsal said.
    rule = {"measures": [{"index": "ndwi", "direction": "above"}], "looks_needed": 1}
    rule |= {"threshold": 4, "crops": ["beet", "maize"], "min_valid": 0.5}
    said = rehearsed(judged, rule)
    assert said["alarms"]
    assert judged.call("PUT", "/v1/rules/wet", json=rule).status_code == 201
    judge_all(judged)
    wet = [alert for alert in alerts_of(judged) if alert["rule"] == "wet"]
    assert same(said["alarms"], with_id=False) == same(wet, with_id=False)
    assert same(rehearsed(judged, "wet")["alarms"]) == same(wet)
    assert told(alert for alert in alerts_of(judged) if alert["rule"] == "default") == told(live)


def test_what_people_did_counts_as_in_judging_and_their_verdicts_are_told(judged: Service) -> None:
    first, again = of_parcel(judged, FLOODED)
    act(judged, again["id"], "acknowledge")
    close(judged, of_parcel(judged, "maize-4")[0]["id"], "expected")
    close(judged, again["id"], "confirmed")
    judged.call(
        "POST",
        "/v1/parcels/maize-8/diary",
        json={"kind": "other", "on": str(at_pass(9).date())},
    )
    judge_all(judged)
    live = [alert for alert in alerts_of(judged) if alert["state"] != "retracted"]
    found = rehearsed(judged, "default")
    assert same(found["alarms"]) == same(live)
    assert found["held_back"] == 1
    assert found["verdicts"] == {
        "confirmed": 1,
        "expected": 1,
        "false_alarm": 0,
        "bad_data": 0,
    }
    of_flooded = [a["verdict"] for a in found["alarms"] if a["parcel"] == FLOODED]
    assert sorted(of_flooded, key=str) == [None, "confirmed"]
    # Another rule's alarm at the same time has the verdict as well.
    other = rehearsed(judged, {"measures": DEFAULT, "threshold": 3})
    assert other["verdicts"]["expected"] == 1
    cells = {(c["crop"], c["month"]): c["alarms"] for c in found["by_crop_and_month"]}
    assert sum(cells.values()) == found["alarms_total"] == len(live)
    assert cells["beet", first["opened_at"][:7]] == 1


def test_seasons_that_were_never_judged_are_rehearsed_over_all_their_looks(judged: Service) -> None:
    interval = {"from": f"{PAST[1]}-01-01", "to": f"{PAST[2]}-09-30"}
    found = rehearsed(judged, {"measures": DEFAULT, "threshold": 3}, interval=interval)
    assert [season["of_judged_looks"] for season in found["seasons"]] == [False, False]
    assert found["parcel_weeks"] == pytest.approx(2 * 30 * (13 * 12 + 1) / 7, rel=0.05)
    # Nothing happened in them.
    rate = found["alarms_per_1000_parcel_weeks"]
    assert rate == pytest.approx(1_000 * found["alarms_total"] / found["parcel_weeks"], rel=1e-3)
    assert rate < 3
    nothing = rehearsed(judged, "default", interval={"from": "1999-01-01", "to": "2000-01-01"})
    assert (nothing["seasons"], nothing["alarms_per_1000_parcel_weeks"]) == ([], None)


def test_a_rehearsal_raises_nothing_and_an_interval_is_about_opening(judged: Service) -> None:
    before = alerts_of(judged)
    again = of_parcel(judged, FLOODED)[1]["opened_at"]
    late = rehearsed(judged, "default", interval={**SEASON, "from": again})
    early = rehearsed(judged, "default", interval={**SEASON, "to": again})
    assert {a["opened_at"] for a in late["alarms"]} == {again}
    assert late["alarms_total"] + early["alarms_total"] == len(before)
    assert rehearsed(judged, {"measures": DEFAULT, "threshold": 80})["alarms"] == []
    assert alerts_of(judged) == before
    assert [rule["id"] for rule in judged.get("/v1/rules")["rules"]] == ["default"]


def test_a_long_rehearsal_is_a_job(judged: Service) -> None:
    at_once = rehearsed(judged, "default")
    answer = ask(judged, "default", headers={"Prefer": "respond-async"})
    assert answer.status_code == 202
    job = judged.get(answer.headers["Location"], headers={"Prefer": "wait=60"})
    assert (job["kind"], job["state"], job["progress"]) == ("rehearsal", "done", 1.0)
    assert job["result"] == at_once
    held = ask(judged, "default", headers={"Prefer": "respond-async, wait=60"})
    assert (held.status_code, held.json()["result"]) == (200, at_once)


def test_what_makes_no_sense_is_refused_with_where(land: Land) -> None:
    with land.at("settled") as service:
        rule = {"measures": DEFAULT}
        cases: list[tuple[Any, dict[str, Any], str]] = [
            ("nothing", {}, "/rule"),
            (3, {}, "/rule"),
            ({"measures": []}, {}, "/rule/measures"),
            ({"measures": [{"index": "ndre", "direction": "below"}]}, {}, "/rule/measures/0/index"),
            ({**rule, "looks_needed": 9}, {}, "/rule/looks_needed"),
            (rule, {"to": SEASON["from"]}, "/to"),
            (rule, {"from": "spring"}, "/from"),
            (rule, {"crops": ["beet"]}, "/crops"),
        ]
        for sent, more, pointer in cases:
            answer = ask(service, sent, interval={**SEASON, **more})
            document = problem(answer, 422, "invalid-input")
            assert document["errors"][0]["pointer"] == pointer
        limited = service.key("read", "manage", holdings=["north"])
        problem(ask(service, "default", key=limited), 403, "key-limited")
        problem(ask(service, "default", key=service.key("read")), 403, "scope-missing")
        # Without a look there is nothing to say.
        assert rehearsed(service, rule)["seasons"] == []


def test_a_rehearsal_before_any_judging_tells_what_live_judging_will_open(land: Land) -> None:

    with land.at("remembering") as service:
        send(service, running(), assess=False)
        said = rehearsed(service, "default")
        assert [season["of_judged_looks"] for season in said["seasons"]] == [False]
        send(service, running())
        assert same(said["alarms"]) == same(alerts_of(service))
