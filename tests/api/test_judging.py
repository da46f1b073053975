"""From figures and scenes to alerts, and what people do with them."""

from collections.abc import Callable, Iterable, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from service.clock import now
from tests.judged_land import (
    AGAIN,
    FLOOD,
    Alert,
    Land,
    act,
    alerts_of,
    close,
    judge_all,
    of_parcel,
    problem,
    told,
)
from tests.quiet_seasons import (
    EVENTS,
    FLOODED,
    PARCELS,
    PASSES,
    RUNNING,
    Event,
    at_pass,
    history,
    images,
    lines,
    running,
    send,
    spectra,
    stamp,
)
from tests.serving import Service, write_band


def test_each_event_opens_an_alert_of_its_cause_and_nothing_else_does(judged: Service) -> None:
    found = [
        (alert["parcel"], alert["opened_at"], alert["closed_at"], alert["cause"]["kind"])
        for alert in alerts_of(judged)
    ]
    # The last opened first. Two looks that have returned close: what was ploughed in is like
    # its harvested neighbours by then.
    assert found == [
        (FLOODED, AGAIN, None, "flood"),
        ("maize-8", stamp(at_pass(9)), None, "moisture_stress"),
        ("maize-4", stamp(at_pass(9)), None, "removal"),
        (FLOODED, FLOOD, stamp(at_pass(10)), "flood"),
        ("barley-7", FLOOD, stamp(at_pass(9)), "burn"),
    ]
    alert = of_parcel(judged, FLOODED)[0]
    assert (alert["state"], alert["closed_by"], alert["verdict"]) == ("closed", "return", None)
    assert (alert["first_departure_at"], alert["looks"]) == (FLOOD, 3)
    assert alert["last_observed_at"] == stamp(at_pass(10))
    assert (alert["index"], alert["direction"], alert["severity"]) == ("ndwi", "above", "high")
    assert alert["shortfall"] == pytest.approx(alert["observed"] - alert["expected"], abs=2e-4)
    assert alert["shortfall"] > 0.3
    assert alert["score"] == alert["departure"] == max(alert["departures"].values())
    assert set(alert["departures"]) == {"ndvi", "ndmi", "nbr", "ndwi", "nir"}
    assert (alert["basis"], alert["crop"], alert["holding"]) == ("blended", "beet", "south")
    assert "Check on the ground" in alert["caution"]
    assert "NDWI" in alert["cause"]["because"]
    scenes = {scene["ref"]: scene for scene in judged.get("/v1/scenes")["scenes"]}
    assert [scenes[ref]["acquired_at"] for ref in alert["scenes"]] == [
        stamp(at_pass(number)) for number in (6, 7, 8)
    ]
    history = judged.get(f"/v1/alerts/{alert['id']}")["history"]
    assert [(change["kind"], change["who"]) for change in history] == [
        ("opened", None),
        ("closed", None),
    ]


def test_without_a_judged_season_there_is_no_baseline(land: Land) -> None:
    with land.at("remembering") as service:
        problem(service.call("GET", "/v1/parcels/beet-3/baseline"), 404, "no-baseline")
        columns = service.series(FLOODED, **{"with": "baseline,departure"})
        assert set(columns["departure"]) == set(columns["baseline"]["mid"]) == {None}


