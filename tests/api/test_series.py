"""The series of a parcel and the overview of all: what is asked for, and what is answered."""

import csv
import io
from pathlib import Path
from typing import Any

import httpx
import numpy as np
import pytest

from service.api.wire import written
from service.clock import now
from tests.serving import SCENE, Service, square, uniform_scene, write_band

CANOPY = {"green": 0.06, "red": 0.04, "nir": 0.42, "swir16": 0.22}
STUBBLE = {"green": 0.14, "red": 0.20, "nir": 0.30, "swir16": 0.35}
# (nir - red) / (nir + red); Rouse et al. 1974.
CANOPY_NDVI, STUBBLE_NDVI = 0.826087, 0.2
TIMES = {
    "s1": "2024-05-29T10:10:31Z",
    "s2": "2024-06-03T10:10:31Z",
    "s3": "2024-06-08T10:10:31Z",
    "g4": "2024-06-13T10:00:00Z",
}
WATCHED = ["ndvi", "evi2", "savi", "ndre", "ndmi", "ndwi", "mndwi", "nbr", "nbr2", "ndsi", "bsi"]
STATS = ["mean", "sd", "min", "p10", "p50", "p90", "max", "valid_share", "pixels"]


def keep_history(service: Service, folder: Path) -> None:
    """Keep three parcels and four scenes of two sensors.

    In s3 cloud hides all of A and the upper half of B; C lies off every scene. A has texture.
    """
    service.put_parcels(
        square("A", col=4.3, row=4.7, size=9, holding="north"),
        square("B", col=20, row=20, size=8, holding="south", name="Long strip"),
        square("C", col=300, row=300, holding="north"),
    )
    season = {"parcel": "A", "crop": "winter barley", "from_on": "2023-10-01"}
    service.call("POST", "/v1/seasons", json={**season, "until_on": "2024-06-05"})
    for ref, surface in (("s1", CANOPY), ("s2", STUBBLE), ("s3", CANOPY)):
        files = uniform_scene(folder / ref, surface)
        if ref == "s1":
            random = np.random.default_rng(1)
            write_band(files["nir"], random.integers(3_000, 7_000, (40, 40)).astype(np.uint16))
        if ref == "s3":
            classes = np.full((20, 20), 4, dtype=np.uint8)
            classes[:12] = 9
            write_band(files["quality"], classes, cell_m=20)
        scene = {**SCENE, "ref": ref, "acquired_at": TIMES[ref]}
        assert service.post_scene(scene, files).json()["state"] == "done"
    generic = {
        "ref": "g4",
        "sensor": "generic",
        "acquired_at": TIMES["g4"],
        "scaling": {"scale": 0.0001, "offset": -0.1},
    }
    bands = {role: uniform_scene(folder / "g4", CANOPY)[role] for role in ("red", "nir")}
    assert service.post_scene(generic, bands).json()["state"] == "done"


def test_an_interval_holds_its_beginning_and_not_its_end(service: Service, tmp_path: Path) -> None:
    keep_history(service, tmp_path)

    def scenes(**params: Any) -> Any:
        return service.series("B", min_valid=0, **params)["scene"]

    assert scenes() == ["s1", "s2", "s3", "g4"]
    assert scenes(**{"from": TIMES["s2"]}) == ["s2", "s3", "g4"]
    assert scenes(to=TIMES["s2"]) == ["s1"]
    assert scenes(**{"from": TIMES["s1"], "to": TIMES["s3"]}) == ["s1", "s2"]
    assert scenes(**{"from": "2024-06-03T12:10:31+02:00", "to": "2024-06-08"}) == ["s2"]
    assert scenes(**{"from": "2024-06-04", "to": "2024-06-08"}) == []
    # A bare date is 00:00 UTC.
    assert scenes(**{"from": "2024-06-08", "to": "2024-06-13"}) == ["s3"]
    columns = service.series("B", **{"from": TIMES["s2"], "to": TIMES["s3"]})
    assert columns["observed_at"] == [TIMES["s2"]]
    assert columns["mean"] == [pytest.approx(STUBBLE_NDVI, abs=1e-6)]


