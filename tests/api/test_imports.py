"""Parcels from files: the same as put, whatever the format, and nothing of a file that is wrong."""

import json
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import httpx
import numpy as np
import pytest
import shapely
from pyproj import CRS, Transformer

from tests.outline_files import (
    Drawn,
    field_at,
    geojson,
    geopackage,
    in_degrees,
    zipped_shapefile,
)
from tests.serving import Service, square

CROSSING = shapely.Polygon(
    [(500_000, 5_500_000), (500_200, 5_500_200), (500_200, 5_500_000), (500_000, 5_500_200)]
)
WRITERS = {"a.gpkg": geopackage, "a.zip": zipped_shapefile, "a.geojson": geojson}
ALL_FIELDS = {"name_field": "title", "holding_field": "owner", "crop_field": "grown"}
LENIENT = {"Prefer": "handling=lenient"}


def send(
    service: Service,
    file: Path,
    *,
    key: str | None = None,
    headers: Mapping[str, str] | None = None,
    params: Mapping[str, str] | None = None,
    **fields: str,
) -> httpx.Response:
    """Send a file with fields, by default only that of the ref."""
    return service.call(
        "POST",
        "/v1/parcels/import",
        data={"ref_field": "ref", **fields},
        files={"file": (file.name, file.read_bytes())},
        key=key,
        headers=headers or {},
        params=params or {},
    )


def told(answer: httpx.Response) -> tuple[int, int, int, int]:
    """Return how many parcels were created, updated, left unchanged and rejected."""
    assert answer.status_code == 200, answer.text
    body = answer.json()
    return body["created"], body["updated"], body["unchanged"], body["rejected"]


def problem(answer: httpx.Response, code: str, *, status: int = 422) -> dict[str, Any]:
    """Return a problem document after checking its status and type."""
    assert (answer.status_code, answer.json()["type"]) == (status, f"/problems/{code}"), answer.text
    document: dict[str, Any] = answer.json()
    return document


def faults(document: Mapping[str, Any]) -> list[tuple[str, str]]:
    return [(error["pointer"], error["detail"]) for error in document["errors"]]


def parcels(service: Service) -> dict[str, Any]:
    """Return all parcels as answered, by ref."""
    found = service.get("/v1/parcels", params={"limit": 1000})["features"]
    return {feature["id"]: feature for feature in found}


def round_field(ref: str, *, vertices: int, col: float = 0) -> Drawn:
    """Return a round field of so many vertices."""
    turns = np.linspace(0, 2 * np.pi, vertices)[:-1]
    ring = np.column_stack([np.cos(turns), np.sin(turns)]) * 90
    shape = shapely.Polygon(ring + np.array([500_100 + 10 * col, 5_499_900]))
    return Drawn(shape=shape, attributes={"ref": ref})


def many_vertices(count: int = 30) -> list[Drawn]:
    """Return fields of more vertices together than a request takes."""
    return [round_field(f"R{number}", vertices=9_000, col=20 * number) for number in range(count)]


HOLED = shapely.box(500_000, 5_499_000, 500_900, 5_499_900).difference(
    shapely.box(500_100, 5_499_100, 500_200, 5_499_200)
)
SENT = (
    field_at("A", col=5, row=5, title="Lange Äcker", owner="north", grown="maize"),
    Drawn(
        shape=shapely.MultiPolygon([HOLED, shapely.box(502_000, 5_499_000, 502_300, 5_499_300)]),
        attributes={"ref": "B", "title": "Loch und Insel", "owner": "north", "grown": "oats"},
    ),
    field_at("C", col=30, row=5),
)


def test_each_format_gives_the_parcels_that_put_gives(service: Service, tmp_path: Path) -> None:
    features = [
        {
            "type": "Feature",
            "properties": {
                name: one.attributes[field]
                for name, field in zip(
                    ("ref", "name", "holding", "crop"),
                    ("ref", "title", "owner", "grown"),
                    strict=True,
                )
                if field in one.attributes
            },
            "geometry": json.loads(shapely.to_geojson(in_degrees(one.shape))),
        }
        for one in SENT
        if one.shape is not None
    ]
    assert told(service.put_parcels(*features)) == (3, 0, 0, 0)
    put = parcels(service)
    assert put["B"]["geometry"]["type"] == "MultiPolygon"
    assert {ref: one["properties"]["crop"] for ref, one in put.items()} == {
        "A": "maize",
        "B": "oats",
        "C": None,
    }
    for name, write in WRITERS.items():
        file = write(tmp_path / name, *SENT)
        # The very outline, to the last bit, is there already.
        assert told(send(service, file, **ALL_FIELDS)) == (0, 0, 3, 0), name
        assert parcels(service) == put


