"""What holds for every address: problems, tags, digests, retries, origins, the OpenAPI document."""

import base64
import hashlib
import json
import re
import time
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

import httpx
import pytest
from sqlalchemy import text

from service.settings import Settings
from service.store.judging import is_judging_wanted
from tests.serving import SCENE, Service, serving, square, uniform_scene

CANOPY = {"red": 0.04, "nir": 0.42}
MAIZE = {"parcel": "A", "crop": "maize", "from_on": "2024-04-20", "until_on": "2024-10-05"}


def problem(answer: httpx.Response, status: int, code: str) -> dict[str, Any]:
    """Return a problem document (RFC 9457) after checking its members."""
    assert (answer.status_code, answer.json()["type"]) == (status, f"/problems/{code}"), answer.text
    assert answer.headers["Content-Type"] == "application/problem+json"
    document: dict[str, Any] = answer.json()
    assert document["status"] == status
    assert document["title"]
    assert document["detail"]
    assert document["instance"] == answer.request.url.path
    return document


def scene_request(scene: Mapping[str, Any], files: Mapping[str, Path]) -> httpx.Request:
    """Return a scene's upload; its body is the same each time, boundary included."""
    parts: list[tuple[str, Any]] = [("scene", (None, json.dumps(scene), "application/json"))]
    parts += [(part, (part, path.read_bytes(), "image/tiff")) for part, path in files.items()]
    headers = {"Content-Type": "multipart/form-data; boundary=the-same-each-time"}
    return httpx.Request("POST", "http://service/v1/scenes", files=parts, headers=headers)


def upload(service: Service, request: httpx.Request, **headers: str) -> httpx.Response:
    """Send a scene's upload, with further headers."""
    media_type = {"Content-Type": request.headers["Content-Type"]}
    return service.call(
        "POST", "/v1/scenes", content=request.read(), headers={**media_type, **headers}
    )


BULK, JSON = 64 * 1024**2, 2 * 1024**2
JSON_TYPE = {"Content-Type": "application/json"}
SCENE_TYPES = {"multipart/form-data", "application/json", "application/geo+json"}


