"""Rules: what makes alerts open, and how they do on the past."""

from typing import Any

import httpx
import pytest

from service.assess import BASELINE_MEASURES
from tests.judged_land import Land, alerts_of, judge_all, problem, told
from tests.quiet_seasons import FLOODED, RUNNING
from tests.serving import Service

WET = {"measures": [{"index": "ndwi", "direction": "above"}], "threshold": 5}


def put(service: Service, rule: str, sent: Any, *, match: str | None = "", **request: Any) -> Any:
    """Put a rule; `match` is the If-Match sent, by default that of the rule as it is."""
    address = f"/v1/rules/{rule}"
    if match == "":
        match = service.call("GET", address).headers.get("ETag")
        match = match if service.call("GET", address).status_code == 200 else None
    headers = {"If-Match": match} if match else {}
    return service.call("PUT", address, json=sent, headers=headers, **request)


def changed(service: Service, **members: Any) -> httpx.Response:
    """Put the default rule with some members changed, and wait until it is judged by."""
    rule = service.get("/v1/rules/default")
    names = ("measures", "threshold", "looks_needed", "looks_window", "min_valid", "enabled")
    answer: httpx.Response = put(service, "default", {n: rule[n] for n in names} | members)
    judge_all(service)
    return answer


def test_the_default_rule_tells_its_tuned_threshold_and_how_it_does_on_the_past(
    judged: Service,
) -> None:
    (rule,) = judged.get("/v1/rules")["rules"]
    assert judged.get("/v1/rules/default") == rule
    assert (rule["id"], rule["built_in"], rule["threshold"]) == ("default", True, "auto")
    assert (rule["looks_needed"], rule["looks_window"], rule["enabled"]) == (2, 3, True)
    assert [(m["index"], m["direction"]) for m in rule["measures"]] == [
        ("ndvi", "below"),
        ("ndmi", "below"),
        ("nbr", "below"),
        ("ndwi", "above"),
        ("nir", "below"),
    ]
    (tuning,) = rule["tuning"]
    assert (tuning["season_start"], tuning["from_on"]) == ("10-01", f"{RUNNING - 1}-10-01")
    assert tuning["seasons"] == 3
    # Thirty parcels, three seasons of 14 looks twelve days apart.
    assert tuning["parcel_weeks"] == pytest.approx(30 * 3 * (13 * 12 + 1) / 7, rel=0.05)
    # Noise and nothing else: the smallest threshold will do.
    assert 2.4 <= tuning["threshold"] <= 7
    assert 0 <= tuning["replayed_rate"] <= 0.8


def test_an_operators_threshold_is_used_and_told_with_its_replayed_rate(judged: Service) -> None:
    before = told(alerts_of(judged))
    answer = changed(judged, threshold=60.0)
    assert answer.status_code == 200
    rule = judged.get("/v1/rules/default")
    assert (rule["threshold"], rule["revision"], rule["changed_by"]) == (60.0, 1, "test")
    (tuning,) = rule["tuning"]
    assert (tuning["threshold"], tuning["replayed_rate"]) == (60.0, 0.0)
    assert {alert["state"] for alert in alerts_of(judged)} == {"retracted"}
    # Back again, all is as it was.
    assert changed(judged, threshold="auto").status_code == 200
    assert told(alerts_of(judged)) == before


def test_a_rule_of_ones_own_opens_alerts_of_its_own(judged: Service) -> None:
    before = told(alerts_of(judged))
    answer = put(judged, "wet", {**WET, "title": "Standing water", "months": [6]})
    assert (answer.status_code, answer.json()["revision"]) == (201, 1)
    assert answer.json()["single_look_threshold"] is None
    judge_all(judged)
    wet = [alert for alert in alerts_of(judged) if alert["rule"] == "wet"]
    # What burned is without leaves as well, and nothing opens outside June.
    assert {(alert["parcel"], alert["opened_at"][5:7]) for alert in wet} == {
        (FLOODED, "06"),
        ("barley-7", "06"),
    }
    assert {alert["index"] for alert in wet} == {"ndwi"}
    assert set(wet[0]["departures"]) == {"ndwi"}
    assert told(a for a in alerts_of(judged) if a["rule"] == "default") == before
    # Limits: another crop, another holding, switched off.
    for limit in ({"crops": ["rice"]}, {"holdings": ["east"]}, {"months": [1]}):
        assert put(judged, "wet", {**WET, **limit}).status_code == 200
        judge_all(judged)
        assert _states(judged, "wet") == {"retracted"}
    put(judged, "wet", {**WET, "crops": ["beet"], "holdings": ["south"]})
    judge_all(judged)
    found = [a for a in alerts_of(judged) if a["rule"] == "wet" and a["state"] != "retracted"]
    assert {alert["parcel"] for alert in found} == {FLOODED}
    # What stands stays when a rule is switched off.
    standing = told(alerts_of(judged))
    put(judged, "wet", {**WET, "enabled": False})
    assert changed(judged, enabled=False).status_code == 200
    assert told(alerts_of(judged)) == standing
    series = judged.series(FLOODED, **{"with": "departure", "from": f"{RUNNING}-01-01"})
    assert None not in series["departure"]