@pytest.mark.parametrize("name", WRITERS)
def test_a_file_is_inserted_then_updated_and_empty_fields_leave_what_is_there(
    service: Service, tmp_path: Path, name: str
) -> None:
    write = WRITERS[name]
    answer = send(service, write(tmp_path / name, *SENT), **ALL_FIELDS)
    assert told(answer) == (3, 0, 0, 0)
    assert answer.json()["dry_run"] is False
    first = parcels(service)
    assert first["A"]["properties"]["name"] == "Lange Äcker"
    assert first["A"]["properties"]["holding"] == "north"
    changed = (
        field_at("A", col=5, row=5, title="", owner=None, grown="maize"),
        field_at("C", col=31, row=5, title="Moved"),
        field_at("D", col=60, row=60),
    )
    assert told(send(service, write(tmp_path / name, *changed), **ALL_FIELDS)) == (1, 1, 1, 0)
    now = parcels(service)
    assert now["A"] == first["A"]
    assert now["C"]["properties"]["name"] == "Moved"
    assert now["C"]["geometry"] != first["C"]["geometry"]
    # Without the field's name a file says nothing of names.
    again = field_at("C", col=31, row=5, title="Other")
    assert told(send(service, write(tmp_path / name, again))) == (0, 0, 1, 0)


def test_whole_numbers_are_refs_and_a_geojson_feature_may_have_its_ref_as_id(
    service: Service, tmp_path: Path
) -> None:
    one = field_at("x", number=7, share=12.0)
    for name, write in WRITERS.items():
        file = write(tmp_path / name, one)
        assert told(send(service, file, ref_field="number")) in ((1, 0, 0, 0), (0, 0, 1, 0))
        assert told(send(service, file, ref_field="share")) in ((1, 0, 0, 0), (0, 0, 1, 0))
    assert sorted(parcels(service)) == ["12", "7"]
    feature = {**square("unused", col=50, row=50), "id": "by-id", "properties": {}}
    file = tmp_path / "id.geojson"
    file.write_text(json.dumps({"type": "FeatureCollection", "features": [feature]}))
    assert told(send(service, file, ref_field="id")) == (1, 0, 0, 0)
    fraction = geopackage(tmp_path / "f.gpkg", field_at("x", share=12.5))
    assert faults(problem(send(service, fraction, ref_field="share"), "invalid-input")) == [
        ("/file/features/0/properties/share", "Row 1: send text or a whole number.")
    ]


def test_a_dry_run_says_what_would_happen_and_keeps_nothing(
    service: Service, tmp_path: Path
) -> None:
    assert told(send(service, geopackage(tmp_path / "0.gpkg", *SENT))) == (3, 0, 0, 0)
    before = parcels(service)
    file = geopackage(
        tmp_path / "1.gpkg",
        SENT[0],
        field_at("C", col=31, row=5, owner="new holding", grown="beet"),
        field_at("D", col=31, row=5.5),
    )
    rehearsed = send(service, file, dry_run="true", **ALL_FIELDS)
    assert told(rehearsed) == (1, 2, 0, 0)
    assert rehearsed.json()["dry_run"] is True
    assert parcels(service) == before
    assert service.get("/v1/parcels", params={"holding": "new holding"})["features"] == []
    done = send(service, file, **ALL_FIELDS)
    assert {**done.json(), "dry_run": True} == rehearsed.json()
    assert any("Overlaps parcel C" in warning["detail"] for warning in done.json()["warnings"])
    # What would be refused is refused.
    wrong = geopackage(tmp_path / "2.gpkg", field_at("E"), Drawn(shape=CROSSING))
    document = problem(send(service, wrong, dry_run="true"), "invalid-input")
    assert [pointer for pointer, _ in faults(document)] == ["/file/features/1/properties/ref"]