def test_baseline_and_departure_stand_beside_the_figures(judged: Service) -> None:
    year = {"from": f"{RUNNING}-01-01", "to": f"{RUNNING + 1}-01-01"}
    columns = judged.series(FLOODED, "ndwi", **{"with": "baseline,departure"}, **year)
    mean = np.array(columns["mean"])
    low, mid, high = (np.array(columns["baseline"][name]) for name in ("low", "mid", "high"))
    assert len(mean) == len(columns["departure"]) == PASSES
    assert np.all((low < mid) & (mid < high))
    assert np.array(columns["shortfall"]) == pytest.approx(mean - mid, abs=1e-5)
    flooded = [number in (6, 7, 8, 11, 12) for number in range(PASSES)]
    assert [z > 9 for z in columns["departure"]] == flooded
    assert ((mean < low) | (mean > high)).tolist() == flooded
    # Nothing in the past was as far out, and it is said what is expected rests on.
    p = np.array(columns["p"])
    looks = 3 * len(PARCELS) * PASSES
    assert p[flooded] == pytest.approx(1 / (looks + 1), rel=0.01)
    assert p[~np.array(flooded)].min() > 2 / (looks + 1)
    assert set(columns["baseline"]["basis"]) <= {"own", "blended"}
    assert set(columns["unjudged"]) == {None}
    csv = judged.call(
        "GET",
        f"/v1/parcels/{FLOODED}/series",
        params={"index": "ndwi", "with": "baseline,departure", "format": "csv", **year},
    ).text.splitlines()
    assert csv[0].endswith(
        "baseline_mid,baseline_low,baseline_high,baseline_basis,shortfall,departure,p,unjudged"
    )
    assert len(csv) == PASSES + 1
    # Looks of the past were not judged; only what is asked for is told.
    past = judged.series(FLOODED, **{"with": "departure", "to": f"{RUNNING}-01-01"})
    assert set(past["departure"]) == {None}
    assert "baseline" not in past
    answer = judged.call("GET", f"/v1/parcels/{FLOODED}/series", params={"with": "prophecy"})
    assert problem(answer, 422, "invalid-parameter")["errors"][0]["parameter"] == "with"


def test_a_baseline_tells_what_is_expected_by_day_and_on_what_it_rests(judged: Service) -> None:
    address = f"/v1/parcels/{FLOODED}/baseline"
    found = judged.get(address, params={"index": "ndwi"})
    assert (found["parcel"], found["crop"], found["index"]) == (FLOODED, "beet", "ndwi")
    assert found["seasons"] == found["crop_seasons"] == [2021, 2022, 2023]
    assert (found["season"], found["days"][0]) == (RUNNING, f"{RUNNING - 1}-10-01")
    day = found["days"].index(at_pass(5).date().isoformat())
    assert found["low"][day] < found["mid"][day] < found["high"][day]
    # What it was in the finished seasons about that day.
    past = judged.series(FLOODED, "ndwi", to=f"{RUNNING}-01-01")
    near = [
        value
        for at, value in zip(past["observed_at"], past["mean"], strict=True)
        if "05-30" <= at[5:10] <= "06-14"
    ]
    assert min(near) - 0.05 < found["mid"][day] < max(near) + 0.05
    # The crop's usual course, of ten parcels, and what this one adds to it.
    assert found["usual"][day] == pytest.approx(found["mid"][day], abs=0.03)
    assert found["usual"][day] != found["mid"][day]
    assert (found["cohort_parcels"], found["compared_as"]) == (10, "beet")
    assert set(found["crops"]) == {"beet"}
    # Nothing is known of the winter, and it is not made up.
    winter = found["days"].index(f"{RUNNING}-01-15")
    assert (found["mid"][winter], found["low"][winter], found["high"][winter]) == (None,) * 3
    assert (found["basis"][day], found["basis"][winter]) == ("blended", "cohort")
    assert set(judged.get(address, params={"crop": "rice"})["mid"]) == {None}
    for index in ("ndvy", "ndvi,nbr"):
        answer = judged.call("GET", address, params={"index": index})
        assert problem(answer, 422, "invalid-parameter")["errors"][0]["parameter"] == "index"
    limited = judged.key("read", holdings=["north"])
    problem(judged.call("GET", address, key=limited), 404, "parcel-not-found")


def test_baselines_of_an_earlier_time_are_kept_and_an_alert_names_its_own(judged: Service) -> None:
    address = "/v1/parcels/beet-5/baseline"
    before = judged.get(address)
    then = stamp(now())
    assert {alert["baseline"] for alert in alerts_of(judged)} == {before["version"]}
    past = stamp(at_pass(5, RUNNING - 1))
    send(judged, [f"beet-5,ndvi,{past},0.31111,archive-sensor,archive\n"], assess=False)
    judge_all(judged)
    after = judged.get(address)
    assert after["version"] != before["version"]
    assert judged.get(address, params={"as_of": then}) == before
    assert {alert["baseline"] for alert in alerts_of(judged)} == {after["version"]}
    answer = judged.call("GET", address, params={"as_of": f"{RUNNING}-01-01"})
    problem(answer, 404, "no-baseline")


