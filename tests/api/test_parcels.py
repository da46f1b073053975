"""Parcels: inserted, updated, listed, retired; outlines that change, and those that are refused."""

import json
import math
import unicodedata
from collections.abc import Iterator, Mapping
from datetime import datetime
from pathlib import Path
from typing import Any

import httpx
import numpy as np
import pytest
from pyproj import Geod

from tests.serving import ORIGIN, Service, square, write_band

Feature = dict[str, Any]


def problem(answer: httpx.Response, status: int, code: str) -> dict[str, Any]:
    """Return a problem document after checking its status and type."""
    assert (answer.status_code, answer.json()["type"]) == (status, f"/problems/{code}"), answer.text
    assert answer.headers["Content-Type"] == "application/problem+json"
    document: dict[str, Any] = answer.json()
    return document


def counts(answer: httpx.Response) -> tuple[int, int, int, int]:
    """Return how many parcels were created, updated, left unchanged and rejected."""
    assert answer.status_code == 200, answer.text
    told = answer.json()
    return told["created"], told["updated"], told["unchanged"], told["rejected"]


def refs(service: Service, **params: Any) -> list[str]:
    """Return the refs of the parcels that a list answers."""
    return [f["id"] for f in service.get("/v1/parcels", params=params)["features"]]


def drawn(ref: str, *rings: list[list[float]], **properties: Any) -> Feature:
    """Return a parcel with an outline of its own."""
    return {
        "type": "Feature",
        "properties": {"ref": ref, **properties},
        "geometry": {"type": "Polygon", "coordinates": list(rings)},
    }


def ring_of(feature: Feature) -> list[list[float]]:
    """Return a parcel's outer ring."""
    ring: list[list[float]] = feature["geometry"]["coordinates"][0]
    return ring


def test_a_parcel_is_inserted_then_unchanged_then_updated(service: Service) -> None:
    sent = square("A", col=5, row=5, name="Long Field", holding="north", tags=["trial", "clay"])
    assert counts(service.put_parcels(sent)) == (1, 0, 0, 0)
    one = service.call("GET", "/v1/parcels/A")
    assert one.headers["Content-Type"] == "application/geo+json"
    feature = one.json()
    assert (feature["type"], feature["id"]) == ("Feature", "A")
    area_ha = feature["properties"].pop("area_ha")
    assert feature["properties"] == {
        "ref": "A",
        "name": "Long Field",
        "holding": "north",
        "crop": None,
        "tags": ["clay", "trial"],
        "retired_at": None,
    }
    # One hectare on the grid; the scale of UTM on its central meridian is 0.9996 (Snyder 1987).
    assert area_ha == pytest.approx(1 / 0.9996**2, abs=1e-4)
    lon, lat = zip(*ring_of(sent), strict=True)
    assert area_ha == pytest.approx(
        abs(Geod(ellps="WGS84").polygon_area_perimeter(lon, lat)[0]) / 10_000, abs=1e-4
    )
    assert {tuple(p) for p in ring_of(feature)} == {tuple(p) for p in ring_of(sent)}

    assert counts(service.put_parcels(sent)) == (0, 0, 1, 0)
    # The same outline from another corner, the other way round, with heights.
    ring = ring_of(sent)
    turned = [[*position, 120.5] for position in [*ring[2:], *ring[1:3]][::-1]]
    again = drawn("A", turned, tags=["clay", "trial", "clay"])
    assert counts(service.put_parcels(again)) == (0, 0, 1, 0)
    moved = square("A", col=6, row=5)
    assert counts(service.put_parcels(moved, square("B", col=20, row=5))) == (1, 1, 0, 0)
    assert ring_of(service.get("/v1/parcels/A")) != ring_of(feature)
    # RFC 7946, section 3.2: a ref may also be the feature's id.
    named = {**square("A", col=6, row=5), "id": "A", "properties": {}}
    assert counts(service.put_parcels(named)) == (0, 0, 1, 0)


