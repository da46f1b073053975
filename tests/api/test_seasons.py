"""Crop seasons: one, many, by interval or by year; corrected, and never overlapping."""

from datetime import date, timedelta
from pathlib import Path
from typing import Any

import httpx
import numpy as np

from tests.serving import Service, square, write_band

Season = dict[str, Any]


def problem(answer: httpx.Response, status: int, code: str) -> dict[str, Any]:
    """Return a problem document after checking its status and type."""
    assert (answer.status_code, answer.json()["type"]) == (status, f"/problems/{code}"), answer.text
    assert answer.headers["Content-Type"] == "application/problem+json"
    document: dict[str, Any] = answer.json()
    return document


def put(service: Service, sent: Any, **request: Any) -> httpx.Response:
    """Post seasons as JSON."""
    return service.call("POST", "/v1/seasons", json=sent, **request)


def put_csv(service: Service, text: str, **headers: str) -> httpx.Response:
    """Post seasons as CSV."""
    headers = {"Content-Type": "text/csv", **headers}
    return service.call("POST", "/v1/seasons", content=text.encode(), headers=headers)


def counts(answer: httpx.Response) -> tuple[int, int, int, int]:
    """Return how many seasons were created, updated, left unchanged and rejected."""
    assert answer.status_code == 200, answer.text
    told = answer.json()
    return told["created"], told["updated"], told["unchanged"], told["rejected"]


def kept(service: Service, ref: str = "A") -> list[tuple[str, str, str]]:
    """Return crop, first and last day of a parcel's seasons."""
    seasons = service.get(f"/v1/parcels/{ref}/seasons")["seasons"]
    return [(season["crop"], season["from_on"], season["until_on"]) for season in seasons]


def season(crop: str, first: str, last: str, **more: Any) -> Season:
    return {"parcel": "A", "crop": crop, "from_on": first, "until_on": last, **more}


def southern(ref: str) -> dict[str, Any]:
    """Return a parcel south of the equator."""
    feature = square(ref, col=0, row=0)
    ring = [[lon, -lat] for lon, lat in feature["geometry"]["coordinates"][0]]
    return {**feature, "geometry": {"type": "Polygon", "coordinates": [ring]}}


def test_a_season_is_sent_as_object_array_or_csv(service: Service) -> None:
    service.put_parcels(square("A", col=0, row=0), square("B", col=20, row=0))
    one = season("maize", "2024-04-20", "2024-10-05")
    assert counts(put(service, one)) == (1, 0, 0, 0)
    many = [
        season("winter wheat", "2024-10-06", "2025-07-31"),
        {**season("rye", "2023-09-15", "2024-07-20"), "parcel": "B"},
    ]
    assert counts(put(service, many)) == (2, 0, 0, 0)
    text = (
        "\ufeffcrop,parcel,from_on,until_on,sown_on\r\n"
        'mustard,A,2025-08-01,2025-11-30,\r\n"oats, spring",B,2025-03-01,2025-08-15,2025-03-09\r\n'
    )
    assert counts(put_csv(service, text)) == (2, 0, 0, 0)
    assert kept(service) == [
        ("maize", "2024-04-20", "2024-10-05"),
        ("winter wheat", "2024-10-06", "2025-07-31"),
        ("mustard", "2025-08-01", "2025-11-30"),
    ]
    # Sowing moves the beginning.
    assert kept(service, "B")[1] == ("oats, spring", "2025-03-09", "2025-08-15")
    # Sent again, all of it is there.
    assert counts(put(service, one)) == (0, 0, 1, 0)
    assert counts(put(service, many)) == (0, 0, 2, 0)
    assert counts(put_csv(service, text)) == (0, 0, 2, 0)


def test_a_year_is_the_crop_year_that_ends_in_it_by_hemisphere(service: Service) -> None:
    service.put_parcels(square("A", col=0, row=0), southern("B"))
    text = "parcel,crop,year\nA,maize,2024\nA,rye,2025\nB,maize,2024\n"
    assert counts(put_csv(service, text)) == (3, 0, 0, 0)
    # The contract's own example, and the defaults: 1 October in the north, 1 April in the south.
    assert kept(service) == [
        ("maize", "2023-10-01", "2024-09-30"),
        ("rye", "2024-10-01", "2025-09-30"),
    ]
    assert kept(service, "B") == [("maize", "2023-04-01", "2024-03-31")]


def test_sowing_and_harvest_move_the_ends(service: Service) -> None:
    service.put_parcels(square("A", col=0, row=0))
    sent = [
        {"parcel": "A", "crop": "maize", "year": 2023, "sown_on": "2023-04-20"},
        {"parcel": "A", "crop": "rye", "year": 2024, "harvested_on": "2024-07-25"},
        season("oats", "2025-01-01", "2025-12-31", sown_on="2025-03-01", harvested_on="2025-08-01"),
        # Days of their own are enough.
        {"parcel": "A", "crop": "peas", "sown_on": "2026-04-01", "harvested_on": "2026-07-10"},
    ]
    assert counts(put(service, sent)) == (4, 0, 0, 0)
    assert kept(service) == [
        ("maize", "2023-04-20", "2023-09-30"),
        ("rye", "2023-10-01", "2024-07-25"),
        ("oats", "2025-03-01", "2025-08-01"),
        ("peas", "2026-04-01", "2026-07-10"),
    ]
    told = service.get("/v1/parcels/A/seasons")["seasons"]
    assert [s["sown_on"] for s in told] == ["2023-04-20", None, "2025-03-01", "2026-04-01"]
    assert [s["harvested_on"] for s in told] == [None, "2024-07-25", "2025-08-01", "2026-07-10"]