def test_what_was_thought_before_judging_anew_is_not_kept(judged: Service) -> None:
    then = stamp(now())
    asked = {"as_of": then, "with": "departure", "from": f"{RUNNING}-01-01"}
    before = judged.series("beet-5", **asked)
    assert None not in before["departure"]
    at = stamp(at_pass(3))
    counts = send(judged, [f"beet-5,ndvi,{at},0.11111,archive-sensor,archive\n"])
    assert (counts["created"], counts["updated"]) == (0, 1)
    answer = judged.call("GET", "/v1/parcels/beet-5/series", params={"index": "ndvi", **asked})
    document = problem(answer, 422, "not-kept")
    assert document["errors"][0]["parameter"] == "as_of"
    # The figures of that time are kept.
    del asked["with"]
    assert judged.series("beet-5", **asked)["mean"] == before["mean"]
    after = judged.series("beet-5", **{"with": "departure", "from": f"{RUNNING}-01-01"})
    assert after["mean"][3] == 0.11111
    assert after["departure"][3] != before["departure"][3]


def test_a_look_has_the_least_share_of_its_figures_whichever_came_last(judged: Service) -> None:
    at = stamp(at_pass(12))
    rest = f"{at},0.2,archive-sensor,archive"
    head = "parcel,index,observed_at,mean,sensor,source,valid_share\n"
    for parcel, shares in [
        ("beet-6", {"ndvi": 0.3, "blue": 0.9}),
        ("beet-7", {"blue": 0.9, "ndvi": 0.3}),
        ("beet-8", {"blue": 0.9, "red": 0.8}),
    ]:
        for measure, share in shares.items():
            answer = judged.call(
                "POST",
                "/v1/observations",
                content=f"{head}{parcel},{measure},{rest},{share}\n".encode(),
                headers={"Content-Type": "text/csv", "Prefer": "wait=60"},
            )
            assert answer.json()["updated"] == 1, answer.text
    found = {
        parcel: judged.series(parcel, "nbr", **{"with": "departure", "from": at})["departure"]
        for parcel in ("beet-6", "beet-7", "beet-8")
    }
    # Where a figure shows too little of the parcel, the look is not compared at all.
    assert [departures[0] is None for departures in found.values()] == [True, True, False]


def test_alerts_are_found_by_what_they_are(judged: Service) -> None:
    everything = alerts_of(judged)
    assert len(everything) == 5
    some: list[tuple[dict[str, str], Callable[[Alert], bool]]] = [
        ({"state": "closed"}, lambda alert: alert["state"] == "closed"),
        ({"state": "open,closed"}, lambda _: True),
        ({"state": "retracted"}, lambda _: False),
        ({"severity": "high"}, lambda alert: alert["severity"] == "high"),
        ({"severity": "low"}, lambda alert: alert["severity"] == "low"),
        ({"holding": "north"}, lambda alert: alert["parcel"] == "barley-7"),
        ({"parcel": FLOODED}, lambda alert: alert["parcel"] == FLOODED),
        ({"parcel": "nobody"}, lambda _: False),
        ({"since": AGAIN}, lambda alert: alert["opened_at"] == AGAIN),
        ({"since": f"{RUNNING}-07-01"}, lambda alert: alert["opened_at"] > f"{RUNNING}-07-01"),
        ({"index": "ndwi"}, lambda alert: alert["index"] == "ndwi"),
        ({"cause": "burn"}, lambda alert: alert["cause"]["kind"] == "burn"),
        ({"cause": "flood", "state": "open"}, lambda alert: alert["opened_at"] == AGAIN),
    ]
    for params, fits in some:
        assert alerts_of(judged, **params) == [a for a in everything if fits(a)], params
    for params, parameter in [
        ({"state": "opened"}, "state"),
        ({"severity": "grave"}, "severity"),
        ({"since": "yesterday"}, "since"),
        ({"limit": "0"}, "limit"),
        ({"cursor": "nonsense"}, "cursor"),
        ({"sort": "score"}, "sort"),
    ]:
        answer = judged.call("GET", "/v1/alerts", params=params)
        assert problem(answer, 422, "invalid-parameter")["errors"][0]["parameter"] == parameter
    pages, answer = [], judged.call("GET", "/v1/alerts", params={"limit": "2", "cause": "flood"})
    pages = answer.json()["alerts"]
    assert "next" not in answer.links
    assert len(pages) == 2
    pages, address = [], "/v1/alerts?limit=1&holding=south"
    while address:
        answer = judged.call("GET", address)
        pages += answer.json()["alerts"]
        assert len(answer.json()["alerts"]) == 1
        address = answer.links.get("next", {}).get("url", "")
    assert pages == [alert for alert in everything if alert["holding"] == "south"]