def too_much(size: int) -> Iterator[bytes]:
    """Yield more than a body may hold, without saying how much beforehand."""
    yield b'"'
    for _ in range(size // 65_536 + 1):
        yield b"x" * 65_536


def test_every_kind_of_refusal_is_a_problem_whose_type_is_a_page(service: Service) -> None:
    call = service.call
    asked = [
        (call("GET", "/v1/nothing"), 404, "not-found"),
        (call("GET", "/nothing"), 404, "not-found"),
        (call("GET", "/problems/nothing"), 404, "not-found"),
        (call("GET", "/v1/parcels/none"), 404, "parcel-not-found"),
        (call("GET", "/v1/scenes/none"), 404, "scene-not-found"),
        (call("GET", "/v1/indices/none"), 404, "index-not-found"),
        (call("DELETE", "/v1/keys/none"), 404, "key-not-found"),
        (call("POST", "/v1/parcels"), 405, "method-not-allowed"),
        (call("PATCH", "/healthz"), 405, "method-not-allowed"),
        (call("POST", "/v1/keys", content="{", headers=JSON_TYPE), 400, "malformed-json"),
        (call("POST", "/v1/seasons", content="{", headers=JSON_TYPE), 400, "malformed-json"),
        (call("PUT", "/v1/parcels", content="{", headers=JSON_TYPE), 400, "malformed-json"),
        (call("POST", "/v1/keys", content="[" * 99_999, headers=JSON_TYPE), 400, "malformed-body"),
        (call("POST", "/v1/keys", content="{}"), 415, "unsupported-media-type"),
        (call("POST", "/v1/scenes", content="{}"), 415, "unsupported-media-type"),
        (call("PUT", "/v1/parcels", content="a,b"), 415, "unsupported-media-type"),
        (call("POST", "/v1/keys", json={}), 422, "invalid-input"),
        (call("PUT", "/v1/parcels", json={}), 422, "invalid-input"),
        (call("GET", "/v1/scenes?state=x"), 422, "invalid-parameter"),
        (call("GET", "/v1/overview", headers={"Accept": "image/png"}), 406, "not-acceptable"),
        (service.client.get("/v1/parcels"), 401, "no-key"),
        (call("GET", "/v1/keys", key=service.key("read")), 403, "scope-missing"),
    ]
    for path, media_type, limit in [
        ("/v1/keys", "application/json", JSON),
        ("/v1/seasons", "application/json", BULK),
        ("/v1/seasons", "text/csv", BULK),
    ]:
        headers = {"Content-Type": media_type}
        announced = call("POST", path, content=b"x" * (limit + 1), headers=headers)
        asked.append((announced, 413, "body-too-large"))
        streamed = call("POST", path, content=too_much(limit), headers=headers)
        asked.append((streamed, 413, "body-too-large"))
    for answer, status, code in asked:
        document = problem(answer, status, code)
        page = service.client.get(document["type"])
        assert page.status_code == 200
        assert page.headers["Content-Type"].startswith("text/html")
        assert document["title"] in page.text
    allowed = {
        a.request.url.path: a.headers.get("Allow") for a, status, _ in asked if status == 405
    }
    assert allowed["/healthz"] == "GET"


def test_unknown_parameters_are_refused_by_name_everywhere(service: Service) -> None:
    service.put_parcels(square("A", col=0, row=0))
    for method, path in [
        ("GET", "/v1/parcels"),
        ("GET", "/v1/parcels/A"),
        ("GET", "/v1/parcels/A/boundaries"),
        ("GET", "/v1/parcels/A/seasons"),
        ("GET", "/v1/parcels/A/series"),
        ("PUT", "/v1/parcels"),
        ("DELETE", "/v1/parcels/A"),
        ("POST", "/v1/seasons"),
        ("POST", "/v1/scenes"),
        ("GET", "/v1/scenes"),
        ("GET", "/v1/overview"),
        ("GET", "/v1/indices"),
        ("GET", "/v1/sensors"),
        ("GET", "/v1/keys"),
        ("POST", "/v1/keys"),
    ]:
        answer = service.call(method, f"{path}?zebra=1&smooth=whittaker&every=P5D")
        document = problem(answer, 422, "invalid-parameter")
        named = [error["parameter"] for error in document["errors"]]
        assert named == ["every", "smooth", "zebra"]
    assert service.get("/v1/parcels/A")["properties"]["retired_at"] is None


STRANGE_TIMES = [
    "2024-06-03T10:10:31",
    "2024-06-03T10:10",
    "2024-6-3",
    "03.06.2024",
    "2024-02-30",
    "2024-02-30T00:00:00Z",
    "2024-06-03T25:00:00Z",
    "2024-06-03T10:10:31+25:00",
    "0001-01-01",
    "0001-01-01T00:00:00+14:00",
    "9999-12-31T23:59:60Z",
    "٢٠٢٤-06-03",
    "1717409431",
    "now",
    "",
]


def test_a_time_that_is_none_or_has_no_offset_is_refused(service: Service) -> None:
    service.put_parcels(square("A", col=0, row=0))
    for path, names in [
        ("/v1/parcels/A/series", ("from", "to", "as_of")),
        ("/v1/scenes", ("from", "to")),
        ("/v1/overview", ("at",)),
    ]:
        for name in names:
            for value in STRANGE_TIMES:
                answer = service.call("GET", path, params={name: value})
                document = problem(answer, 422, "invalid-parameter")
                assert [error["parameter"] for error in document["errors"]] == [name]
                assert not value or value not in document["detail"]
            for value in ("2024-06-03", "2024-06-03T10:10:31+02:00", "2024-06-03t10:10:31.5z"):
                assert service.call("GET", path, params={name: value}).status_code == 200


def test_a_cursor_that_no_page_gave_out_is_refused(service: Service) -> None:
    def packed(value: object) -> str:
        return base64.urlsafe_b64encode(json.dumps(value).encode()).decode().rstrip("=")

    for path in ("/v1/parcels", "/v1/scenes", "/v1/keys"):
        for value in (None, {}, [], ["x"], ["x", 1], [1, "x"], [True], [-1], [10**30], [1, 2, 3]):
            answer = service.call("GET", path, params={"cursor": packed(value)})
            document = problem(answer, 422, "invalid-parameter")
            assert [error["parameter"] for error in document["errors"]] == ["cursor"]
        for cursor in ("", "é", "====", "W" * 501):
            problem(service.call("GET", path, params={"cursor": cursor}), 422, "invalid-parameter")


def test_the_input_is_never_echoed(service: Service, tmp_path: Path) -> None:
    zebra = "zebra-7b1f"
    feature = square(zebra, col=0, row=0)
    files = uniform_scene(tmp_path / "s", CANOPY)
    answers = [
        service.call("GET", "/v1/scenes", params={"state": zebra}),
        service.call("GET", "/v1/scenes", params={"from": zebra}),
        service.call("GET", "/v1/parcels", params={"bbox": zebra}),
        service.call("GET", "/v1/parcels", params={"limit": zebra}),
        service.call("GET", "/v1/parcels", params={"cursor": zebra}),
        service.call("GET", "/v1/overview", params={"index": zebra}),
        service.call("GET", "/v1/overview", params={"format": zebra}),
        service.call("GET", "/v1/overview", headers={"Accept": f"text/{zebra}"}),
        service.call("GET", "/v1/parcels", key=zebra),
        service.call("POST", "/v1/keys", json={"label": f"={zebra}", "scopes": [zebra]}),
        service.call("POST", "/v1/keys", content=zebra, headers=JSON_TYPE),
        service.call("POST", "/v1/keys", content=zebra, headers={"Content-Type": f"text/{zebra}"}),
        service.put_parcels(feature, feature),
        service.put_parcels({**feature, "type": zebra, "geometry": {"type": zebra}}),
        service.put_parcels({**feature, "geometry": {"type": zebra, "coordinates": [zebra]}}),
        service.put_parcels(square(f"={zebra}", col=0, row=0, crop=f"@{zebra}", tags=zebra)),
        service.call("POST", "/v1/seasons", json={**MAIZE, "parcel": zebra}),
        service.call("POST", "/v1/seasons", json={**MAIZE, "from_on": zebra, "year": zebra}),
        service.call(
            "POST", "/v1/seasons", content=f"parcel,{zebra}\n", headers={"Content-Type": "text/csv"}
        ),
        service.post_scene({**SCENE, "sensor": zebra, "acquired_at": zebra}, files, wait=0),
        service.post_scene({**SCENE, "sensor": zebra}, files, wait=0),
        service.post_scene({**SCENE, "processing_baseline": zebra}, files, wait=0),
        service.post_scene({**SCENE, "stack": [zebra], "scaling": {zebra: 1}}, files, wait=0),
        service.post_scene({**SCENE, "quality": zebra, "nodata": zebra}, files, wait=0),
    ]
    for answer in answers:
        assert 400 <= answer.status_code < 500
        assert zebra not in answer.text, answer.text


def test_a_fault_of_the_service_tells_nothing_but_the_requests_id(settings: Settings) -> None:
    with serving(settings) as service:
        service.put_parcels(square("A", col=0, row=0))
        with service.sessions.writing() as session:
            session.execute(text("DROP TABLE crop_season"))
        answer = service.call("GET", "/v1/parcels/A/seasons")
        document = problem(answer, 500, "internal-error")
        assert re.search(r"req_[0-9a-f]{16}", document["detail"])
        assert answer.headers["Connection"] == "close"
        assert "errors" not in document
        for leaked in (
            "SELECT",
            "crop_season",
            "Traceback",
            "sqlalchemy",
            str(settings.data),
            ".py",
        ):
            assert leaked not in answer.text
        assert service.client.get(document["type"]).status_code == 200


def test_a_service_that_cannot_work_says_so_and_when_to_ask_again(settings: Settings) -> None:
    full = settings.model_copy(update={"disk_reserve_bytes": 2**62})
    with serving(full) as service:
        assert service.client.get("/healthz").json() == {"status": "up"}
        answer = service.client.get("/readyz")
        assert "disk" in problem(answer, 503, "not-ready")["detail"]
        assert int(answer.headers["Retry-After"]) > 0
        assert str(settings.data) not in answer.text
    with serving(settings) as service:
        assert service.client.get("/readyz").json() == {"status": "ready"}


def judged(service: Service) -> None:
    """Wait until what was sent is judged: that goes on after the answer, and changes series."""
    deadline = time.monotonic() + 30
    while True:
        with service.sessions.reading() as session:
            if not is_judging_wanted(session):
                return
        assert time.monotonic() < deadline
        service.client.get("/healthz")


def tagged(service: Service, path: str) -> str:
    """Return the tag of an answer, having seen that it alone gives 304 with nothing in it."""
    judged(service)
    answer = service.call("GET", path)
    assert answer.status_code == 200
    tag = answer.headers["ETag"]
    assert re.fullmatch(r'"[^"]+"', tag)
    for sent in (tag, f'"other", {tag}', f"W/{tag}", "*"):
        known = service.call("GET", path, headers={"If-None-Match": sent})
        assert (known.status_code, known.content) == (304, b"")
        assert known.headers["ETag"] == tag
        assert_cached_privately(known)
    changed = service.call("GET", path, headers={"If-None-Match": '"other"'})
    assert (changed.status_code, changed.content) == (200, answer.content)
    assert_cached_privately(answer)
    return tag


def assert_cached_privately(answer: httpx.Response) -> None:
    assert answer.headers["Cache-Control"] == "private, no-cache"
    vary = {name.strip() for name in answer.headers["Vary"].split(",")}
    assert vary >= {"Accept", "Authorization"}


def test_an_answer_has_its_tag_until_it_changes(service: Service, tmp_path: Path) -> None:
    service.put_parcels(square("A", col=5, row=5), square("B", col=20, row=20))
    paths = ["/v1/parcels", "/v1/parcels/A", "/v1/parcels/A/boundaries", "/v1/parcels/A/seasons"]
    paths += ["/v1/indices", "/v1/indices/ndvi", "/v1/sensors", "/v1/keys", "/v1/overview"]
    paths += ["/v1/scenes", "/v1/parcels/A/series"]
    before = {path: tagged(service, path) for path in paths}
    assert len(set(before.values())) == len(paths)
    assert {path: tagged(service, path) for path in paths} == before
    service.post_scene(SCENE, uniform_scene(tmp_path / "s", CANOPY))
    after = {path: tagged(service, path) for path in [*paths, "/v1/scenes/s1"]}
    changed = {path for path in paths if after[path] != before[path]}
    assert changed == {"/v1/scenes", "/v1/parcels/A/series", "/v1/overview"}
    service.put_parcels(square("A", col=5, row=5, name="Long Field"))
    assert tagged(service, "/v1/parcels/A") != after["/v1/parcels/A"]
    assert tagged(service, "/v1/parcels") != after["/v1/parcels"]
    assert tagged(service, "/v1/parcels/B/series") == tagged(service, "/v1/parcels/B/series")


def test_the_tag_of_a_series_changes_with_all_that_it_is_made_of(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(square("A", col=5, row=5), square("B", col=20, row=20))
    path, other = "/v1/parcels/A/series", "/v1/parcels/B/series"
    tags = [tagged(service, path)]

    def changes() -> None:
        tags.append(tagged(service, path))
        assert len(set(tags)) == len(tags)

    service.post_scene(SCENE, uniform_scene(tmp_path / "s1", CANOPY))
    changes()
    later = {**SCENE, "ref": "s2", "acquired_at": "2024-06-08T10:10:31Z"}
    service.post_scene(later, uniform_scene(tmp_path / "s2", {**CANOPY, "red": 0.05}))
    changes()
    unconcerned = tagged(service, other)
    service.call("POST", "/v1/seasons", json=MAIZE)
    changes()
    service.call("POST", "/v1/seasons", json={**MAIZE, "crop": "silage maize"})
    changes()
    again = {**later, "replace": True}
    service.post_scene(again, uniform_scene(tmp_path / "s3", {**CANOPY, "red": 0.06}))
    changes()
    assert tagged(service, other) != unconcerned
    service.call("DELETE", "/v1/scenes/s2")
    changes()
    # Another question, another tag, though the figures may be the same.
    queries = ("index=ndvi", "index=ndvi&stat=mean", "min_valid=0", "format=csv")
    tags += [tagged(service, f"{path}?{query}") for query in queries]
    as_csv = service.call("GET", path, headers={"Accept": "text/csv"})
    assert as_csv.headers["ETag"] == tags[-1]
    assert len(set(tags)) == len(tags)
    # What is sent again changes nothing.
    service.call("POST", "/v1/seasons", json={**MAIZE, "crop": "silage maize"})
    service.put_parcels(square("A", col=5, row=5))
    assert tagged(service, f"{path}?format=csv") == tags[-1]


def digest(body: bytes) -> str:
    return f"sha-256=:{base64.b64encode(hashlib.sha256(body).digest()).decode()}:"


def test_a_body_that_was_damaged_on_its_way_is_refused(service: Service, tmp_path: Path) -> None:
    service.put_parcels(square("A", col=5, row=5))
    request = scene_request(SCENE, uniform_scene(tmp_path / "s", CANOPY))
    body = request.read()
    features = {"type": "FeatureCollection", "features": [square("B", col=20, row=20)]}
    parcels = json.dumps(features).encode()
    seasons = json.dumps(MAIZE).encode()

    def send(wrong: bytes) -> list[httpx.Response]:
        return [
            upload(service, request, **{"Content-Digest": digest(body + wrong)}),
            service.call(
                "PUT",
                "/v1/parcels",
                content=parcels,
                headers={**JSON_TYPE, "Content-Digest": digest(parcels + wrong)},
            ),
            service.call(
                "POST",
                "/v1/seasons",
                content=seasons,
                # RFC 9530: several algorithms may be named; unknown ones are passed over.
                headers={**JSON_TYPE, "Content-Digest": f"md5=:AA==:, {digest(seasons + wrong)}"},
            ),
        ]

    for answer in send(b"x"):
        problem(answer, 400, "digest-mismatch")
    assert [f["id"] for f in service.get("/v1/parcels")["features"]] == ["A"]
    assert service.get("/v1/parcels/A/seasons")["seasons"] == []
    assert service.get("/v1/scenes")["scenes"] == []
    assert list(service.settings.data.glob("files/**/*.tif")) == []
    assert [answer.status_code for answer in send(b"")] == [202, 200, 200]


def test_a_retry_under_an_idempotency_key_gets_the_first_answer(service: Service) -> None:
    service.put_parcels(square("A", col=5, row=5))

    def seasons(name: str, crop: str = "maize", *, key: str | None = None) -> httpx.Response:
        headers = {"Idempotency-Key": name}
        sent = {**MAIZE, "crop": crop}
        return service.call("POST", "/v1/seasons", json=sent, headers=headers, key=key)

    first = seasons("k1")
    assert first.json()["created"] == 1
    again = seasons("k1")
    assert (again.status_code, again.content) == (200, first.content)
    assert again.headers["Content-Type"] == first.headers["Content-Type"]
    # Without the key, or under another one, it is a request of its own.
    assert seasons("k2").json()["unchanged"] == 1
    problem(seasons("k1", "rye"), 422, "idempotency-key-reused")
    assert service.get("/v1/parcels/A/seasons")["seasons"][0]["crop"] == "maize"
    assert seasons("k1", key=service.key("manage")).json()["unchanged"] == 1
    for name in ("", "k" * 201):
        problem(seasons(name), 422, "invalid-parameter")

    # A refusal is no answer to keep: the mended request goes through under the same key.
    lame = {"Idempotency-Key": "k3", "Content-Type": "text/csv"}
    refused = service.call("POST", "/v1/seasons", content="parcel\n", headers=lame)
    problem(refused, 422, "invalid-input")
    mended = "parcel,crop,year\nA,rye,2022\n"
    assert service.call("POST", "/v1/seasons", content=mended, headers=lame).status_code == 200


def test_a_scene_sent_again_under_its_idempotency_key_is_one_scene(
    service: Service, tmp_path: Path
) -> None:
    name = {"Idempotency-Key": "k4"}
    files = uniform_scene(tmp_path / "s", CANOPY)
    posted = service.post_scene(SCENE, files, wait=0, headers=name)
    assert posted.status_code == 202
    repeated = service.post_scene(SCENE, files, wait=0, headers=name)
    assert (repeated.status_code, repeated.content) == (202, posted.content)
    assert repeated.headers["Location"] == posted.headers["Location"] == "/v1/scenes/s1"
    other = service.post_scene({**SCENE, "ref": "s2", "tile": "t2"}, files, wait=0, headers=name)
    problem(other, 422, "idempotency-key-reused")
    # The same key at another address is another request as well.
    problem(
        service.call("POST", "/v1/scenes/s1/retry", headers=name), 422, "idempotency-key-reused"
    )
    held = service.post_scene(SCENE, files, headers=name)
    assert (held.status_code, held.json()["state"]) == (200, "done")
    assert [scene["generation"] for scene in service.get("/v1/scenes")["scenes"]] == [1]


ORIGIN = {"Origin": "https://map.example"}
PREFLIGHT = {
    **ORIGIN,
    "Access-Control-Request-Method": "PUT",
    "Access-Control-Request-Headers": "authorization, content-type",
}


def test_no_other_origin_may_call_unless_a_setting_names_it(settings: Settings) -> None:
    with serving(settings) as service:
        answer = service.call("GET", "/v1/parcels", headers=ORIGIN)
        assert not [name for name in answer.headers if name.startswith("access-control")]
        problem(service.client.options("/v1/parcels", headers=PREFLIGHT), 405, "method-not-allowed")
    named = settings.model_copy(update={"allowed_origins": ("https://map.example",)})
    with serving(named) as service:
        preflight = service.client.options("/v1/parcels", headers=PREFLIGHT)
        assert preflight.status_code == 200
        assert "PUT" in preflight.headers["Access-Control-Allow-Methods"]
        assert "authorization" in preflight.headers["Access-Control-Allow-Headers"]
        answer = service.call("GET", "/v1/parcels", headers=ORIGIN)
        assert answer.headers["Access-Control-Allow-Origin"] == "https://map.example"
        assert "Origin" in answer.headers["Vary"]
        assert_cached_privately(answer)
        # Problems are readable there too, and the page of links needs its headers.
        refused = service.client.get("/v1/parcels", headers=ORIGIN)
        assert refused.headers["Access-Control-Allow-Origin"] == "https://map.example"
        assert "Link" in refused.headers["Access-Control-Expose-Headers"]
        for origin in ("https://other.example", "null", "https://map.example.evil.example"):
            other = service.call("GET", "/v1/parcels", headers={"Origin": origin})
            assert "Access-Control-Allow-Origin" not in other.headers
            sent = {**PREFLIGHT, "Origin": origin}
            assert service.client.options("/v1/parcels", headers=sent).status_code == 400


def test_origins_are_named_in_the_environment_separated_by_commas(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("FURROWLIGHT_ALLOWED_ORIGINS", "https://a.example, https://b.example,")
    assert Settings(data=tmp_path).allowed_origins == ("https://a.example", "https://b.example")


# The addresses of this release that the contract names, parameters without their names.
CONTRACT = {
    "/v1/keys": {"get", "post"},
    "/v1/keys/{}": {"delete"},
    "/v1/parcels": {"get", "put"},
    "/v1/parcels/{}": {"get", "delete"},
    "/v1/parcels/{}/boundaries": {"get"},
    "/v1/parcels/{}/seasons": {"get"},
    "/v1/parcels/{}/series": {"get"},
    "/v1/seasons": {"post"},
    "/v1/scenes": {"get", "post"},
    "/v1/scenes/{}": {"get", "delete"},
    "/v1/scenes/{}/parcels": {"get"},
    "/v1/scenes/{}/retry": {"post"},
    "/v1/indices": {"get"},
    "/v1/indices/{}": {"get"},
    "/v1/sensors": {"get"},
    "/v1/overview": {"get"},
    "/healthz": {"get"},
    "/readyz": {"get"},
}
OPEN = {"/healthz", "/readyz"}


def test_the_openapi_document_tells_of_every_address_as_it_is(service: Service) -> None:
    answer = service.client.get("/openapi.json")
    assert answer.headers["Content-Type"] == "application/json"
    document = answer.json()
    assert document["openapi"].startswith("3.1.")
    described = {
        re.sub(r"\{[^}]*\}", "{}", path): operations
        for path, operations in document["paths"].items()
    }
    assert {
        path: described.get(path, {}).keys() & methods for path, methods in CONTRACT.items()
    } == CONTRACT
    ((scheme, told),) = document["components"]["securitySchemes"].items()
    assert (told["type"], told["scheme"]) == ("http", "bearer")
    for path, operations in described.items():
        for method, operation in operations.items():
            if path in OPEN:
                assert "security" not in operation
                continue
            assert operation["security"] == [{scheme: []}], path
            assert "application/problem+json" in operation["responses"]["4XX"]["content"], path
            # It is there: whatever is wrong with an empty request, it is not the address.
            answer = service.call(method.upper(), path.replace("{}", "none"))
            assert answer.status_code != 405
            assert answer.status_code < 500
            kind = answer.json().get("type") if answer.status_code >= 400 else None
            assert kind not in ("/problems/not-found", "/problems/method-not-allowed"), path
    for path, method, media_types in [
        ("/v1/parcels", "put", {"application/geo+json", "application/json"}),
        ("/v1/seasons", "post", {"application/json", "text/csv"}),
        ("/v1/scenes", "post", SCENE_TYPES),
        ("/v1/keys", "post", {"application/json"}),
    ]:
        assert described[path][method]["requestBody"]["content"].keys() == media_types


def test_all_but_health_and_documents_needs_a_key(service: Service) -> None:
    for path in ("/healthz", "/readyz", "/openapi.json", "/problems/no-key"):
        assert service.client.get(path).status_code == 200
    for path, methods in CONTRACT.items():
        for method in methods if path not in OPEN else ():
            answer = service.client.request(method.upper(), path.replace("{}", "none"))
            if path != "/v1/keys" or method != "post":
                problem(answer, 401, "no-key")
    # JSON of a stranger is read, up to its limit, before the key is looked at.
    answer = service.client.post("/v1/keys", json={"label": "a", "scopes": ["read"]})
    problem(answer, 401, "no-key")


def test_every_answer_carries_an_id_that_the_log_has(service: Service) -> None:
    answers = [
        service.client.get(path)
        for path in ("/healthz", "/v1/parcels", "/nothing", "/v1/parcels?zebra=1")
    ]
    found = {answer.headers["X-Request-Id"] for answer in answers}
    assert len(found) == len(answers)
    assert all(re.fullmatch(r"req_[0-9a-f]{16}", name) for name in found)