def test_a_series_has_the_columns_that_were_asked_for(service: Service, tmp_path: Path) -> None:
    keep_history(service, tmp_path)
    keys = ["observed_at", "scene", "sensor", "crop"]
    answer = service.get("/v1/parcels/A/series")
    assert answer["parcel"] == "A"
    assert list(answer["indices"]) == WATCHED
    assert list(answer["indices"]["ndvi"]) == [*keys, "mean", "valid_share"]
    # What the scenes cannot feed is there, and empty.
    assert answer["indices"]["nbr"] == {key: [] for key in [*keys, "mean", "valid_share"]}

    query = {"index": ["ndmi,ndvi", "ndwi"], "stat": ["p90,p10", "p90"], "min_valid": 0}
    answer = service.get("/v1/parcels/A/series", params=query)
    assert list(answer["indices"]) == ["ndmi", "ndvi", "ndwi"]
    assert list(answer["indices"]["ndvi"]) == [*keys, "p90", "p10"]
    # Each index has the looks that fed it: the fourth scene has no green and no swir16.
    assert answer["indices"]["ndmi"]["scene"] == ["s1", "s2", "s3"]
    assert answer["indices"]["ndvi"]["scene"] == ["s1", "s2", "s3", "g4"]

    columns = service.series("A", stat=",".join(STATS))
    assert list(columns) == [*keys, *STATS]
    assert columns["crop"] == ["winter barley", "winter barley", None]
    assert columns["sensor"] == ["sentinel-2-l2a", "sentinel-2-l2a", "generic"]
    first = {stat: columns[stat][0] for stat in STATS}
    ordered = [first[stat] for stat in ("min", "p10", "p50", "p90", "max")]
    assert ordered == sorted(set(ordered))
    assert first["min"] < first["mean"] < first["max"]
    assert 0 < first["sd"] < 0.2
    assert first["pixels"] == pytest.approx(81, abs=1e-3)
    # A surface without texture.
    assert [columns[stat][1] for stat in STATS[:7]] == pytest.approx(
        [STUBBLE_NDVI, 0, *[STUBBLE_NDVI] * 5], abs=1e-6
    )


def test_band_roles_are_measures_too(service: Service, tmp_path: Path) -> None:
    keep_history(service, tmp_path)
    query = {"index": "red,nir,ndvi", "stat": "mean,sd,pixels,valid_share"}
    bands = service.get("/v1/parcels/B/series", params=query)["indices"]
    assert bands["red"]["mean"] == pytest.approx([0.04, 0.20, 0.04], abs=1e-6)
    assert bands["red"]["sd"] == pytest.approx([0, 0, 0], abs=1e-6)
    assert bands["nir"]["mean"][1:] == pytest.approx([0.30, 0.42], abs=1e-6)
    assert bands["nir"]["sd"][0] > 0.05
    assert bands["red"]["pixels"] == pytest.approx([64, 64, 64], abs=1e-3)
    assert bands["red"]["valid_share"] == bands["ndvi"]["valid_share"]
    assert service.series("B", "swir22")["mean"] == []


def test_unseen_looks_are_dropped_or_null_but_never_a_number(
    service: Service, tmp_path: Path
) -> None:
    keep_history(service, tmp_path)
    assert service.series("A")["scene"] == ["s1", "s2", "g4"]
    assert service.series("B")["scene"] == ["s1", "s2", "g4"]
    assert service.series("B", min_valid=0.49)["scene"] == ["s1", "s2", "s3", "g4"]
    assert service.series("A", min_valid=0.49)["scene"] == ["s1", "s2", "g4"]
    half = service.series("B", min_valid=0, stat="mean,valid_share,pixels")
    assert half["valid_share"][2] == pytest.approx(0.5, abs=1e-4)
    assert half["pixels"][2] == pytest.approx(32, abs=1e-2)
    assert half["mean"][2] == pytest.approx(CANOPY_NDVI, abs=1e-6)

    hidden = service.series("A", min_valid=0, stat=",".join(STATS))
    assert hidden["scene"][2] == "s3"
    assert [hidden[stat][2] for stat in STATS[:7]] == [None] * 7
    assert (hidden["valid_share"][2], hidden["pixels"][2]) == (0, 0)
    query = {"index": "ndvi,red", "stat": "mean,sd", "min_valid": 0, "format": "csv"}
    text = service.call("GET", "/v1/parcels/A/series", params=query).text
    rows = [row for row in csv.DictReader(io.StringIO(text)) if row["scene"] == "s3"]
    assert [(row["index"], row["mean"], row["sd"]) for row in rows] == [
        ("ndvi", "", ""),
        ("red", "", ""),
    ]
    # A parcel that no scene shows has no looks at all.
    assert service.series("C", min_valid=0)["scene"] == []