def test_a_key_of_holdings_knows_only_their_alerts(judged: Service) -> None:
    limited = judged.key("read", "triage", holdings=["north"])
    (own,) = judged.get("/v1/alerts", key=limited)["alerts"]
    assert own["parcel"] == "barley-7"
    assert judged.get(f"/v1/alerts/{own['id']}", key=limited)["id"] == own["id"]
    for params in ({"holding": "south"}, {"parcel": FLOODED}, {"cause": "flood"}):
        assert judged.get("/v1/alerts", key=limited, params=params)["alerts"] == []
    other = of_parcel(judged, FLOODED)[1]["id"]
    tag = judged.call("GET", f"/v1/alerts/{other}").headers["ETag"]
    refusals = [
        judged.call("GET", f"/v1/alerts/{other}", key=limited),
        judged.call("GET", "/v1/alerts/alr_none", key=limited),
        act(judged, other, "acknowledge", match=tag, key=limited),
        act(judged, other, "close", match=tag, key=limited, json={"verdict": "expected"}),
        act(judged, other, "reopen", match=tag, key=limited),
    ]
    details = {problem(answer, 404, "alert-not-found")["detail"] for answer in refusals}
    assert len(details) == 1
    assert judged.call("GET", f"/v1/alerts/{other}").headers["ETag"] == tag
    # Reading is not triage, nor is anything else.
    for key in (judged.key("read"), judged.key("ingest", "manage", "admin")):
        answer = act(judged, other, "acknowledge", match=tag, key=key)
        problem(answer, 403, "scope-missing")
    problem(judged.call("GET", "/v1/alerts", key=judged.key("triage")), 403, "scope-missing")


def test_nobody_is_overwritten_and_no_act_is_half_said(judged: Service) -> None:
    alert = of_parcel(judged, "maize-4")[0]["id"]
    begun = judged.call("GET", f"/v1/alerts/{alert}").headers["ETag"]
    for verb, sent in [("acknowledge", {}), ("close", {"verdict": "expected"}), ("reopen", {})]:
        problem(act(judged, alert, verb, match=None, json=sent), 428, "precondition-required")
        for match in ('"other"', begun.strip('"'), f'"{alert}-99"'):
            answer = act(judged, alert, verb, match=match, json=sent)
            problem(answer, 412, "precondition-failed")
    answer = act(judged, alert, "acknowledge", content=b"note", headers={"Content-Type": "text/x"})
    problem(answer, 415, "unsupported-media-type")
    problem(act(judged, alert, "close"), 415, "unsupported-media-type")
    answer = act(judged, alert, "acknowledge", json={"notes": "?"})
    assert problem(answer, 422, "invalid-input")["errors"][0]["pointer"] == "/notes"
    for sent, pointer in [
        ({"verdict": "maybe"}, "/verdict"),
        ({}, "/verdict"),
        ({"verdict": "expected", "note": ""}, "/note"),
        ({"verdict": "expected", "note": "x" * 2001}, "/note"),
    ]:
        answer = act(judged, alert, "close", json=sent)
        assert problem(answer, 422, "invalid-input")["errors"][0]["pointer"] == pointer
    assert judged.call("GET", f"/v1/alerts/{alert}").headers["ETag"] == begun
    # Nothing need be said to acknowledge, by whatever client.
    answer = act(judged, alert, "acknowledge")
    assert (answer.status_code, answer.json()["state"]) == (200, "acknowledged")
    problem(act(judged, alert, "acknowledge", match=begun), 412, "precondition-failed")
    problem(act(judged, alert, "acknowledge"), 409, "alert-state")
    problem(act(judged, alert, "reopen"), 409, "alert-state")
    form = {"Content-Type": "application/x-www-form-urlencoded"}
    close(judged, alert, "confirmed", match="*")
    answer = act(judged, alert, "close", json={"verdict": "confirmed"})
    problem(answer, 409, "alert-state")
    problem(act(judged, alert, "acknowledge"), 409, "alert-state")
    assert act(judged, alert, "reopen", content=b"", headers=form).json()["state"] == "open"