def test_the_same_interval_corrects_a_season_and_an_overlap_is_refused(service: Service) -> None:
    service.put_parcels(square("A", col=0, row=0))
    put(service, season("maize", "2024-04-20", "2024-10-05"))
    assert counts(put(service, season("silage maize", "2024-04-20", "2024-10-05"))) == (0, 1, 0, 0)
    assert kept(service) == [("silage maize", "2024-04-20", "2024-10-05")]
    for first, last in [
        ("2024-10-05", "2025-07-31"),
        ("2024-01-01", "2024-04-20"),
        ("2024-05-01", "2024-06-01"),
        ("2024-01-01", "2024-12-31"),
        ("2024-04-20", "2024-10-04"),
    ]:
        sent = [season("clover", "2020-01-01", "2020-12-31"), season("rye", first, last)]
        document = problem(put(service, sent), 409, "season-overlaps")
        (error,) = document["errors"]
        assert error["pointer"] == "/1"
        assert "2024-04-20 to 2024-10-05" in error["detail"]
    # Two of one batch may not overlap each other either.
    pair = [season("a", "2021-01-01", "2021-06-30"), season("b", "2021-06-30", "2021-12-31")]
    assert problem(put(service, pair), 409, "season-overlaps")["errors"][0]["pointer"] == "/1"
    # All or nothing.
    assert kept(service) == [("silage maize", "2024-04-20", "2024-10-05")]
    # Neighbours may meet without a gap.
    near = [season("a", "2024-10-06", "2024-12-31"), season("b", "2024-01-01", "2024-04-19")]
    assert counts(put(service, near)) == (2, 0, 0, 0)


FAULTY: list[tuple[Season, str, str]] = [
    ({"parcel": "none", "crop": "maize", "year": 2024}, "/parcel", "no parcel"),
    ({"crop": "maize", "year": 2024}, "/parcel", "required"),
    ({"parcel": "A", "year": 2024}, "/crop", "required"),
    ({"parcel": "A", "crop": "", "year": 2024}, "/crop", ""),
    ({"parcel": "A", "crop": "=x", "year": 2024}, "/crop", "formula"),
    ({"parcel": "..", "crop": "maize", "year": 2024}, "/parcel", "neither . nor .."),
    ({"parcel": "A", "crop": "maize"}, "", "Say when the season is"),
    ({"parcel": "A", "crop": "maize", "from_on": "2024-01-01"}, "", "Say when the season is"),
    ({"parcel": "A", "crop": "maize", "year": 1066}, "/year", "1972"),
    ({"parcel": "A", "crop": "maize", "year": "soon"}, "/year", ""),
    (season("maize", "2024-01-01", "2024-12-31", year=2024), "/year", "Send either"),
    (season("maize", "2024-12-31", "2024-01-01"), "", "ends before it begins"),
    (season("maize", "2024-01-01", "2024-06-30", sown_on="2024-07-01"), "", "ends before"),
    (season("maize", "2024-02-30", "2024-06-30"), "/from_on", "no such day"),
    (season("maize", "20240101", "2024-06-30"), "/from_on", "YYYY-MM-DD"),
    (season("maize", "2024-01-01T00:00:00Z", "2024-06-30"), "/from_on", "YYYY-MM-DD"),
    (season("maize", "2024-01-01", "0"), "/until_on", "YYYY-MM-DD"),
    (season("maize", "2024-01-01", "2024-06-30", zebra="1"), "/zebra", ""),
]


def test_a_faulty_season_is_refused_where_it_is_wrong_and_nothing_lands(service: Service) -> None:
    service.put_parcels(square("A", col=0, row=0))
    good = season("rye", "2020-01-01", "2020-12-31")
    for sent, pointer, says in FAULTY:
        document = problem(put(service, sent), 422, "invalid-input")
        assert [error["pointer"] for error in document["errors"]] == [pointer], document
        assert says in document["errors"][0]["detail"], document
        document = problem(put(service, [good, sent]), 422, "invalid-input")
        assert [error["pointer"] for error in document["errors"]] == [f"/1{pointer}"], document
    # Numbers are no dates, though they could be counted from 1970.
    sent = {"parcel": "A", "crop": "maize", "from_on": 0, "until_on": 86_400}
    assert len(problem(put(service, sent), 422, "invalid-input")["errors"]) == 2
    assert kept(service) == []