def test_a_series_may_be_of_one_sensor_or_as_known_at_a_time(
    service: Service, tmp_path: Path
) -> None:
    before = written(now())
    keep_history(service, tmp_path)
    assert service.series("B", sensor="generic")["scene"] == ["g4"]
    assert service.series("B", sensor="sentinel-2-l2a")["scene"] == ["s1", "s2"]
    assert service.series("B", sensor="another")["scene"] == []

    assert service.series("B", as_of=before)["scene"] == []
    known = written(now())
    later = {**SCENE, "ref": "s5", "acquired_at": "2024-06-18T10:10:31Z"}
    service.post_scene(later, uniform_scene(tmp_path / "s5", CANOPY))
    service.call("DELETE", "/v1/scenes/s1")
    assert service.series("B")["scene"] == ["s2", "g4", "s5"]
    # Time of knowing, not of acquisition; filters hold beside it.
    assert service.series("B", as_of=known)["scene"] == ["s1", "s2", "g4"]
    past = {"as_of": known, "sensor": "sentinel-2-l2a", "to": TIMES["s2"]}
    assert service.series("B", **past)["scene"] == ["s1"]
    assert service.series("B", as_of=written(now()))["scene"] == ["s2", "g4", "s5"]


def problem(answer: httpx.Response) -> tuple[int, str, list[str]]:
    """Return the status and type of a problem, and the parameters that it names."""
    assert answer.headers["Content-Type"] == "application/problem+json"
    document = answer.json()
    named = [error["parameter"] for error in document.get("errors", [])]
    return answer.status_code, document["type"].removeprefix("/problems/"), named


REFUSED: list[tuple[str, dict[str, Any], str]] = [
    ("series", {"index": "ndvy"}, "index"),
    ("series", {"index": "ndvi,"}, "index"),
    ("series", {"index": "NDVI"}, "index"),
    # It is an index, but none that is watched, so there are no figures of it.
    ("series", {"index": "evi"}, "index"),
    ("series", {"stat": "median"}, "stat"),
    ("series", {"index": "red", "stat": "p50"}, "stat"),
    ("series", {"min_valid": "1.1"}, "min_valid"),
    ("series", {"min_valid": "nan"}, "min_valid"),
    ("series", {"from": "2024-06-03T10:10:31"}, "from"),
    ("series", {"from": "yesterday"}, "from"),
    ("series", {"from": "2024-06-08", "to": "2024-06-08"}, "to"),
    ("series", {"as_of": "2024-02-30"}, "as_of"),
    ("series", {"format": "parquet"}, "format"),
    # Not built, so unknown: never accepted and ignored.
    ("series", {"every": "P10D"}, "every"),
    ("series", {"smooth": "whittaker"}, "smooth"),
    ("series", {"with": "forecast"}, "with"),
    ("overview", {"index": "ndvy"}, "index"),
    ("overview", {"index": "ndvi,ndmi"}, "index"),
    ("overview", {"at": "2024-06-03 noon"}, "at"),
    ("overview", {"format": "xml"}, "format"),
    ("overview", {"limit": 10}, "limit"),
]


def test_what_is_unknown_is_refused_by_the_name_of_the_parameter(service: Service) -> None:
    service.put_parcels(square("A", col=5, row=5))
    paths = {"series": "/v1/parcels/A/series", "overview": "/v1/overview"}
    for page, params, parameter in REFUSED:
        answer = service.call("GET", paths[page], params=params)
        assert problem(answer) == (422, "invalid-parameter", [parameter]), (page, params)
    missing = service.call("GET", "/v1/parcels/Z/series")
    assert problem(missing) == (404, "parcel-not-found", [])
    # The parcel's fault, if any, is told only to those who ask for something there is.
    missing = service.call("GET", "/v1/parcels/Z/series", params={"index": "ndvy"})
    assert problem(missing) == (422, "invalid-parameter", ["index"])


def long_rows(answer: Any) -> list[dict[str, Any]]:
    """Return a JSON series as rows of the CSV form."""
    return [
        {
            "parcel": answer["parcel"],
            "index": index,
            **dict(zip(columns, values, strict=True)),
        }
        for index, columns in answer["indices"].items()
        for values in zip(*columns.values(), strict=True)
    ]