def test_what_people_did_is_kept_with_who_and_when_and_outlasts_judging(judged: Service) -> None:
    alert = of_parcel(judged, "maize-4")[0]["id"]
    address = f"/v1/alerts/{alert}"
    assert act(judged, alert, "acknowledge").status_code == 200
    judge_all(judged)
    assert judged.get(address)["state"] == "acknowledged"
    # It survives later looks, and judging the season anew from its start.
    send(judged, removed(PASSES))
    send(judged, [f"beet-5,ndvi,{stamp(at_pass(2))},0.12345,archive-sensor,archive\n"])
    assert [a["id"] for a in alerts_of(judged, state="acknowledged")] == [alert]
    assert judged.get(address)["last_observed_at"] == stamp(at_pass(PASSES))

    said: dict[str, Any] = {
        "match": judged.call("GET", address).headers["ETag"],
        "json": {"verdict": "expected", "note": "Cut for silage."},
        "headers": {"Idempotency-Key": "closing"},
    }
    closed = act(judged, alert, "close", **said).json()
    assert (closed["state"], closed["verdict"]) == ("closed", "expected")
    assert (closed["closed_by"], closed["closed_at"]) == ("person", stamp(at_pass(PASSES)))
    judge_all(judged)
    # The same request again gets the same answer.
    assert act(judged, alert, "close", **said).json() == closed
    reopened = act(judged, alert, "reopen", json={"note": "Wrong field."}).json()
    assert (reopened["state"], reopened["verdict"], reopened["closed_at"]) == ("open", None, None)
    judge_all(judged)

    kept = judged.get(address)
    assert (kept["state"], kept["closed_by"], kept["verdict"]) == ("open", None, None)
    by_hand = [change for change in kept["history"] if change["who"] is not None]
    assert [(c["kind"], c["who"], c["verdict"], c["note"]) for c in by_hand] == [
        ("acknowledge", "test", None, None),
        ("close", "test", "expected", "Cut for silage."),
        ("reopen", "test", None, "Wrong field."),
    ]
    seen = [stamp(at_pass(number)) for number in (PASSES - 1, PASSES, PASSES)]
    assert [change["look_at"] for change in by_hand] == seen
    times = [change["recorded_at"] for change in kept["history"]]
    assert times == sorted(times)
    assert kept["history"][0]["kind"] == "opened"


def removed(number: int) -> list[str]:
    """Return the figures of a pass behind the last one, the removal lasting until then."""
    return list(lines(number, events=[Event(kind="removal", parcel="maize-4", passes=range(99))]))


def test_what_a_person_closed_stays_quiet_until_it_has_returned(land: Land) -> None:
    with land.at("remembering") as service:
        send(service, running(range(7)))
        (alert,) = of_parcel(service, FLOODED)
        assert (alert["state"], alert["opened_at"]) == ("open", FLOOD)
        closed = close(service, alert["id"], "confirmed")
        assert closed["closed_at"] == FLOOD
        # The next looks depart as before.
        send(service, running([7]))
        send(service, running([8]))
        departures = service.series(FLOODED, "ndwi", **{"with": "departure", "from": FLOOD})
        assert min(departures["departure"]) > 9
        assert len(departures["departure"]) == 3
        (only,) = of_parcel(service, FLOODED)
        assert only == closed
        # One look is no return yet, two are.
        send(service, running([9]))
        send(service, running([10]))
        assert of_parcel(service, FLOODED) == [only]
        send(service, running([11]))
        first, second = of_parcel(service, FLOODED)
        assert first == only
        assert (second["state"], second["opened_at"]) == ("open", AGAIN)
        # All the same when it is judged anew from the start of the season.
        send(service, [f"beet-5,ndvi,{stamp(at_pass(2))},0.12345,archive-sensor,archive\n"])
        assert told(of_parcel(service, FLOODED)) == told([first, second])
        assert of_parcel(service, FLOODED)[0] == only