@pytest.mark.parametrize("name", WRITERS)
def test_faults_name_feature_and_row_and_nothing_of_the_file_lands_unless_lenient(
    service: Service, tmp_path: Path, name: str
) -> None:
    sent = (
        field_at("A"),
        Drawn(shape=CROSSING, attributes={"ref": "crossing"}),
        field_at("a/b"),
        Drawn(shape=None, attributes={"ref": "none"}),
        field_at("A", col=20),
        field_at("B", col=40, title="=1+1", owner="/", grown="x" * 40),
        field_at("", col=60),
        field_at("C", col=80),
    )
    file = WRITERS[name](tmp_path / name, *sent)
    document = problem(send(service, file, **ALL_FIELDS), "invalid-input")
    at = "/file/features"
    found = faults(document)
    assert [pointer for pointer, _ in found] == [
        f"{at}/1/geometry",
        f"{at}/2/properties/ref",
        f"{at}/3/geometry",
        f"{at}/4/properties/ref",
        f"{at}/5/properties/title",
        f"{at}/5/properties/owner",
        f"{at}/6/properties/ref",
    ]
    assert document["errors_total"] == len(found)
    called = {"a.gpkg": "Row 2: ", "a.zip": "Record 2: ", "a.geojson": ""}[name]
    assert found[0][1].startswith(f"{called}The outline is not valid: self-intersection at long")
    assert "Feature 0 has the same ref" in found[3][1]
    assert "a/b" not in json.dumps(document)
    assert parcels(service) == {}

    answer = send(service, file, headers=LENIENT, **ALL_FIELDS)
    assert told(answer) == (2, 0, 0, 6)
    assert [error["pointer"] for error in answer.json()["errors"]] == [p for p, _ in found]
    assert sorted(parcels(service)) == ["A", "C"]


def test_crossing_rings_are_mended_on_request_and_reported(
    service: Service, tmp_path: Path
) -> None:
    file = geopackage(tmp_path / "a.gpkg", Drawn(shape=CROSSING, attributes={"ref": "X"}))
    answer = send(service, file, params={"repair": "true"})
    assert told(answer) == (1, 0, 0, 0)
    (warning,) = answer.json()["warnings"]
    assert warning["pointer"] == "/file/features/0/geometry"
    assert warning["detail"].startswith("Mended here")


def test_the_form_is_checked_part_by_part(service: Service, tmp_path: Path) -> None:
    file = geopackage(tmp_path / "a.gpkg", field_at("A"))
    content = ("a.gpkg", file.read_bytes())

    def post(**request: Any) -> httpx.Response:
        return service.call("POST", "/v1/parcels/import", **request)

    no_field = problem(post(files={"file": content}), "invalid-input")
    assert faults(no_field)[0][0] == "/ref_field"
    no_file = problem(post(files=[("ref_field", (None, "ref"))]), "invalid-input")
    assert faults(no_file)[0][0] == "/file"
    for name, value, pointer in [
        ("dry_run", "perhaps", "/dry_run"),
        ("ref_field", "", "/ref_field"),
        ("ref_field", "x" * 201, "/ref_field"),
        ("ref_field", "x" * 2_000, "/ref_field"),
        ("ref_field", "none", "/ref_field"),
        ("ref_field", "geom", "/ref_field"),
        ("name_field", "none", "/name_field"),
        ("holding_field", "REF", "/holding_field"),
        ("crop_field", "none", "/crop_field"),
    ]:
        document = problem(send(service, file, **{name: value}), "invalid-input")
        assert [p for p, _ in faults(document)] == [pointer], name
    problem(send(service, file, layer="x"), "invalid-input")
    twice = [("ref_field", (None, "ref")), ("ref_field", (None, "ref")), ("file", content)]
    assert faults(problem(post(files=twice), "invalid-input"))[0][0] == "/ref_field"
    two_files = [("ref_field", (None, "ref")), ("file", content), ("file", content)]
    assert faults(problem(post(files=two_files), "invalid-input"))[0][0] == "/file"
    problem(send(service, file, params={"dry_run": "true"}), "invalid-parameter")
    problem(post(json={}), "unsupported-media-type", status=415)
    multipart = {"Content-Type": "multipart/form-data; boundary=b"}
    cut = b'--b\r\nContent-Disposition: form-data; name="ref_field"\r\n\r\nref'
    problem(post(content=cut, headers=multipart), "malformed-body", status=400)
    problem(post(content=b"x", headers=multipart), "malformed-body", status=400)
    assert parcels(service) == {}
    # The order of parts is free.
    last = [("file", content), ("dry_run", (None, "false")), ("ref_field", (None, "ref"))]
    assert told(post(files=last)) == (1, 0, 0, 0)