def test_csv_and_json_hold_the_same_figures(service: Service, tmp_path: Path) -> None:
    keep_history(service, tmp_path)
    query = {"stat": ",".join(STATS), "min_valid": 0}
    answer = service.get("/v1/parcels/A/series", params=query)
    text = service.call("GET", "/v1/parcels/A/series", params={**query, "format": "csv"}).text
    reader = csv.DictReader(io.StringIO(text, newline=""))
    rows = list(reader)
    assert reader.fieldnames == [
        *("parcel", "index", "observed_at", "scene", "sensor", "crop"),
        *STATS,
    ]
    expected = long_rows(answer)
    assert len(rows) == len(expected) > 12
    for row, wanted in zip(rows, expected, strict=True):
        assert {k: (v if k not in STATS else float(v)) for k, v in row.items() if v != ""} == {
            k: v for k, v in wanted.items() if v is not None
        }


ACCEPTED = {
    "*/*": "application/json",
    "application/json": "application/json",
    "text/csv": "text/csv",
    "text/*": "text/csv",
    "text/csv;q=0.5, application/json;q=0.9": "application/json",
    "application/json;q=0.5, text/csv": "text/csv",
    "image/png, text/csv;q=0.1": "text/csv",
    "text/csv;q=0, */*": "application/json",
}


def test_the_media_type_follows_accept(service: Service) -> None:
    service.put_parcels(square("A", col=5, row=5))
    for accept, media_type in ACCEPTED.items():
        for path in ("/v1/parcels/A/series", "/v1/overview"):
            answer = service.call("GET", path, headers={"Accept": accept})
            found = answer.headers["Content-Type"].partition(";")[0]
            assert (answer.status_code, found) == (200, media_type), (path, accept)
            assert "Accept" in answer.headers["Vary"]


def test_format_wins_over_accept_and_what_cannot_be_written_is_406(service: Service) -> None:
    service.put_parcels(square("A", col=5, row=5))
    for path in ("/v1/parcels/A/series", "/v1/overview"):
        answer = service.call(
            "GET", path, params={"format": "csv"}, headers={"Accept": "application/json"}
        )
        assert answer.headers["Content-Type"].startswith("text/csv")
        for accept in ("image/png", "application/vnd.apache.parquet", "text/csv;q=0"):
            answer = service.call("GET", path, headers={"Accept": accept})
            assert problem(answer) == (406, "not-acceptable", [])