def test_sent_backwards_a_story_ends_in_the_same_alerts(land: Land) -> None:
    """The running season first, its newest pass first, the past last; cut within parcels."""
    # Made first: one process serves one deployment at a time.
    expected = told(land.alerts)
    with land.at("settled") as service:
        newest_first = [line for number in reversed(range(PASSES)) for line in running([number])]
        for chunk in cut(newest_first, 1_457):
            send(service, chunk, wait=False)
        judge_all(service)
        # Without a past every crop is new.
        assert told(alerts_of(service)) != expected
        for chunk in cut(history()[::-1], 6_301):
            send(service, chunk, assess=False, wait=False)
        judge_all(service)
        assert told(alerts_of(service)) == expected


def test_sent_by_measure_and_parcel_a_story_ends_in_the_same_alerts(land: Land) -> None:
    """Bands before indices, past and present by turns, judged only when sent a second time."""
    # Made first: one process serves one deployment at a time.
    expected = told(land.alerts)
    with land.at("settled") as service:
        by_measure = sorted(running(), key=lambda line: line.split(",")[1])
        mixed = np.random.default_rng(5).permutation(len(PARCELS)).tolist()
        place = dict(zip(PARCELS, mixed, strict=True))
        past = sorted(history(), key=lambda line: place[line.partition(",")[0]])
        for new, old in zip(cut(by_measure, 2_100), cut(past, 6_300), strict=True):
            send(service, new, assess=False, wait=False)
            send(service, old, assess=False, wait=False)
            assert send(service, new, wait=False)["unchanged"] == len(new)
        judge_all(service)
        assert told(alerts_of(service)) == expected


def cut(rows: Sequence[str], size: int) -> list[Sequence[str]]:
    return [rows[at : at + size] for at in range(0, len(rows), size)]


def post(
    service: Service,
    folder: Path,
    number: int,
    *,
    events: Iterable[Event] = EVENTS,
    **metadata: Any,
) -> dict[str, Any]:
    """Post the scene of a pass and wait until it is judged."""
    made = folder / str(len(list(folder.iterdir())))
    made.mkdir()
    bands = images(spectra(number, events=events))
    files = {role: write_band(made / f"{role}.tif", image) for role, image in bands.items()}
    classes = np.full((24, 24), 4, dtype=np.uint8)
    files["quality"] = write_band(made / "quality.tif", classes, cell_m=20)
    scene = {
        "ref": f"s{number}",
        "sensor": "sentinel-2-l2a",
        "acquired_at": stamp(at_pass(number)),
        "processing_baseline": "05.10",
        "platform": "sentinel-2b",
        "tile": "t1",
        **metadata,
    }
    report: dict[str, Any] = service.post_scene(scene, files).json()
    assert report["state"] == "done", report
    return report


WRONG = Event(kind="flood", parcel="beet-5", passes=range(7, 8))
EXTRA = Event(kind="flood", parcel="barley-2", passes=range(6, 7))


def post_extra(service: Service, folder: Path) -> dict[str, Any]:
    """Post a scene four hours behind pass 6 that shows another parcel flooded as well."""
    later = stamp(at_pass(6).replace(hour=14))
    return post(service, folder, 6, events=[*EVENTS, EXTRA], ref="extra", acquired_at=later)


