"""Figures measured elsewhere: what is taken, what is refused, and what becomes of it."""

import json
from collections.abc import Sequence
from datetime import timedelta
from typing import Any

import httpx
import numpy as np
import pytest

from service.clock import now
from tests.serving import Service, square

Row = dict[str, Any]
FIRST, SECOND = "2024-06-03T10:30:00Z", "2024-06-08T10:30:00Z"
HEADER = "parcel,index,observed_at,mean,valid_share\n"


def row(parcel: str = "A", index: str = "ndvi", mean: Any = 0.7, **more: Any) -> Row:
    return {"parcel": parcel, "index": index, "observed_at": FIRST, "mean": mean, **more}


def post(service: Service, rows: Any, **request: Any) -> httpx.Response:
    """Import rows of JSON."""
    headers = {"Content-Type": "application/json", **request.pop("headers", {})}
    content = rows if isinstance(rows, bytes) else json.dumps(rows).encode()
    return service.call("POST", "/v1/observations", content=content, headers=headers, **request)


def post_csv(service: Service, text: str, **headers: str) -> httpx.Response:
    headers = {"Content-Type": "text/csv", **headers}
    return service.call("POST", "/v1/observations", content=text.encode(), headers=headers)


def counts(answer: httpx.Response) -> tuple[int, int, int, int]:
    """Return how many rows were created, updated, left unchanged and rejected."""
    assert answer.status_code == 200, answer.text
    told = answer.json()
    return told["created"], told["updated"], told["unchanged"], told["rejected"]


def problem(answer: httpx.Response, status: int, code: str) -> dict[str, Any]:
    """Return a problem document after checking its status and type."""
    assert (answer.status_code, answer.json()["type"]) == (status, f"/problems/{code}"), answer.text
    assert answer.headers["Content-Type"] == "application/problem+json"
    document: dict[str, Any] = answer.json()
    return document


def pointers(errors: Sequence[Row]) -> list[str]:
    return [error["pointer"] for error in errors]


def nothing_landed(service: Service) -> bool:
    return service.get("/v1/scenes")["scenes"] == [] and service.series("A")["mean"] == []


def test_rows_are_created_updated_or_unchanged_from_json_and_csv(service: Service) -> None:
    service.put_parcels(square("A", col=0, row=0, holding="north"), square("B", col=20, row=0))
    whole = {"sd": 0.05, "min": 0.5, "p10": 0.6, "p50": 0.71, "p90": 0.8, "max": 0.9, "pixels": 100}
    rows = [row(**whole, valid_share=0.9), row("B", "red", 0.04, sd=0.01), row("B")]
    assert counts(post(service, rows)) == (3, 0, 0, 0)
    assert counts(post(service, rows)) == (0, 0, 3, 0)
    rows[2] = row("B", mean=0.65)
    assert counts(post(service, [*rows, row(observed_at=SECOND)])) == (1, 1, 2, 0)
    # The same from CSV: another order of columns, a byte order mark, empty cells, an offset.
    text = (
        "\ufeffmean,parcel,index,valid_share,observed_at,sd\r\n"
        "0.65,B,ndvi,,2024-06-03T12:30:00+02:00,\r\n"
        f'0.55,"B",ndmi,0.8,{SECOND},0.02\r\n'
    )
    assert counts(post_csv(service, text)) == (1, 0, 1, 0)
    assert counts(post_csv(service, text)) == (0, 0, 2, 0)

    found = service.series("A", stat="mean,sd,min,p10,p50,p90,max,pixels,valid_share")
    assert found["observed_at"] == [FIRST, SECOND]
    assert {name: found[name][0] for name in whole} == whole
    assert (found["mean"], found["valid_share"]) == ([0.7, 0.7], [0.9, 1.0])
    assert found["sensor"] == ["import", "import"]
    # A statistic that was not sent is unknown, not 0.
    assert found["sd"] == [0.05, None]
    assert service.series("B", "red", stat="mean,sd")["sd"] == [0.01]
    # The newest look stands in the overview.
    shown = {entry["parcel"]: entry for entry in service.get("/v1/overview")["parcels"]}
    assert (shown["A"]["observed_at"], shown["A"]["value"]) == (SECOND, 0.7)
    assert (shown["B"]["observed_at"], shown["B"]["value"]) == (FIRST, 0.65)
    (second, first) = service.get("/v1/scenes")["scenes"]
    assert (first["kind"], first["state"], first["acquired_at"]) == ("imported", "done", FIRST)
    assert second["acquired_at"] == SECOND