def test_an_unchanged_series_is_304_until_a_scene_changes_it(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(square("A", col=5, row=5), square("far", col=300, row=300))
    service.post_scene(SCENE, uniform_scene(tmp_path / "s1", CANOPY))
    path = "/v1/parcels/A/series"

    def asked(tag: str, **params: Any) -> tuple[int, str]:
        answer = service.call("GET", path, params=params, headers={"If-None-Match": tag})
        return answer.status_code, answer.headers["ETag"]

    status, tag = asked('"none"')
    assert status == 200
    assert asked(tag) == (304, tag)
    assert asked(f'"other", W/{tag}') == (304, tag)
    # Another question has another tag.
    tags = {asked(tag, **params)[1] for params in ({}, {"stat": "sd"}, {"format": "csv"})}
    assert len(tags) == 3
    service.put_parcels(square("far", col=301, row=300))
    assert asked(tag) == (304, tag)
    service.call("DELETE", "/v1/scenes/s1")
    # What rests on the scene is judged anew, which may change an answer once more.
    service.call("POST", "/v1/observations", json=[], headers={"Prefer": "wait=30"})
    status, withdrawn = asked(tag)
    assert (status, withdrawn != tag) == (200, True)
    assert asked(withdrawn)[0] == 304


def test_the_overview_has_every_parcel_s_newest_look(service: Service, tmp_path: Path) -> None:
    keep_history(service, tmp_path)
    a, b, c = service.get("/v1/overview")["parcels"]
    assert a == {
        "parcel": "A",
        "name": None,
        "holding": "north",
        "crop": None,
        "index": "ndvi",
        "observed_at": TIMES["g4"],
        "scene": "g4",
        "value": pytest.approx(CANOPY_NDVI, abs=1e-6),
        # Nothing says what grew there, so nothing was expected.
        "departure": None,
        "valid_share": pytest.approx(1, abs=1e-4),
        "alerts": [],
    }
    assert (b["parcel"], b["name"], b["scene"]) == ("B", "Long strip", "g4")
    # A parcel without a look is there, without figures.
    assert c["parcel"] == "C"
    assert [c[m] for m in ("observed_at", "scene", "value", "valid_share")] == [None] * 4
    # What the newest scene does not feed, an older one answers; an unseen look never does.
    a, b, _ = service.get("/v1/overview", params={"index": "ndmi"})["parcels"]
    assert (a["scene"], b["scene"]) == ("s2", "s2")
    assert a["value"] == pytest.approx((0.30 - 0.35) / (0.30 + 0.35), abs=1e-6)
    a, _, _ = service.get("/v1/overview", params={"index": "red"})["parcels"]
    assert (a["scene"], a["value"]) == ("g4", pytest.approx(0.04, abs=1e-6))


def test_the_overview_looks_back(service: Service, tmp_path: Path) -> None:
    keep_history(service, tmp_path)

    def scenes(at: str, **params: Any) -> list[str | None]:
        answer = service.get("/v1/overview", params={"at": at, **params})
        return [entry["scene"] for entry in answer["parcels"]]

    assert scenes("2024-05-29T10:10:30Z") == [None, None, None]
    assert scenes(TIMES["s1"]) == ["s1", "s1", None]
    assert scenes("2024-06-07") == ["s2", "s2", None]
    assert scenes("2024-06-09") == ["s2", "s2", None]
    assert scenes("2030-01-01") == ["g4", "g4", None]
    # Far back the newest look may lie many stretches of storage before.
    assert scenes("2029-01-01", index="ndmi") == ["s2", "s2", None]
    then = service.get("/v1/overview", params={"at": "2024-06-04"})["parcels"]
    assert [entry["crop"] for entry in then] == ["winter barley", None, None]
    assert then[0]["value"] == pytest.approx(STUBBLE_NDVI, abs=1e-6)
    # Now, and at this very time, are the same question.
    assert service.get("/v1/overview", params={"at": written(now())}) == service.get("/v1/overview")


def test_the_overview_is_json_csv_and_geojson_alike(service: Service, tmp_path: Path) -> None:
    keep_history(service, tmp_path)
    for params in ({}, {"at": "2024-06-04"}):
        told = service.get("/v1/overview", params=params)["parcels"]
        answer = service.call("GET", "/v1/overview", params={**params, "format": "geojson"})
        assert answer.headers["Content-Type"] == "application/geo+json"
        features = answer.json()["features"]
        assert answer.json()["type"] == "FeatureCollection"
        assert [feature["properties"] for feature in features] == told
        assert [feature["id"] for feature in features] == ["A", "B", "C"]
        parcels = service.get("/v1/parcels")["features"]
        assert [f["geometry"] for f in features] == [p["geometry"] for p in parcels]
        text = service.call("GET", "/v1/overview", params={**params, "format": "csv"}).text
        rows = list(csv.DictReader(io.StringIO(text, newline="")))
        numbers = ("value", "departure", "valid_share")
        assert [
            {k: float(v) if k in numbers and v else v or None for k, v in row.items()}
            for row in rows
        ] == [{**entry, "alerts": " ".join(entry["alerts"]) or None} for entry in told]


def test_the_overview_is_narrowed_by_holding_crop_and_key(service: Service, tmp_path: Path) -> None:
    keep_history(service, tmp_path)

    def parcels(*, key: str | None = None, **params: Any) -> list[str]:
        answer = service.get("/v1/overview", params=params, key=key)
        return [entry["parcel"] for entry in answer["parcels"]]

    assert parcels(holding="north") == ["A", "C"]
    assert parcels(crop="winter barley", at="2024-06-04") == ["A"]
    assert parcels(crop="winter barley", at="2024-06-06") == []
    assert parcels(holding="nowhere") == []
    south = service.key("read", holdings=["south"])
    assert parcels(key=south) == ["B"]
    assert parcels(key=south, holding="north") == []
    assert service.get("/v1/parcels/B/series", key=south)["parcel"] == "B"
    hidden = service.call("GET", "/v1/parcels/A/series", key=south)
    assert problem(hidden) == (404, "parcel-not-found", [])
    for path in ("/v1/overview", "/v1/parcels/A/series"):
        refused = service.call("GET", path, key=service.key("ingest"))
        assert problem(refused) == (403, "scope-missing", [])
    # A retired parcel leaves the overview and keeps its series.
    service.call("DELETE", "/v1/parcels/A")
    assert parcels() == ["B", "C"]
    assert service.series("A")["scene"] == ["s1", "s2", "g4"]


def test_a_parcel_that_was_never_seen_has_no_look_now_or_then(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(square("A", col=5, row=5))
    report = service.post_scene(SCENE, uniform_scene(tmp_path / "s1", CANOPY, scl=9)).json()
    assert report["parcels_unseen"] == {"cloud": 1}
    for params in ({}, {"at": "2024-06-04"}, {"at": "2030-01-01"}):
        (entry,) = service.get("/v1/overview", params=params)["parcels"]
        assert (entry["scene"], entry["value"], entry["valid_share"]) == (None, None, None)