def test_late_replaced_and_withdrawn_scenes_end_as_if_sent_in_order(land: Land) -> None:
    folder = land.folder / "scenes"
    folder.mkdir()
    with land.at("remembering", "in-order") as service:
        reports = [post(service, folder, number) for number in range(5, 9)]
        assert [report["alerts_opened"] for report in reports] == [0, 2, 0, 0]
        expected = alerts_of(service)
        assert {(a["parcel"], a["cause"]["kind"], a["scenes"][0]) for a in expected} == {
            ("barley-7", "burn", "s6"),
            (FLOODED, "flood", "s6"),
        }
    with land.at("remembering", "otherwise") as service:
        assert post(service, folder, 8)["alerts_opened"] == 1
        (late,) = of_parcel(service, FLOODED)
        assert late["opened_at"] == stamp(at_pass(8))
        act(service, late["id"], "acknowledge")
        assert post(service, folder, 7, events=[WRONG])["alerts_opened"] == 1
        post_extra(service, folder)
        found = {a["parcel"] for a in alerts_of(service) if a["state"] != "retracted"}
        assert found == {"barley-2", "barley-7", "beet-5", FLOODED}
        post(service, folder, 7, replace=True)
        assert service.call("DELETE", "/v1/scenes/extra").json()["state"] == "withdrawn"
        assert post(service, folder, 6)["alerts_opened"] == 2
        post(service, folder, 5)
        # What a person said of the parcel holds, whichever look opens the alert now.
        assert told(alerts_of(service)) == told(
            {**alert, "state": "acknowledged"} if alert["parcel"] == FLOODED else alert
            for alert in expected
        )
        _check_retracted(service, folder)


def _check_retracted(service: Service, folder: Path) -> None:
    gone = {alert["parcel"]: alert["id"] for alert in alerts_of(service, state="retracted")}
    assert {"beet-5", "barley-2", FLOODED} <= set(gone)
    change = service.get(f"/v1/alerts/{gone['barley-2']}")["history"][-1]
    assert (change["kind"], change["who"]) == ("retracted", None)
    assert "withdrawn" in change["what"]["reason"]
    answer = act(service, gone["barley-2"], "close", json={"verdict": "bad_data"})
    problem(answer, 409, "alert-state")
    # The withdrawn scene comes again, and so does its alert, under its old name.
    assert post_extra(service, folder)["alerts_opened"] == 1
    (back,) = of_parcel(service, "barley-2")
    assert (back["id"], back["scenes"]) == (gone["barley-2"], ["extra"])
    assert back["state"] in ("open", "closed")


def test_verdicts_say_whether_looks_shape_the_next_season(judged: Service) -> None:
    cut_down = of_parcel(judged, "maize-4")[0]["id"]

    def baseline() -> tuple[str, float]:
        told = judged.get("/v1/parcels/maize-4/baseline", params={"index": "ndvi"})
        assert told["season"] == RUNNING + 1
        assert told["seasons"] == [2021, 2022, 2023, RUNNING]
        day = at_pass(11).replace(year=RUNNING + 1).date().isoformat()
        return told["version"], told["mid"][told["days"].index(day)]

    send(judged, list(lines(1, RUNNING + 1)))
    undecided = baseline()
    # It is still open, carried over from the season before.
    assert judged.get(f"/v1/alerts/{cut_down}")["state"] == "open"
    close(judged, cut_down, "confirmed")
    # What was real takes no part in the ranking of scores, so that the version is another.
    assert baseline()[1] == undecided[1]
    act(judged, cut_down, "reopen")
    close(judged, cut_down, "expected")
    version, mid = baseline()
    # It was cut down, and may be so again.
    assert version != undecided[0]
    assert mid < undecided[1] - 0.005
    for verdict, stays in [("false_alarm", True), ("bad_data", False)]:
        act(judged, cut_down, "reopen")
        close(judged, cut_down, verdict)
        assert baseline()[1] == (mid if stays else undecided[1])


def test_the_overview_shows_departures_and_the_alerts_open_on_a_day(judged: Service) -> None:
    def shown(**params: str) -> dict[str, dict[str, Any]]:
        rows = judged.get("/v1/overview", params={"index": "ndwi", **params})["parcels"]
        return {row["parcel"]: row for row in rows}

    first, again = of_parcel(judged, FLOODED)
    then = shown(at=FLOOD)[FLOODED]
    assert then["alerts"] == [first["id"]]
    assert then["departure"] == pytest.approx(first["departures"]["ndwi"], abs=5e-2)
    assert shown(at=stamp(at_pass(5)))[FLOODED]["alerts"] == []
    now = shown()
    assert now[FLOODED]["alerts"] == [again["id"]]
    assert now["maize-8"]["alerts"]
    assert now["maize-1"]["alerts"] == []