def test_only_keys_that_manage_import_and_limited_ones_within_their_holdings(
    service: Service, tmp_path: Path
) -> None:
    file = geopackage(tmp_path / "a.gpkg", field_at("A", owner="north"))
    problem(send(service, file, key=service.key("read", "ingest")), "scope-missing", status=403)
    north = service.key("manage", holdings=["north"])
    south = service.key("manage", holdings=["south"])
    pointer, detail = faults(problem(send(service, file, key=north), "invalid-input"))[0]
    assert pointer == "/file/features/0"
    assert detail.startswith("Row 1: This key is limited to holdings")
    assert told(send(service, file, key=north, holding_field="owner")) == (1, 0, 0, 0)
    # What is there already needs no holding named anew.
    assert told(send(service, file, key=north)) == (0, 0, 1, 0)
    taken = problem(send(service, file, key=south, holding_field="owner"), "ref-taken", status=409)
    assert faults(taken)[0][0] == "/file/features/0/properties/ref"
    other = geopackage(tmp_path / "b.gpkg", field_at("B", owner="north"))
    document = problem(send(service, other, key=south, holding_field="owner"), "invalid-input")
    assert faults(document)[0][0] == "/file/features/0/properties/owner"


def test_a_changed_outline_is_measured_again_and_a_repeated_request_answers_the_same(
    service: Service, tmp_path: Path
) -> None:
    file = geopackage(tmp_path / "a.gpkg", field_at("A"))
    retried = {"Idempotency-Key": "one"}
    first = send(service, file, headers=retried)
    assert told(first) == (1, 0, 0, 0)
    again = send(service, file, headers=retried)
    assert again.json() == first.json()
    assert told(send(service, file)) == (0, 0, 1, 0)
    other = geopackage(tmp_path / "b.gpkg", field_at("B"))
    problem(send(service, other, headers=retried), "idempotency-key-reused")


def test_a_file_of_many_vertices_is_a_job_that_tells_what_became_of_it(
    service: Service, tmp_path: Path
) -> None:
    drawn = many_vertices()
    file = zipped_shapefile(tmp_path / "a.zip", *drawn)
    promised = send(service, file)
    assert promised.status_code == 202, promised.text
    address = promised.headers["Location"]
    job = promised.json()
    assert address == f"/v1/jobs/{job['id']}"
    assert (job["kind"], job["failure"], job["result"]) == ("parcels-import", None, None)
    done = service.get(address, headers={"Prefer": "wait=60"})
    assert (done["state"], done["progress"], done["failure"]) == ("done", 1.0, None), done
    counts = {name: done["result"][name] for name in ("created", "updated", "unchanged")}
    assert counts == {"created": 30, "updated": 0, "unchanged": 0}
    assert len(parcels(service)) == 30

    # A caller that waits is answered when it is done, with the same members.
    waited = send(service, file, headers={"Prefer": "wait=60, handling=lenient"})
    assert (waited.status_code, waited.json()["result"]["unchanged"]) == (200, 30)
    assert waited.headers["Location"] != address
    # Who may not see the job is told that there is none.
    for key in (service.key("ingest"), service.key("read", "manage", holdings=["north"])):
        hidden = service.call("GET", address, key=key)
        problem(hidden, "job-not-found", status=404)
    assert service.call("GET", address, key=service.key("read")).status_code == 200
    problem(service.call("GET", "/v1/jobs/job_0"), "job-not-found", status=404)