def _states(service: Service, rule: str) -> set[str]:
    return {alert["state"] for alert in alerts_of(service) if alert["rule"] == rule}


def test_nobody_is_overwritten(land: Land) -> None:
    with land.at("settled") as service:
        assert put(service, "wet", WET).status_code == 201
        begun = service.call("GET", "/v1/rules/wet").headers["ETag"]
        problem(put(service, "wet", WET, match=None), 428, "precondition-required")
        problem(put(service, "wet", WET, match='"other"'), 412, "precondition-failed")
        problem(put(service, "dry", WET, match='"dry-1"'), 412, "precondition-failed")
        # The same again changes nothing.
        assert put(service, "wet", WET, match=begun).json()["revision"] == 1
        assert put(service, "wet", {**WET, "threshold": 6}, match=begun).json()["revision"] == 2
        problem(put(service, "wet", WET, match=begun), 412, "precondition-failed")
        problem(put(service, "default", WET, match=None), 428, "precondition-required")
        assert [rule["id"] for rule in service.get("/v1/rules")["rules"]] == ["default", "wet"]
        problem(service.call("GET", "/v1/rules/nothing"), 404, "rule-not-found")


@pytest.mark.parametrize(
    ("members", "pointer"),
    [
        ({"measures": []}, "/measures"),
        ({"measures": [{"index": "ndvy", "direction": "below"}]}, "/measures/0/index"),
        ({"measures": [{"index": "ndre", "direction": "below"}]}, "/measures/0/index"),
        ({"measures": [{"index": "ndvi", "direction": "down"}]}, "/measures/0/direction"),
        ({"measures": WET["measures"] * 2}, "/measures/1/index"),
        ({"threshold": 0.5}, "/threshold"),
        ({"threshold": "low"}, "/threshold"),
        ({"threshold": True}, "/threshold"),
        ({"single_look_threshold": 4}, "/single_look_threshold"),
        ({"looks_needed": 4}, "/looks_needed"),
        ({"looks_needed": 0}, "/looks_needed"),
        ({"looks_window": 11}, "/looks_window"),
        ({"min_valid": 0}, "/min_valid"),
        ({"crops": []}, "/crops"),
        ({"holdings": [""]}, "/holdings/0"),
        ({"months": [13]}, "/months/0"),
        ({"severity": "high"}, "/severity"),
    ],
)
def test_a_rule_that_makes_no_sense_is_refused_with_where(
    land: Land, members: dict[str, Any], pointer: str
) -> None:
    with land.at("settled") as service:
        document = problem(put(service, "wet", {**WET, **members}), 422, "invalid-input")
        assert any(error["pointer"].startswith(pointer) for error in document["errors"]), document
        assert len(service.get("/v1/rules")["rules"]) == 1


def test_rules_concern_all_holdings(land: Land) -> None:
    with land.at("settled") as service:
        limited = service.key("read", "manage", holdings=["north"])
        problem(put(service, "wet", WET, key=limited), 403, "key-limited")
        reader = service.key("read", "triage")
        problem(put(service, "wet", WET, key=reader), 403, "scope-missing")
        assert service.get("/v1/rules", key=limited)["rules"][0]["id"] == "default"


def test_every_measure_with_a_baseline_can_be_watched(land: Land) -> None:
    with land.at("settled") as service:
        measures = [{"index": name, "direction": "above"} for name in BASELINE_MEASURES]
        assert put(service, "all", {"measures": measures}).status_code == 201