def test_members_left_out_stay_and_null_takes_them_away(service: Service) -> None:
    where = {"col": 5.0, "row": 5.0}
    service.put_parcels(square("A", **where, name="Long Field", holding="north", tags=["x"]))

    def properties(**changed: Any) -> dict[str, Any]:
        assert counts(service.put_parcels(square("A", **where, **changed))) == (0, 1, 0, 0)
        told: dict[str, Any] = service.get("/v1/parcels/A")["properties"]
        return {name: told[name] for name in ("name", "holding", "tags")}

    assert properties(name="Short") == {"name": "Short", "holding": "north", "tags": ["x"]}
    assert properties(tags=["y"]) == {"name": "Short", "holding": "north", "tags": ["y"]}
    assert properties(holding="south", name=None) == {
        "name": None,
        "holding": "south",
        "tags": ["y"],
    }
    assert properties(holding=None, tags=None) == {"name": None, "holding": None, "tags": []}


def test_lists_are_filtered_by_box_holding_crop_and_tag_together(service: Service) -> None:
    service.put_parcels(
        square("A", col=0, row=0, holding="north", crop="maize", tags=["x", "y"]),
        square("B", col=30, row=0, holding="north", crop="winter wheat", tags=["x"]),
        square("C", col=0, row=30, holding="south", crop="maize", tags=["z"]),
        square("D", col=30, row=30),
    )
    assert refs(service) == ["A", "B", "C", "D"]
    assert refs(service, holding="north") == ["A", "B"]
    assert refs(service, crop="maize") == ["A", "C"]
    assert refs(service, tag="x") == ["A", "B"]
    assert refs(service, tag="x", crop="maize") == ["A"]
    assert refs(service, holding="south", tag="x") == []
    assert (
        refs(service, holding="none") == refs(service, crop="none") == refs(service, tag="n") == []
    )
    crops = {f["id"]: f["properties"]["crop"] for f in service.get("/v1/parcels")["features"]}
    assert crops == {"A": "maize", "B": "winter wheat", "C": "maize", "D": None}

    def box(*features: Feature) -> str:
        positions = np.array([p for feature in features for p in ring_of(feature)])
        return ",".join(str(edge) for edge in (*positions.min(axis=0), *positions.max(axis=0)))

    a, b, c = (service.get(f"/v1/parcels/{ref}") for ref in "ABC")
    assert refs(service, bbox=box(a)) == ["A"]
    assert refs(service, bbox=box(a, b)) == ["A", "B"]
    assert refs(service, bbox=box(a, c), crop="maize") == ["A", "C"]
    assert refs(service, bbox=box(a, b), holding="south") == []
    # RFC 7946, section 5.2: west is larger than east across the antimeridian.
    assert refs(service, bbox="16,40,14,60") == []
    assert refs(service, bbox="14,40,-170,60") == ["A", "B", "C", "D"]


def test_a_list_ends_after_each_parcel_was_there_exactly_once(service: Service) -> None:
    sent = [
        square(f"p {n} é/".replace("/", ""), col=3 * n, row=0, size=2, tags=["a&b"])
        for n in range(7)
    ]
    assert counts(service.put_parcels(*sent, square("other", col=0, row=20))) == (8, 0, 0, 0)

    def pages(path: str) -> Iterator[list[str]]:
        while path:
            answer = service.call("GET", path)
            yield [feature["id"] for feature in answer.json()["features"]]
            path = answer.links.get("next", {}).get("url", "")

    expected = [feature["properties"]["ref"] for feature in sent]
    for limit, sizes in [(3, [3, 3, 1]), (7, [7]), (1, [1] * 7), (1000, [7])]:
        found = list(pages(f"/v1/parcels?limit={limit}&tag=a%26b"))
        assert [len(page) for page in found] == sizes
        assert [ref for page in found for ref in page] == expected
    # A parcel that arrives while somebody pages changes nothing before its place.
    paging = pages("/v1/parcels?limit=4&tag=a%26b")
    first = next(paging)
    service.put_parcels(square("late", col=30, row=0, tags=["a&b"]))
    assert [ref for page in [first, *paging] for ref in page] == [*expected, "late"]


def test_a_ref_of_any_script_is_one_step_of_a_path(service: Service) -> None:
    names = ["Ä 1", "поле.7", "50%25", "a?b#c", "x;y", "~", "...", "2024:03"]
    service.put_parcels(*[square(name, col=4 * n, row=0, size=3) for n, name in enumerate(names)])
    for name in names:
        path = "".join(f"%{byte:02X}" for byte in name.encode())
        assert service.get(f"/v1/parcels/{path}")["id"] == name