def test_instant_sensor_and_source_make_a_scene_and_any_label_will_do(service: Service) -> None:
    service.put_parcels(square("A", col=0, row=0))
    rows = [
        row(sensor="field spectrometer", mean=0.61),
        row(sensor="kite, 2 bands", source="club", mean=0.62, harmonised=True),
        row(sensor="kite, 2 bands", source="school", mean=0.63, valid_share=0.9),
    ]
    assert counts(post(service, rows)) == (3, 0, 0, 0)
    # Whether it was harmonised is part of a figure: a correction of that alone is one.
    assert counts(post(service, [{**rows[1], "harmonised": False}])) == (0, 1, 0, 0)
    assert counts(post(service, [rows[1]])) == (0, 1, 0, 0)
    scenes = service.get("/v1/scenes")["scenes"]
    assert len({scene["ref"] for scene in scenes}) == 3
    # One look a pass and sensor: of the kite's two the one that saw more.
    assert service.series("A")["mean"] == [0.61, 0.62]
    assert service.series("A", sensor="kite, 2 bands")["mean"] == [0.62]
    # Of two that saw as much it does not matter which came first.
    service.put_parcels(*(square(ref, col=20 + 20 * at, row=0) for at, ref in enumerate("BC")))
    for parcel, sources in [("B", ("club", "school")), ("C", ("school", "club"))]:
        for source in sources:
            mean = {"club": 0.41, "school": 0.42}[source]
            post(service, [row(parcel, sensor="kite, 2 bands", source=source, mean=mean)])
    chosen = service.series("B")["mean"]
    assert len(chosen) == 1
    assert service.series("C")["mean"] == chosen
    shown = {entry["parcel"]: entry for entry in service.get("/v1/overview")["parcels"]}
    assert [shown["B"]["value"], shown["C"]["value"]] == chosen * 2


BAD: list[tuple[Row, str]] = [
    (row("nobody"), "parcel"),
    (row(observed_at="2024-06-03T10:30:00"), "observed_at"),
    (row(observed_at="2024-06-03"), "observed_at"),
    (row(observed_at="2024-02-30T10:30:00Z"), "observed_at"),
    (row(observed_at="1961-06-03T10:30:00Z"), "observed_at"),
    (row(observed_at=f"{now() + timedelta(days=3):%Y-%m-%dT%H:%M:%SZ}"), "observed_at"),
    (row(index="ndvy"), "index"),
    (row(mean="n/a"), "mean"),
    (row(mean="0,7"), "mean"),
    (row(mean="nan"), "mean"),
    (row(mean="inf"), "mean"),
    (row(mean=""), "mean"),
    (row(mean=7000), "mean"),
    (row(mean=1.2), "mean"),
    (row(index="red", mean=-0.9), "mean"),
    (row(index="evi"), "index"),
    (row(index="savi", mean=1e30), "mean"),
    (row(max=1.7), "max"),
    (row(min=0.8, max=0.7), "min"),
    (row(sd=-0.1), "sd"),
    (row(sd=1e300), "sd"),
    (row(pixels=-1), "pixels"),
    (row(pixels=1e300), "pixels"),
    (row(valid_share=1.01), "valid_share"),
    (row(valid_share=-0.1), "valid_share"),
    (row(sensor="=cmd()"), "sensor"),
    (row(harmonised="perhaps"), "harmonised"),
]


def test_each_bad_row_is_named_by_place_and_column_and_nothing_lands(service: Service) -> None:
    service.put_parcels(square("A", col=0, row=0))
    good = row(observed_at=SECOND)
    for bad, column in BAD:
        document = problem(post(service, [good, bad]), 422, "invalid-input")
        assert pointers(document["errors"]) == [f"/1/{column}"], (bad, document)
        # As CSV the same place is named, and the line as well.
        names = sorted({*good, *bad})
        lines = [",".join(f'"{each.get(name, "")}"' for name in names) for each in (good, bad)]
        document = problem(
            post_csv(service, "\n".join([",".join(names), *lines])), 422, "invalid-input"
        )
        (error,) = document["errors"]
        assert error["pointer"] == f"/1/{column}", (bad, document)
        assert error["detail"].startswith("Line 3: ")
        assert "nobody" not in document["detail"]
    # These can only be said in JSON.
    for bad, column in [(row(mean=True), "/mean"), (row(mean=None), "/mean"), (["A"], "")]:
        document = problem(post(service, [good, bad]), 422, "invalid-input")
        assert pointers(document["errors"]) == [f"/1{column}"]
    document = problem(post(service, [row(depth=3), row(mean=float("nan"))]), 400, "malformed-json")
    assert "errors" not in document
    document = problem(post(service, [row(depth=3)]), 422, "invalid-input")
    assert pointers(document["errors"]) == ["/0/depth"]
    # One cell twice, even if it says the same.
    document = problem(post(service, [row(), good, row()]), 422, "invalid-input")
    assert pointers(document["errors"]) == ["/2"]
    assert nothing_landed(service)