def test_a_job_is_all_or_nothing_unless_lenient_and_a_dry_one_keeps_nothing(
    service: Service, tmp_path: Path
) -> None:
    wait = {"Prefer": "wait=60"}
    bad = Drawn(shape=CROSSING, attributes={"ref": "crossing"})
    file = geopackage(tmp_path / "a.gpkg", *many_vertices(), bad)
    failed = send(service, file, headers=wait)
    assert failed.status_code == 200, failed.text
    job = failed.json()
    assert (job["state"], job["result"]) == ("failed", None)
    failure = job["failure"]
    assert failure["type"] == "/problems/invalid-geometry"
    assert (failure["status"], failure["errors_total"]) == (422, 1)
    assert failure["errors"][0]["pointer"] == "/file/features/30/geometry"
    assert failure["errors"][0]["detail"].startswith("Row 31: The outline is not valid")
    assert parcels(service) == {}

    dry = send(service, file, headers={"Prefer": "wait=60, handling=lenient"}, dry_run="true")
    assert dry.json()["result"] == {
        "created": 30,
        "updated": 0,
        "unchanged": 0,
        "rejected": 1,
        "errors": failure["errors"],
        "warnings": [],
        "dry_run": True,
    }
    assert parcels(service) == {}
    kept = send(service, file, headers={"Prefer": "wait=60, handling=lenient"})
    assert kept.json()["result"] == {**dry.json()["result"], "dry_run": False}
    assert len(parcels(service)) == 30


def test_a_file_of_many_parcels_is_a_job_and_asking_twice_promises_once(
    service: Service, tmp_path: Path
) -> None:
    drawn = [field_at(f"P{n}", col=12 * (n % 80), row=12 * (n // 80)) for n in range(5_001)]
    file = geopackage(tmp_path / "a.gpkg", *drawn)
    first, second = send(service, file), send(service, file)
    assert (first.status_code, second.status_code) == (202, 202)
    assert first.json()["id"] == second.json()["id"]
    other = send(service, file, dry_run="true")
    assert other.json()["id"] != first.json()["id"]
    done = service.get(first.headers["Location"], headers={"Prefer": "wait=60"})
    assert (done["state"], done["result"]["created"]) == ("done", 5_001), done
    assert service.get(other.headers["Location"], headers={"Prefer": "wait=60"})["state"] == "done"
    # Just as many as a request takes are kept before the answer.
    at_once = geopackage(tmp_path / "b.gpkg", *drawn[:5_000])
    assert told(send(service, at_once)) == (0, 0, 5_000, 0)


def test_the_contract_is_in_the_openapi_document(service: Service) -> None:
    document = service.get("/openapi.json")
    operation = document["paths"]["/v1/parcels/import"]["post"]
    schema = operation["requestBody"]["content"]["multipart/form-data"]["schema"]
    assert set(schema["properties"]) == {
        "file",
        "ref_field",
        "name_field",
        "holding_field",
        "crop_field",
        "dry_run",
    }
    assert {"200", "202"} <= set(operation["responses"])
    assert "get" in document["paths"]["/v1/jobs/{job_id}"]


def test_each_file_lies_where_its_own_reference_system_says(
    service: Service, tmp_path: Path
) -> None:
    """Coordinates of one field in other systems are those of the projection library itself."""
    shape = field_at("x").shape
    assert shape is not None
    degrees = in_degrees(shape)
    for epsg in (4326, 4258, 3035, 3857, 25833, 32632, 2056):
        project = Transformer.from_crs("OGC:CRS84", epsg, always_xy=True).transform
        drawn = Drawn(
            shape=shapely.transform(degrees, project, interleaved=False),
            attributes={"ref": f"E{epsg}"},
        )
        by_code = geopackage(tmp_path / "a.gpkg", drawn, epsg=epsg)
        assert told(send(service, by_code)) == (1, 0, 0, 0), epsg
        wkt = CRS.from_epsg(epsg).to_wkt()
        by_words = geopackage(tmp_path / "b.gpkg", drawn, epsg=None, wkt=wkt)
        assert told(send(service, by_words)) == (0, 0, 1, 0), epsg
        found = shapely.from_geojson(json.dumps(parcels(service)[f"E{epsg}"]["geometry"]))
        # What the datums of the continent differ by is published to a metre: 1.4e-5 degrees.
        assert shapely.hausdorff_distance(found, degrees) < 1.4e-5, epsg
        by_esri = zipped_shapefile(tmp_path / "a.zip", drawn, epsg=epsg)
        assert told(send(service, by_esri))[3] == 0, epsg
        found = shapely.from_geojson(json.dumps(parcels(service)[f"E{epsg}"]["geometry"]))
        assert shapely.hausdorff_distance(found, degrees) < 1.4e-5, epsg