def test_a_faulty_csv_row_is_named_with_its_column_and_line(service: Service) -> None:
    service.put_parcels(square("A", col=0, row=0))
    # A cell with a line break makes lines and rows differ.
    text = (
        "parcel,crop,from_on,until_on\n"
        'A,"two\nlines",2023-01-01,2023-02-01\n'
        "A,maize,2024-01-01,2024-13-01\n"
        "none,maize,2024-01-01,2024-02-01\n"
        "A,rye,2022-01-01,2022-12-31\n"
    )
    document = problem(put_csv(service, text), 422, "invalid-input")
    pointers = [error["pointer"] for error in document["errors"]]
    lines = [error["detail"].partition(":")[0] for error in document["errors"]]
    assert pointers == ["/0/crop", "/1/until_on"]
    assert lines == ["Line 3", "Line 4"]
    lenient = put_csv(service, text, Prefer="handling=lenient")
    assert counts(lenient) == (1, 0, 0, 3)
    told = [(e["pointer"], e["detail"].partition(":")[0]) for e in lenient.json()["errors"]]
    assert told == [("/0/crop", "Line 3"), ("/1/until_on", "Line 4"), ("/2/parcel", "Line 5")]
    assert kept(service) == [("rye", "2022-01-01", "2022-12-31")]


def test_a_body_that_is_neither_seasons_nor_readable_is_refused(service: Service) -> None:
    for body, pointer in [("x", ""), (7, ""), (True, ""), ([7], "/0"), ([[]], "/0")]:
        document = problem(put(service, body), 422, "invalid-input")
        assert [error["pointer"] for error in document["errors"]] == [pointer]
    for header in ("", "parcel,year\n", "parcel,crop,zebra\n", "parcel,crop,crop\n", "x\n"):
        document = problem(put_csv(service, header), 422, "invalid-input")
        assert [error["pointer"] for error in document["errors"]] == [""]
        assert "zebra" not in document["detail"]
    document = problem(put_csv(service, "parcel,crop,year\nA,maize\n"), 422, "invalid-input")
    assert document["errors"][0]["pointer"] == "/0"
    problem(put_csv(service, 'parcel,crop,year\nA,"maize,2024\n'), 400, "malformed-body")
    latin = service.call(
        "POST",
        "/v1/seasons",
        content="parcel,crop,year\nÄ,maize,2024\n".encode("latin-1"),
        headers={"Content-Type": "text/csv"},
    )
    problem(latin, 400, "malformed-body")
    for text in ("", "[", '{"parcel": '):
        answer = service.call(
            "POST", "/v1/seasons", content=text, headers={"Content-Type": "application/json"}
        )
        problem(answer, 400, "malformed-json")
    answer = service.call("POST", "/v1/seasons", content="x", headers={"Content-Type": "text/xml"})
    problem(answer, 415, "unsupported-media-type")


def test_the_crop_of_a_parcel_is_that_of_the_season_that_holds_today(service: Service) -> None:
    service.put_parcels(square("A", col=0, row=0))
    today = date.today()  # noqa: DTZ011 - the service's day begins in UTC; a week holds both
    week = timedelta(days=7)
    put(service, season("maize", str(today - week), str(today + week)))
    assert service.get("/v1/parcels/A")["properties"]["crop"] == "maize"
    # A crop sent with the parcel corrects that season.
    service.put_parcels(square("A", col=0, row=0, crop="sorghum"))
    assert kept(service) == [("sorghum", str(today - week), str(today + week))]
    # Where none holds today, it is that of the crop year, up to its neighbours.
    service.put_parcels(square("B", col=20, row=0))
    ahead = {**season("rye", str(today + week), str(today + 60 * week)), "parcel": "B"}
    put(service, ahead)
    service.put_parcels(square("B", col=20, row=0, crop="maize"))
    (first, second) = kept(service, "B")
    assert first[0] == "maize"
    assert first[1] <= str(today) <= first[2]
    assert first[2] < second[1] == ahead["from_on"]


def test_each_look_of_a_series_carries_the_crop_of_its_day(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(square("A", col=0, row=0))
    days = ["2024-04-19", "2024-04-20", "2024-10-05", "2024-10-06"]
    for number, day in enumerate(days):
        folder = tmp_path / day
        folder.mkdir()
        files = {
            role: write_band(folder / f"{role}.tif", np.full((40, 40), level, dtype=np.uint16))
            for role, level in [("red", 500 + number), ("nir", 4_000)]
        }
        scene = {
            "ref": day,
            "sensor": "generic",
            "acquired_at": f"{day}T10:00:00Z",
            "scaling": {"scale": 0.0001, "offset": 0},
        }
        assert service.post_scene(scene, files).json()["state"] == "done"
    assert service.series("A")["crop"] == [None, None, None, None]
    put(service, season("maize", "2024-04-20", "2024-10-05"))
    series = service.series("A")
    assert series["scene"] == days
    assert series["crop"] == [None, "maize", "maize", None]
    put(service, season("silage maize", "2024-04-20", "2024-10-05"))
    assert service.series("A")["crop"] == [None, "silage maize", "silage maize", None]