def test_leniently_the_good_rows_land_and_the_rest_is_listed(service: Service) -> None:
    service.put_parcels(square("A", col=0, row=0))
    mixed = [row(), row("nobody"), row(mean="n/a"), row(observed_at=SECOND), row(mean=0.6)]
    document = problem(post(service, mixed), 422, "invalid-input")
    # Rows are looked at before parcels are; both tell all that they know.
    assert pointers(document["errors"]) == ["/2/mean"]
    assert nothing_landed(service)
    answer = post(service, mixed, headers={"Prefer": "handling=lenient"})
    assert counts(answer) == (2, 0, 0, 3)
    assert sorted(pointers(answer.json()["errors"])) == ["/1/parcel", "/2/mean", "/4"]
    assert service.series("A")["mean"] == [0.7, 0.7]
    text = f"{HEADER}A,ndvi,{FIRST},0.8,\nA,ndvi,yesterday,0.8,\nA,ndmi,{FIRST},0.3,0.9\n"
    answer = post_csv(service, text, Prefer="handling=lenient")
    assert counts(answer) == (1, 1, 0, 1)
    (error,) = answer.json()["errors"]
    assert error["pointer"] == "/1/observed_at"
    assert error["detail"].startswith("Line 3: ")
    # However many are wrong, a hundred are listed.
    answer = post(service, [row(mean=9)] * 130, headers={"Prefer": "handling=lenient"})
    assert counts(answer) == (0, 0, 0, 130)
    assert len(answer.json()["errors"]) == 100
    document = problem(post(service, [row(mean=9)] * 130), 422, "invalid-input")
    assert (len(document["errors"]), document["errors_total"]) == (100, 130)


def test_a_body_of_another_shape_is_refused_as_a_whole(service: Service) -> None:
    service.put_parcels(square("A", col=0, row=0))
    line = f"A,ndvi,{FIRST},0.7,1\n"
    for text, pointer in [
        ((HEADER + line).replace(",", ";"), ""),
        ((HEADER + line).replace(",", "\t"), ""),
        ("parcel,index,observed_at\n", ""),
        (HEADER.replace("valid_share", "share") + line, ""),
        (HEADER.replace("valid_share", "mean") + line, ""),
        ("", ""),
        (f"{HEADER}{line}A,ndvi,{FIRST},0,7,1\n", "/1"),
    ]:
        document = problem(post_csv(service, text), 422, "invalid-input")
        assert pointers(document["errors"]) == [pointer], text
    told = problem(post_csv(service, (HEADER + line).replace(",", ";")), 422, "invalid-input")
    assert "separated by commas" in told["detail"]
    for content in (b"", b"[", b"[{]", b'[{"parcel": "A"}', b"nonsense"):
        problem(post(service, content), 400, "malformed-json")
    for value in (row(), {"item": [row()]}, {"item": row()}, 7, "A", None):
        document = problem(post(service, value), 422, "invalid-input")
        assert pointers(document["errors"]) == [""]
    for media_type in ("text/plain", "application/geo+json", ""):
        answer = post(service, [row()], headers={"Content-Type": media_type})
        problem(answer, 415, "unsupported-media-type")
    answer = post(service, [row()], params={"asses": "true"})
    assert problem(answer, 422, "invalid-parameter")["errors"][0]["parameter"] == "asses"
    problem(post(service, [row()], params={"assess": "perhaps"}), 422, "invalid-parameter")
    assert nothing_landed(service)
    # No rows are no fault.
    assert counts(post(service, [])) == (0, 0, 0, 0)
    assert counts(post_csv(service, HEADER)) == (0, 0, 0, 0)


@pytest.mark.parametrize("settings", ["sqlite"], indirect=True)
def test_a_call_takes_a_hundred_thousand_rows_and_no_more(service: Service) -> None:
    """No row gets as far as the database, so that one kind of it is enough."""
    service.put_parcels(square("A", col=0, row=0))
    text = HEADER + f"A,ndvi,{FIRST},0.7,\n" * 100_001
    (error,) = problem(post_csv(service, text), 422, "invalid-input")["errors"]
    assert (error["pointer"], "100,000" in error["detail"]) == ("", True)
    content = b"[" + b",".join([b"7"] * 100_001) + b"]"
    # Leniently too: the limit is about the call.
    answer = post(service, content, headers={"Prefer": "handling=lenient"})
    (error,) = problem(answer, 422, "invalid-input")["errors"]
    assert (error["pointer"], "100,000" in error["detail"]) == ("", True)
    assert nothing_landed(service)