def test_a_retired_parcel_keeps_its_history_and_is_revived_by_being_sent(
    service: Service, tmp_path: Path
) -> None:
    sent = square("A", col=5, row=5, name="Long Field")
    service.put_parcels(sent, square("B", col=20, row=20))
    post(service, tmp_path / "s1", ref="s1", acquired_at="2024-06-03T10:10:31Z")
    retired = service.call("DELETE", "/v1/parcels/A")
    assert retired.status_code == 200
    assert retired.json()["properties"]["retired_at"].endswith("Z")
    assert service.call("DELETE", "/v1/parcels/A").json() == retired.json()
    assert refs(service) == ["B"]
    assert service.get("/v1/parcels/A") == retired.json()
    assert [row["parcel"] for row in service.get("/v1/overview")["parcels"]] == ["B"]
    assert service.series("A")["scene"] == ["s1"]
    # What was acquired after it was retired is not measured; the day ahead is the latest allowed.
    later = retired.json()["properties"]["retired_at"]
    answer = post(service, tmp_path / "s2", ref="s2", acquired_at=later, value=0.3)
    assert answer["parcels_in_footprint"] == 1
    assert service.series("A")["scene"] == ["s1"]

    revived = service.put_parcels(sent)
    assert counts(revived) == (0, 1, 0, 0)
    assert [w["pointer"] for w in revived.json()["warnings"]] == ["/features/0/properties/ref"]
    assert refs(service) == ["A", "B"]
    post(service, tmp_path / "s3", ref="s3", acquired_at="2024-06-13T10:10:31Z", value=0.2)
    assert service.series("A")["scene"] == ["s1", "s3"]
    problem(service.call("DELETE", "/v1/parcels/none"), 404, "parcel-not-found")


def post(
    service: Service, folder: Path, *, ref: str, acquired_at: str, value: float = 0.1
) -> dict[str, Any]:
    """Post a scene whose NDVI differs west and east of its 20th column, and have it measured."""
    folder.mkdir()
    red = np.full((40, 40), round(value * 10_000), dtype=np.uint16)
    nir = np.full((40, 40), 4_000, dtype=np.uint16)
    nir[:, 20:] = 8_000
    scene = {
        "ref": ref,
        "sensor": "generic",
        "acquired_at": acquired_at,
        "scaling": {"scale": 0.0001, "offset": 0},
    }
    files = {
        "red": write_band(folder / "red.tif", red),
        "nir": write_band(folder / "nir.tif", nir),
    }
    answer = service.post_scene(scene, files)
    assert answer.json()["state"] == "done", answer.text
    told: dict[str, Any] = answer.json()
    return told


WEST, EAST = (0.4 - 0.1) / (0.4 + 0.1), (0.8 - 0.1) / (0.8 + 0.1)


def means(service: Service, **params: Any) -> Any:
    """Return the NDVI of parcel A by scene, to be compared within a millionth."""
    return pytest.approx(service.series("A", **params)["mean"], abs=1e-6)


def validity(service: Service) -> list[tuple[str | None, str | None]]:
    """Return from when to when parcel A's boundary versions hold."""
    versions = service.get("/v1/parcels/A/boundaries")["boundaries"]
    return [(version["valid_from"], version["valid_to"]) for version in versions]


def measured(service: Service, ref: str) -> None:
    """Wait until a scene is measured (anew)."""
    answer = service.get(f"/v1/scenes/{ref}", headers={"Prefer": "wait=30"})
    assert answer["state"] == "done"