def test_order_and_cutting_of_calls_do_not_show_in_series(service: Service) -> None:
    refs = ("A", "B", "C", "D")
    service.put_parcels(*(square(ref, col=20 * at, row=0) for at, ref in enumerate(refs)))
    random = np.random.default_rng(3)
    cells = [
        (index, f"2024-06-{day:02d}T10:30:00Z")
        for index in ("ndvi", "ndmi", "red")
        for day in (3, 8, 13)
    ]
    table = [
        {
            "index": index,
            "observed_at": at,
            "mean": float(np.round(random.uniform(0.1, 0.7), 4)),
            # Some statistics are missing here and there, and bands have shares of their own.
            **({"sd": 0.02} if at != "2024-06-08T10:30:00Z" else {}),
            **({"valid_share": 0.8} if index == "red" else {}),
        }
        for index, at in cells
    ]

    def rows_of(ref: str) -> list[Row]:
        return [{"parcel": ref, **cell} for cell in table]

    assert counts(post(service, rows_of("A"))) == (9, 0, 0, 0)
    for one in reversed(rows_of("B")):
        assert counts(post(service, [one])) == (1, 0, 0, 0)
    for index in ("red", "ndvi", "ndmi"):
        post(service, [one for one in rows_of("C") if one["index"] == index])
    shuffled = [rows_of("D")[at] for at in random.permutation(9)]
    assert counts(post(service, shuffled[:5])) == (5, 0, 0, 0)
    # The second call brings some of the first again.
    assert counts(post(service, shuffled[3:])) == (4, 0, 2, 0)

    def seen(ref: str) -> Any:
        answer = service.get(
            f"/v1/parcels/{ref}/series",
            params={"index": "ndvi,ndmi,red", "stat": "mean,sd,valid_share"},
        )
        return answer["indices"]

    assert seen("A")["ndvi"]["mean"] == [cell["mean"] for cell in table[:3]]
    assert seen("A")["ndvi"]["sd"] == [0.02, None, 0.02]
    assert seen("A")["red"]["valid_share"] == [0.8, 0.8, 0.8]
    assert seen("A")["ndmi"]["valid_share"] == [1.0, 1.0, 1.0]
    assert seen("A") == seen("B") == seen("C") == seen("D")
    for index in ("ndvi", "red"):
        shown = service.get("/v1/overview", params={"index": index})["parcels"]
        assert len({(e["observed_at"], e["value"], e["valid_share"]) for e in shown}) == 1
    # A measure that comes later, or is corrected, hides none of the others.
    post(service, [row("A", "nbr", 0.4), row("A", "ndvi", 0.11)])
    table[0]["mean"] = 0.11
    assert service.series("A", "nbr")["mean"] == [0.4]
    assert seen("A")["ndvi"]["mean"] == [cell["mean"] for cell in table[:3]]
    assert {name: seen("A")[name] for name in ("ndmi", "red")} == {
        name: seen("B")[name] for name in ("ndmi", "red")
    }


def test_a_key_of_holdings_writes_its_own_parcels_and_learns_of_no_others(service: Service) -> None:
    service.put_parcels(
        square("A", col=0, row=0, holding="north"), square("B", col=20, row=0, holding="south")
    )
    limited = service.key("ingest", "read", holdings=["north"])
    assert counts(post(service, [row()], key=limited)) == (1, 0, 0, 0)
    document = problem(post(service, [row("B")], key=limited), 422, "invalid-input")
    unknown = problem(post(service, [row("nobody")], key=limited), 422, "invalid-input")
    assert document == unknown
    assert service.series("B")["mean"] == []
    problem(post(service, [row()], key=service.key("read", "manage")), 403, "scope-missing")
    problem(post(service, [row()], key="nonsense"), 401, "unknown-key")


def test_a_repeat_under_its_key_gets_the_first_answer_again(service: Service) -> None:
    service.put_parcels(square("A", col=0, row=0))
    once = {"Idempotency-Key": "import 1"}
    first = post(service, [row()], headers=once)
    assert counts(first) == (1, 0, 0, 0)
    again = post(service, [row()], headers=once)
    assert (again.status_code, again.json()) == (200, first.json())
    answer = post(service, [row(mean=0.6)], headers=once)
    problem(answer, 422, "idempotency-key-reused")
    assert service.series("A")["mean"] == [0.7]
    # With waiting as well; a refusal is not remembered.
    problem(
        post(service, [row("nobody")], headers={"Idempotency-Key": "import 2"}),
        422,
        "invalid-input",
    )
    headers = {"Idempotency-Key": "import 2", "Prefer": "wait=20"}
    answer = post(service, [row(mean=0.6)], headers=headers, params={"assess": "true"})
    assert counts(answer) == (0, 1, 0, 0)
    assert service.series("A", **{"with": "departure"})["departure"] == [None]