def test_a_new_outline_holds_from_now_on_and_changes_no_past_figure(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(square("A", col=5, row=5))
    assert validity(service) == [(None, None)]
    post(service, tmp_path / "s1", ref="s1", acquired_at="2024-06-03T10:10:31Z")
    assert counts(service.put_parcels(square("A", col=25, row=5))) == (0, 1, 0, 0)
    ((_, end), (begin, _)) = validity(service)
    assert end == begin is not None
    measured(service, "s1")
    assert means(service) == [WEST]
    # Now it lies in the east.
    post(service, tmp_path / "s2", ref="s2", acquired_at=begin, value=0.1)
    assert means(service) == [WEST, EAST]


def test_an_outline_from_a_past_day_splits_the_version_and_measures_its_looks_anew(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(square("A", col=5, row=5))
    for ref, day in [("s1", "03"), ("s2", "13"), ("s3", "23")]:
        post(service, tmp_path / ref, ref=ref, acquired_at=f"2024-06-{day}T10:10:31Z")
    assert means(service) == [WEST, WEST, WEST]
    before = service.get("/v1/scenes/s3")["changed_at"]

    moved = square("A", col=25, row=5, valid_from="2024-06-10T00:00:00+02:00")
    assert counts(service.put_parcels(moved)) == (0, 1, 0, 0)
    at = "2024-06-09T22:00:00Z"
    assert validity(service) == [(None, at), (at, None)]
    for ref in ("s2", "s3"):
        measured(service, ref)
    assert means(service) == [WEST, EAST, EAST]
    assert means(service, as_of=before) == [WEST, WEST, WEST]
    generations = {s["ref"]: s["generation"] for s in service.get("/v1/scenes")["scenes"]}
    assert generations == {"s1": 1, "s2": 2, "s3": 2}
    # Sent again it is what is there.
    assert counts(service.put_parcels(moved)) == (0, 0, 1, 0)

    # One inside an existing version splits that one: it holds to that version's end only.
    # The two may be done in either order.
    done = [service.get(f"/v1/scenes/{ref}")["changed_at"] for ref in ("s2", "s3")]
    between = max(done, key=datetime.fromisoformat)
    late = "2024-06-20T00:00:00Z"
    back = square("A", col=6, row=5, valid_from=late)
    assert counts(service.put_parcels(back)) == (0, 1, 0, 0)
    measured(service, "s3")
    assert validity(service) == [
        (None, at),
        (at, "2024-06-20T00:00:00Z"),
        ("2024-06-20T00:00:00Z", None),
    ]
    assert means(service) == [WEST, EAST, WEST]
    assert means(service, as_of=between) == [WEST, EAST, EAST]
    assert means(service, as_of=before) == [WEST, WEST, WEST]
    # A correction of that version's own outline replaces it whole.
    third = square("A", col=27, row=5, valid_from=late)
    assert counts(service.put_parcels(third)) == (0, 1, 0, 0)
    measured(service, "s3")
    assert len(validity(service)) == 3
    assert means(service) == [WEST, EAST, EAST]


def test_a_parcel_that_begins_has_no_look_before(service: Service, tmp_path: Path) -> None:
    service.put_parcels(square("A", col=5, row=5, valid_from="2024-06-10T00:00:00Z"))
    assert validity(service) == [("2024-06-10T00:00:00Z", None)]
    for ref, day in [("s1", "03"), ("s2", "13")]:
        post(service, tmp_path / ref, ref=ref, acquired_at=f"2024-06-{day}T10:10:31Z")
    assert service.series("A")["scene"] == ["s2"]
    # An outline for the time before is added, up to where the first begins.
    service.put_parcels(square("A", col=25, row=5, valid_from="2024-06-01T00:00:00Z"))
    measured(service, "s1")
    assert [begin for begin, _ in validity(service)] == [
        "2024-06-01T00:00:00Z",
        "2024-06-10T00:00:00Z",
    ]
    assert means(service) == [EAST, WEST]


BOW_TIE = [[15.0, 49.6], [15.002, 49.602], [15.002, 49.6], [15.0, 49.602], [15.0, 49.6]]
GOOD = ring_of(square("x", col=0, row=0))
BODY: Mapping[str, Any] = {"type": "FeatureCollection"}


def swapped(ring: list[list[float]]) -> list[list[float]]:
    return [[lat, lon] for lon, lat in ring]


def round_one(vertices: int) -> list[list[float]]:
    """Return a ring of so many positions."""
    turns = [2 * math.pi * n / (vertices - 1) for n in range(vertices - 1)]
    ring = [[15 + 0.01 * math.cos(turn), 49.6 + 0.01 * math.sin(turn)] for turn in turns]
    return [*ring, ring[0]]


def with_geometry(geometry: Any) -> Feature:
    return {"type": "Feature", "properties": {"ref": "bad"}, "geometry": geometry}


# What is wrong, the problem, the pointer below the feature, and what the detail has to say.
FAULTY: list[tuple[Feature, str, str, str]] = [
    (
        drawn("bad", BOW_TIE),
        "invalid-geometry",
        "/geometry",
        "at longitude 15.001, latitude 49.601",
    ),
    (drawn("bad", GOOD[:-1]), "invalid-geometry", "/geometry/coordinates/0", "the last equal"),
    (
        with_geometry({"type": "Point", "coordinates": GOOD[0]}),
        "invalid-geometry",
        "/geometry",
        "points, lines",
    ),
    (
        with_geometry({"type": "LineString", "coordinates": GOOD}),
        "invalid-geometry",
        "/geometry",
        "points, lines",
    ),
    (with_geometry(None), "invalid-geometry", "/geometry", "Polygon or MultiPolygon"),
    (
        with_geometry({"type": "Polygon", "coordinates": []}),
        "invalid-geometry",
        "/geometry/coordinates",
        "non-empty",
    ),
    (
        drawn("bad", swapped([[lon + 85, lat] for lon, lat in GOOD])),
        "invalid-geometry",
        "/geometry/coordinates/0",
        "longitude first",
    ),
    (
        drawn("bad", [[ORIGIN[0] + x, ORIGIN[1] + y] for x, y in [(0, 0), (9, 0), (9, 9), (0, 0)]]),
        "invalid-geometry",
        "/geometry/coordinates/0",
        "WGS 84 degrees",
    ),
    (
        drawn("bad", [[15, 49], [15.5, 49], [15, 49], [15, 49]]),
        "invalid-geometry",
        "/geometry",
        "not valid",
    ),
    (
        drawn("bad", [[15, 49], [15.01, 49.01], [15.02, 49.02], [15, 49]]),
        "invalid-geometry",
        "/geometry",
        "no area",
    ),
    (
        drawn("bad", [[0, 0], [60, 0], [60, 60], [0, 60], [0, 0]]),
        "invalid-geometry",
        "/geometry",
        "at most 100,000 ha",
    ),
    (drawn("bad", round_one(10_001)), "invalid-geometry", "/geometry", "10,000 vertices"),
    (
        {
            **square("bad", col=0, row=0),
            "geometry": {"type": "Polygon", "coordinates": [GOOD], "crs": 1},
        },
        "invalid-geometry",
        "/geometry",
        "nothing else",
    ),
    (square("..", col=0, row=0), "invalid-input", "/properties/ref", "neither . nor .."),
    (square(".", col=0, row=0), "invalid-input", "/properties/ref", "neither . nor .."),
    (square("a/b", col=0, row=0), "invalid-input", "/properties/ref", "no /"),
    (square("=1+1", col=0, row=0), "invalid-input", "/properties/ref", "formula"),
    (square("@x", col=0, row=0), "invalid-input", "/properties/ref", "formula"),
    (square("-x", col=0, row=0), "invalid-input", "/properties/ref", "formula"),
    (square("+x", col=0, row=0), "invalid-input", "/properties/ref", "formula"),
    (square(" x", col=0, row=0), "invalid-input", "/properties/ref", "blank"),
    (square("x\u0000", col=0, row=0), "invalid-input", "/properties/ref", "printable"),
    (square("x\u202ey", col=0, row=0), "invalid-input", "/properties/ref", "printable"),
    (square("", col=0, row=0), "invalid-input", "/properties/ref", ""),
    (square("x" * 101, col=0, row=0), "invalid-input", "/properties/ref", "100"),
    (
        square(unicodedata.normalize("NFD", "Ä1"), col=0, row=0),
        "invalid-input",
        "/properties/ref",
        "NFC",
    ),
    ({**with_geometry({}), "properties": {}}, "invalid-input", "/properties/ref", "needs a `ref`"),
    (square("bad", col=0, row=0, zebra=1), "invalid-input", "/properties/zebra", ""),
    ({**square("bad", col=0, row=0), "zebra": 1}, "invalid-input", "/zebra", ""),
    ({**square("bad", col=0, row=0), "type": "feature"}, "invalid-input", "/type", ""),
    (square("bad", col=0, row=0, holding=7), "invalid-input", "/properties/holding", ""),
    (square("bad", col=0, row=0, tags="x"), "invalid-input", "/properties/tags", ""),
    (square("bad", col=0, row=0, crop="=x"), "invalid-input", "/properties/crop", "formula"),
    (
        square("bad", col=0, row=0, valid_from="2024-06-10T00:00:00"),
        "invalid-input",
        "/properties/valid_from",
        "with its offset",
    ),
    (
        square("bad", col=0, row=0, valid_from="2024-06-31T00:00:00Z"),
        "invalid-input",
        "/properties/valid_from",
        "no such date",
    ),
]


def test_a_faulty_parcel_is_refused_where_it_is_wrong_and_nothing_of_the_batch_lands(
    service: Service,
) -> None:
    good = square("good", col=20, row=20)
    for faulty, code, pointer, says in FAULTY:
        document = problem(service.put_parcels(good, faulty), 422, code)
        assert [e["pointer"] for e in document["errors"]] == [f"/features/1{pointer}"], document
        assert says in document["errors"][0]["detail"], document
        assert document["errors_total"] == 1
        assert refs(service) == []


def test_a_body_that_is_no_feature_collection_is_refused(service: Service) -> None:
    for body, pointer in [
        ([], ""),
        ("x", ""),
        ({}, ""),
        (square("A", col=0, row=0), "/geometry"),
        ({**BODY, "features": {}}, ""),
        ({**BODY, "features": None}, ""),
        ({"features": []}, ""),
        ({**BODY, "features": [], "crs": {"type": "name"}}, "/crs"),
        ({**BODY, "features": [], "a/b": 1}, "/a~1b"),
        ({**BODY, "features": [7]}, "/features/0"),
        ({**BODY, "features": [[]]}, "/features/0"),
    ]:
        answer = service.call("PUT", "/v1/parcels", json=body)
        document = problem(answer, 422, "invalid-input")
        assert document["errors"][0]["pointer"] == pointer
    for text in ("", "{", '{"type": "FeatureCollection", "features": [', "{} x", "\xff"):
        answer = service.call(
            "PUT",
            "/v1/parcels",
            content=text.encode("latin-1"),
            headers={"Content-Type": "application/geo+json"},
        )
        assert "errors" not in problem(answer, 400, "malformed-json")
    assert counts(service.call("PUT", "/v1/parcels", json={**BODY, "features": []})) == (0, 0, 0, 0)


def test_json_that_is_nested_without_end_is_refused_at_once(service: Service) -> None:
    """Without a limit, 100 kB of it held the process up for minutes."""
    deep = "[" * 1_000_000
    for method, path, text in [
        ("PUT", "/v1/parcels", '{"type":"FeatureCollection","features":[' + deep),
        ("PUT", "/v1/parcels", '{"type":' + deep),
        ("POST", "/v1/seasons", deep),
        ("POST", "/v1/seasons", '{"parcel":' + deep),
    ]:
        answer = service.call(
            method, path, content=text, headers={"Content-Type": "application/json"}, timeout=10
        )
        assert "levels deep" in problem(answer, 422, "invalid-input")["detail"]


def test_a_parcel_twice_in_one_batch_is_refused_naming_the_first(service: Service) -> None:
    sent = (
        square("A", col=0, row=0),
        square("B", col=20, row=0),
        square("A", col=0, row=20),
    )
    document = problem(service.put_parcels(*sent), 422, "invalid-input")
    (error,) = document["errors"]
    assert error["pointer"] == "/features/2/properties/ref"
    assert "Feature 0" in error["detail"]
    assert refs(service) == []


def test_a_lenient_batch_keeps_the_good_and_lists_the_rest(service: Service) -> None:
    lenient = {"Prefer": "respond-async, handling=lenient"}
    sent = (
        square("A", col=0, row=0),
        drawn("bad", BOW_TIE),
        square("B", col=20, row=0),
        square("..", col=0, row=20),
        square("A", col=0, row=20),
    )
    answer = service.put_parcels(*sent, headers=lenient)
    assert counts(answer) == (2, 0, 0, 3)
    assert [error["pointer"] for error in answer.json()["errors"]] == [
        "/features/1/geometry",
        "/features/3/properties/ref",
        "/features/4/properties/ref",
    ]
    assert refs(service) == ["A", "B"]
    # At most a hundred are listed; the count is of all.
    many = [square("..", col=0, row=0) for _ in range(130)]
    answer = service.put_parcels(*many, headers=lenient)
    assert counts(answer) == (0, 0, 0, 130)
    assert len(answer.json()["errors"]) == 100
    document = problem(service.put_parcels(*many), 422, "invalid-input")
    assert (len(document["errors"]), document["errors_total"]) == (100, 130)
    strict = service.put_parcels(*sent, headers={"Prefer": "handling=strict"})
    assert strict.status_code == 422


def test_crossing_rings_are_mended_only_on_request_and_reported(service: Service) -> None:
    mended = service.put_parcels(
        square("A", col=20, row=20), drawn("B", BOW_TIE), params={"repair": "true"}
    )
    assert counts(mended) == (2, 0, 0, 0)
    (warning,) = mended.json()["warnings"]
    area_ha = service.get("/v1/parcels/B")["properties"]["area_ha"]
    assert warning["pointer"] == "/features/1/geometry"
    assert f"{area_ha:.2f} ha" in warning["detail"]
    geometry = service.get("/v1/parcels/B")["geometry"]
    assert (geometry["type"], len(geometry["coordinates"])) == ("MultiPolygon", 2)
    problem(
        service.put_parcels(drawn("C", BOW_TIE), params={"repair": "false"}),
        422,
        "invalid-geometry",
    )
    problem(
        service.put_parcels(drawn("C", BOW_TIE), params={"repair": "perhaps"}),
        422,
        "invalid-parameter",
    )


def test_strong_overlaps_are_kept_with_a_warning(service: Service) -> None:
    assert service.put_parcels(square("A", col=0, row=0)).json()["warnings"] == []
    answer = service.put_parcels(
        square("touching", col=-10, row=0),
        square("a third over", col=7, row=0),
        square("most over", col=0, row=2),
        square("inside", col=2, row=2, size=2),
    )
    assert counts(answer) == (4, 0, 0, 0)
    told = {(w["pointer"], w["detail"]) for w in answer.json()["warnings"]}
    assert ("/features/2/geometry", "Overlaps parcel A by 80% of the smaller one.") in told
    assert ("/features/3/geometry", "Overlaps parcel A by 100% of the smaller one.") in told
    assert {pointer for pointer, _ in told} == {"/features/2/geometry", "/features/3/geometry"}
    # Who sends what is there is not told again, nor of parcels that are retired.
    assert service.put_parcels(square("inside", col=2, row=2, size=2)).json()["warnings"] == []
    for ref in ("A", "most over", "inside"):
        service.call("DELETE", f"/v1/parcels/{ref}")
    assert service.put_parcels(square("next", col=0, row=0)).json()["warnings"] == []


FAULTY_QUERIES = [
    "bbox=1,2,3",
    "bbox=1,2,3,x",
    "bbox=10,60,20,50",
    "bbox=500000,5500000,500100,5500100",
    "bbox=nan,nan,nan,nan",
    "limit=0",
    "limit=1001",
    "limit=x",
    "cursor=x",
    "cursor=WyJ4Il0",
    "cursor=Wy0xXQ",
    "cursor=WzEwMDAwMDAwMDAwMDAwMDAwMDAwMDAwXQ",
    "unseen_days=0",
    "unseen_weeks=3",
]


def test_a_faulty_list_parameter_is_named(service: Service) -> None:
    for query in FAULTY_QUERIES:
        document = problem(service.call("GET", f"/v1/parcels?{query}"), 422, "invalid-parameter")
        assert [error["parameter"] for error in document["errors"]] == [query.partition("=")[0]]


def test_geojson_is_taken_by_either_media_type(service: Service) -> None:
    body = json.dumps({**BODY, "features": [square("A", col=0, row=0)]})
    for media_type in ("application/geo+json", "Application/JSON; charset=utf-8"):
        headers = {"Content-Type": media_type}
        answer = service.call("PUT", "/v1/parcels", content=body, headers=headers)
        assert answer.status_code == 200
    for media_type in ("text/csv", "application/x-www-form-urlencoded"):
        headers = {"Content-Type": media_type}
        answer = service.call("PUT", "/v1/parcels", content=body, headers=headers)
        problem(answer, 415, "unsupported-media-type")
