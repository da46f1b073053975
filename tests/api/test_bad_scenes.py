"""Scenes that are refused: each with its problem document, and nothing half-lands."""

import json
import socket
import threading
from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass, field
from datetime import timedelta
from pathlib import Path
from typing import Any

import httpx
import numpy as np
import pytest
import rasterio
from sqlalchemy import func, select

from service.api.wire import written
from service.clock import now
from service.settings import Settings
from service.store.tables import Observation, Scene, SceneFile, Write
from tests.serving import ORIGIN, SCENE, Service, serving, square, uniform_scene, write_band

GENERIC = {
    "ref": "s1",
    "sensor": "generic",
    "acquired_at": "2024-06-03T10:10:31Z",
    "scaling": {"scale": 0.0001, "offset": 0.0},
}
GIVEN = {"red": "red", "nir": "nir", "quality": "quality"}
"""What is sent unless a case says otherwise: part name → file of `write_files`."""
BANDS = {"red": "red", "nir": "nir"}


def write_files(folder: Path) -> dict[str, Path]:
    """Write good files, and one for each way to be bad, by name."""
    folder.mkdir()
    band = np.full((40, 40), 3_000, dtype=np.uint16)
    good = uniform_scene(folder / "good", dict.fromkeys(("blue", "green", "red", "nir"), 0.2))
    east = (ORIGIN[0] + 400, ORIGIN[1])
    own = {
        "beside": write_band(folder / "a.tif", band, origin=east),
        "other zone": write_band(folder / "b.tif", band, crs="EPSG:32632"),
        "no crs": write_band(folder / "c.tif", band, crs=None),
        "degrees": write_band(
            folder / "d.tif", band, crs="EPSG:4326", cell_m=1e-4, origin=(15, 49)
        ),
        "two bands": write_band(folder / "e.tif", np.stack([band, band])),
        "real quality": write_band(folder / "f.tif", np.full((20, 20), 4.0), cell_m=20),
        "truncated": folder / "g.tif",
        "text": folder / "h.tif",
        "virtual": folder / "i.tif",
        "empty": folder / "j.tif",
    }
    own["truncated"].write_bytes(noisy(folder / "k.tif").read_bytes()[:-700])
    own["text"].write_text("date,ndvi\n2024-06-03,0.7\n", "utf-8")
    own["virtual"].write_text('<VRTDataset rasterXSize="1" rasterYSize="1"></VRTDataset>', "utf-8")
    own["empty"].write_bytes(b"")
    return {**good, **own}


def noisy(path: Path) -> Path:
    """Write a band whose compressed pixels fill the file."""
    numbers = np.random.default_rng(1).integers(1_000, 9_000, (40, 40)).astype(np.uint16)
    return write_band(path, numbers)


def damage(path: Path) -> None:
    """Damage a file's compressed pixels, near their beginning, where a decoder notices."""
    with rasterio.open(path) as file:
        start = int(file.get_tag_item("BLOCK_OFFSET_0_0", "TIFF", bidx=1))
    content = bytearray(path.read_bytes())
    content[start + 20 : start + 120] = bytes(100)
    path.write_bytes(content)


@dataclass(frozen=True, slots=True, kw_only=True)
class Bad:
    """A scene that is refused at once, and how."""

    code: str
    pointers: tuple[str, ...] = ()
    change: Mapping[str, Any] = field(default_factory=dict)
    without: tuple[str, ...] = ()
    files: Mapping[str, str] = field(default_factory=lambda: GIVEN)
    scene: Mapping[str, Any] = field(default_factory=lambda: SCENE)
    status: int = 422

    def sent(self) -> dict[str, Any]:
        kept = {name: value for name, value in self.scene.items() if name not in self.without}
        return kept | dict(self.change)


def _metadata(pointer: str, code: str = "invalid-input", **change: Any) -> Bad:
    return Bad(code=code, pointers=(f"/scene{pointer}",), change=change)


def _file(name: str, code: str) -> Bad:
    return Bad(code=code, pointers=("/red",), files={**GIVEN, "red": name})


NEXT_WEEK = written(now() + timedelta(days=7))
BAD = {
    "bands that feed no watched index": Bad(
        code="no-index", files={"blue": "blue", "green": "green", "quality": "quality"}
    ),
    "no band at all": Bad(code="no-index", files={"quality": "quality"}),
    "no file at all": Bad(code="no-index", files={}, scene=GENERIC),
    "bands that touch but do not overlap": Bad(
        code="no-overlap", pointers=("/nir",), files={**GIVEN, "nir": "beside"}
    ),
    "bands in two systems": Bad(
        code="crs-differs", pointers=("/nir",), files={**GIVEN, "nir": "other zone"}
    ),
    "a band without a system": _file("no crs", "no-crs"),
    "a band in degrees": _file("degrees", "unsupported-crs"),
    "a truncated file": _file("truncated", "truncated-raster"),
    "a text file": _file("text", "not-a-raster"),
    "a file that only points to others": _file("virtual", "not-a-raster"),
    "an empty file": _file("empty", "not-a-raster"),
    "two bands under one role": _file("two bands", "invalid-input"),
    "a time without offset": _metadata("/acquired_at", acquired_at="2024-06-03T10:10:31"),
    "a date without time": _metadata("/acquired_at", acquired_at="2024-06-03"),
    "a time that is a number": _metadata("/acquired_at", acquired_at=1717409431),
    "a scene of 1950": _metadata("/acquired_at", acquired_at="1950-06-03T10:10:31Z"),
    "a scene of 1971": _metadata("/acquired_at", acquired_at="1971-12-31T23:59:59Z"),
    "a scene of next week": _metadata("/acquired_at", acquired_at=NEXT_WEEK),
    "an unknown sensor": _metadata("/sensor", "unknown-sensor", sensor="sentinel-9"),
    "a ref of two points": _metadata("/ref", ref=".."),
    "a ref with a slash": _metadata("/ref", ref="tile/1"),
    "a ref that a spreadsheet would run": _metadata("/ref", ref="=1+1"),
    "no ref": Bad(code="invalid-input", pointers=("/scene/ref",), without=("ref",)),
    "a member that means nothing": _metadata("/cloud_cover", cloud_cover=10),
    "a scale of zero": _metadata("/scaling/scale", scaling={"scale": 0, "offset": 0}),
    "a scaling without offset": _metadata("/scaling/offset", scaling={"scale": 0.0001}),
    "a role's scaling without offset": _metadata(
        "/scaling/red/offset", scaling={"red": {"scale": 0.0001}}
    ),
    "a scaling that is a number": _metadata("/scaling", scaling=0.0001),
    "a scaling of something that is no role": _metadata(
        "/scaling", scaling={"B04": {"scale": 0.0001, "offset": 0}}
    ),
    "replace that is neither true nor false": _metadata("/replace", replace="perhaps"),
    "no processing baseline": Bad(
        code="unknown-offset",
        pointers=("/scene/processing_baseline",),
        without=("processing_baseline",),
    ),
    "a processing baseline to come": _metadata(
        "/processing_baseline", "unknown-offset", processing_baseline="07.00"
    ),
    "a processing baseline that is none": _metadata(
        "/processing_baseline", "unknown-offset", processing_baseline="N0510"
    ),
    "a generic scene without scaling": Bad(
        code="unknown-offset",
        pointers=("/scene/scaling",),
        scene=GENERIC,
        without=("scaling",),
        files=BANDS,
    ),
    "a generic scene with one band's scaling": Bad(
        code="unknown-offset",
        pointers=("/scene/scaling",),
        scene=GENERIC,
        change={"scaling": {"red": {"scale": 0.0001, "offset": 0.0}}},
        files=BANDS,
    ),
    "no quality layer": Bad(code="wrong-quality-layer", pointers=("/quality",), files=BANDS),
    "a quality layer of real numbers": Bad(
        code="wrong-quality-layer",
        pointers=("/quality",),
        files={**GIVEN, "quality": "real quality"},
    ),
    "a quality layer that nothing reads": Bad(
        code="wrong-quality-layer", pointers=("/quality",), scene=GENERIC
    ),
    "a quality layer beside the word that there is none": _metadata("/quality", quality="none"),
    "a band that the sensor does not have": Bad(
        code="invalid-input", pointers=("/lwir11",), files={**GIVEN, "lwir11": "red"}
    ),
    "a stack without its roles": Bad(
        code="invalid-input",
        pointers=("/scene/stack",),
        files={"stack": "two bands", "quality": "quality"},
    ),
    "roles without a stack": _metadata("/stack", stack=["red", "nir"]),
    "a stack with too few roles": Bad(
        code="invalid-input",
        pointers=("/scene/stack",),
        files={"stack": "two bands", "quality": "quality"},
        change={"stack": ["red"]},
    ),
    "a role twice in a stack": Bad(
        code="invalid-input",
        pointers=("/scene/stack",),
        files={"stack": "two bands", "quality": "quality"},
        change={"stack": ["red", "red"]},
    ),
    "a role in a stack and beside it": Bad(
        code="invalid-input",
        pointers=("/scene/stack",),
        files={"stack": "two bands", "red": "red", "quality": "quality"},
        change={"stack": ["red", "nir"]},
    ),
    "a role that is none": Bad(
        code="invalid-input",
        pointers=("/scene/stack/1",),
        files={"stack": "two bands", "quality": "quality"},
        change={"stack": ["red", "B08"]},
    ),
}


def check_problem(answer: httpx.Response, status: int, code: str, *, case: str) -> dict[str, Any]:
    """Check that an answer is this problem, with a page, and tells nothing it should not."""
    document: dict[str, Any] = answer.json()
    found = (answer.status_code, document.get("status"), document.get("type"))
    assert found == (status, status, f"/problems/{code}"), (case, answer.text)
    assert answer.headers["Content-Type"] == "application/problem+json", case
    assert document["instance"] == "/v1/scenes", case
    assert document["title"], case
    assert document["detail"].endswith("."), case
    for secret in ("Traceback", "sqlite", "incoming", "SELECT", ".py", "pydantic"):
        assert secret not in answer.text, (case, secret)
    return document


def check_nothing_landed(service: Service, *, case: str) -> None:
    with service.sessions.reading() as session:
        for table in (Scene, SceneFile, Write, Observation):
            assert session.scalar(select(func.count()).select_from(table)) == 0, (case, table)
    assert files_in(service, "incoming") == [], case
    assert files_in(service, "archive") == [], case


def files_in(service: Service, folder: str) -> list[Path]:
    found = service.settings.data / "files" / folder
    assert found.is_dir()
    return [path for path in found.rglob("*") if path.is_file()]


def test_each_bad_scene_gets_its_problem_document_and_nothing_lands(
    service: Service, tmp_path: Path
) -> None:
    files = write_files(tmp_path / "files")
    service.put_parcels(square("A", col=5, row=5))
    for case, bad in BAD.items():
        parts = {part: files[name] for part, name in bad.files.items()}
        document = check_problem(
            service.post_scene(bad.sent(), parts), bad.status, bad.code, case=case
        )
        pointers = tuple(error.get("pointer") for error in document.get("errors", []))
        assert pointers == bad.pointers, (case, document)
        assert document.get("errors_total", 0) == len(bad.pointers), case
        check_nothing_landed(service, case=case)
        assert service.call("GET", document["type"]).status_code == 200, case
    # What all cases start from is accepted, so each was refused for its own fault.
    given = {part: files[name] for part, name in GIVEN.items()}
    assert service.post_scene(SCENE, given).json()["state"] == "done"
    later = {**GENERIC, "ref": "g", "acquired_at": "2024-06-08T10:10:31Z"}
    bands = {part: files[name] for part, name in BANDS.items()}
    assert service.post_scene(later, bands).json()["state"] == "done"


def test_the_detail_says_what_to_send_and_never_what_was_sent(
    service: Service, tmp_path: Path
) -> None:
    files = write_files(tmp_path / "files")
    given = {part: files[name] for part, name in GIVEN.items()}

    def told(**change: Any) -> str:
        scene = {name: value for name, value in {**SCENE, **change}.items() if value is not None}
        return service.post_scene(scene, given).text

    assert "generic" in told(sensor="secret-sensor")
    assert "secret" not in told(sensor="secret-sensor")
    assert "processing_baseline" in told(processing_baseline=None)
    assert "secret" not in told(acquired_at="secret", tile="secret\n")


PartSent = tuple[str, Any]
SCENE_PART: PartSent = ("scene", (None, json.dumps(SCENE), "application/json"))


def part(name: str, path: Path) -> PartSent:
    return (name, (path.name, path.read_bytes(), "image/tiff"))


@dataclass(frozen=True, slots=True, kw_only=True)
class BadBody:
    """A multipart body that is refused as such, and how."""

    code: str
    parts: Callable[[Mapping[str, Path]], list[PartSent]]
    pointers: tuple[str, ...] = ()
    status: int = 422


BAD_BODIES = {
    "a part of unknown name": BadBody(
        code="invalid-input", parts=lambda files: [SCENE_PART, part("B04", files["red"])]
    ),
    "the scene part last": BadBody(
        code="invalid-input",
        pointers=("/scene",),
        parts=lambda files: [part("red", files["red"]), SCENE_PART],
    ),
    "no scene part": BadBody(
        code="invalid-input",
        pointers=("/scene",),
        parts=lambda files: [part("red", files["red"]), part("nir", files["nir"])],
    ),
    "two scene parts": BadBody(
        code="invalid-input", pointers=("/scene",), parts=lambda _: [SCENE_PART, SCENE_PART]
    ),
    "a part twice": BadBody(
        code="invalid-input",
        pointers=("/red",),
        parts=lambda files: [SCENE_PART, part("red", files["red"]), part("red", files["nir"])],
    ),
    "a scene part that is not JSON": BadBody(
        code="malformed-json",
        status=400,
        parts=lambda files: [("scene", (None, "{ref: s1}")), part("red", files["red"])],
    ),
    "a scene part that is a list": BadBody(
        code="invalid-input",
        pointers=("/scene",),
        parts=lambda files: [("scene", (None, "[]")), part("red", files["red"])],
    ),
    "a scene part of three mebibytes": BadBody(
        code="invalid-input",
        pointers=("/scene",),
        parts=lambda _: [("scene", (None, json.dumps({"ref": "x" * 3 * 2**20})))],
    ),
}


def post(service: Service, body: Any, **headers: str) -> httpx.Response:
    named = {name.replace("_", "-"): value for name, value in headers.items()}
    return service.call("POST", "/v1/scenes", content=body, headers=named)


def encoded(service: Service, parts: Iterable[PartSent]) -> tuple[bytes, str]:
    """Return a multipart body and its Content-Type."""
    request = service.client.build_request("POST", "/v1/scenes", files=list(parts))
    return request.read(), request.headers["Content-Type"]


def whole_body(service: Service, files: Mapping[str, Path]) -> tuple[bytes, str]:
    """Return the body of a good scene."""
    return encoded(service, [SCENE_PART, *(part(name, files[name]) for name in GIVEN)])


def test_each_bad_body_gets_its_problem_document_and_nothing_lands(
    service: Service, tmp_path: Path
) -> None:
    files = write_files(tmp_path / "files")
    for case, bad in BAD_BODIES.items():
        body, media_type = encoded(service, bad.parts(files))
        answer = post(service, body, Content_Type=media_type)
        document = check_problem(answer, bad.status, bad.code, case=case)
        pointers = tuple(error.get("pointer") for error in document.get("errors", []))
        assert pointers == bad.pointers, (case, document)
        check_nothing_landed(service, case=case)


def test_a_body_that_ends_early_or_is_no_multipart_is_refused(
    service: Service, tmp_path: Path
) -> None:
    body, media_type = whole_body(service, write_files(tmp_path / "files"))
    for case, size in (("in a file", len(body) // 2), ("in the last boundary", len(body) - 8)):
        answer = post(service, body[:size], Content_Type=media_type)
        check_problem(answer, 400, "malformed-body", case=case)
        check_nothing_landed(service, case=case)
    for case, sent in (("nothing", b""), ("nonsense", b"nonsense")):
        answer = post(service, sent, Content_Type=media_type)
        check_problem(answer, 400, "malformed-body", case=case)
    for media in ("text/json", "multipart/form-data", "image/tiff"):
        answer = post(service, body, Content_Type=media)
        check_problem(answer, 415, "unsupported-media-type", case=media)
    check_nothing_landed(service, case="another media type")


def test_a_body_that_was_damaged_on_its_way_is_refused(service: Service, tmp_path: Path) -> None:
    body, media_type = whole_body(service, write_files(tmp_path / "files"))
    digest = "sha-256=:47DEQpj8HBSa+/TImW+5JCeuQeRkm5NMpJWZG3hSuFU=:"
    answer = post(service, body, Content_Type=media_type, Content_Digest=digest)
    check_problem(answer, 400, "digest-mismatch", case="another digest")
    check_nothing_landed(service, case="another digest")


def is_soon(condition: Callable[[], bool]) -> bool:
    """Whether a condition comes true within half a minute."""
    pause = threading.Event()
    deadline = now() + timedelta(seconds=30)
    while not condition():
        if now() > deadline:
            return False
        pause.wait(0.02)
    return True


def test_a_connection_that_breaks_leaves_nothing_behind(service: Service, tmp_path: Path) -> None:
    size = (1200, 1200)
    numbers = np.random.default_rng(1).integers(0, 65_000, size).astype(np.uint16)
    red = write_band(tmp_path / "red.tif", numbers)
    body, media_type = encoded(service, [SCENE_PART, part("red", red)])
    assert len(body) > 2 * 2**20
    head = (
        f"POST /v1/scenes HTTP/1.1\r\nHost: service\r\nAuthorization: Bearer {service.secret}\r\n"
        f"Content-Type: {media_type}\r\nContent-Length: {len(body)}\r\n\r\n"
    )
    address = service.client.base_url
    with socket.create_connection((address.host, address.port or 0)) as connection:
        connection.sendall(head.encode() + body[: -len(body) // 4])
        assert is_soon(lambda: len(files_in(service, "incoming")) == 1)
    assert is_soon(lambda: files_in(service, "incoming") == [])
    check_nothing_landed(service, case="a broken connection")
    assert service.call("GET", "/readyz").status_code == 200


@pytest.fixture
def small(settings: Settings) -> Iterator[Service]:
    """A service that takes scenes of up to a mebibyte."""
    limited = settings.model_copy(update={"scene_upload_limit_bytes": 2**20})
    with serving(limited) as running:
        yield running


def test_an_upload_over_the_limit_is_refused_whether_or_not_it_says_its_size(
    small: Service, tmp_path: Path
) -> None:
    numbers = np.random.default_rng(1).integers(0, 65_000, (800, 800)).astype(np.uint16)
    files = {**write_files(tmp_path / "files"), "red": write_band(tmp_path / "red.tif", numbers)}
    body, media_type = whole_body(small, files)
    assert len(body) > 2**20
    answer = post(small, body, Content_Type=media_type)
    check_problem(answer, 413, "body-too-large", case="declared")
    check_nothing_landed(small, case="declared")

    def pieces() -> Iterator[bytes]:
        for start in range(0, len(body), 50_000):
            yield body[start : start + 50_000]

    answer = post(small, pieces(), Content_Type=media_type)
    check_problem(answer, 413, "body-too-large", case="chunked")
    check_nothing_landed(small, case="chunked")
    # A scene within the limit is taken in pieces too.
    body, media_type = whole_body(small, write_files(tmp_path / "good"))
    assert post(small, pieces(), Content_Type=media_type).status_code == 202


@pytest.mark.parametrize(
    "change", [{"disk_reserve_bytes": 2**62}, {"archive_limit_bytes": 1}], ids=["disk", "archive"]
)
def test_a_full_disk_answers_503_and_when_to_come_back(
    settings: Settings, tmp_path: Path, change: Mapping[str, int]
) -> None:
    files = write_files(tmp_path / "files")
    given = {name: files[name] for name in GIVEN}
    if "archive_limit_bytes" in change:
        with serving(settings) as service:
            assert service.post_scene({**SCENE, "ref": "kept"}, given).json()["state"] == "done"
    with serving(settings.model_copy(update=change)) as service:
        kept = files_in(service, "archive")
        answer = service.post_scene({**SCENE, "acquired_at": "2024-06-08T10:10:31Z"}, given)
        check_problem(answer, 503, "disk-full", case="a full disk")
        assert int(answer.headers["Retry-After"]) > 0
        assert files_in(service, "incoming") == []
        assert files_in(service, "archive") == kept
        assert problem_type(service.call("GET", "/v1/scenes/s1")) == "/problems/scene-not-found"
        # Reading goes on.
        assert service.call("GET", "/v1/scenes").status_code == 200


def problem_type(answer: httpx.Response) -> str:
    return str(answer.json()["type"])


def test_what_only_the_pixels_show_fails_the_scene_with_the_same_problem(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(square("A", col=5, row=5), square("B", col=20, row=20))
    reflectances = {"red": 0.2, "nir": 0.3}
    recoded = uniform_scene(tmp_path / "recoded", reflectances)
    classes = np.full((20, 20), 4, dtype=np.uint8)
    classes[4, 4] = 12
    write_band(recoded["quality"], classes, cell_m=20)
    damaged = uniform_scene(tmp_path / "damaged", reflectances)
    damage(noisy(damaged["nir"]))
    for ref, day, files, code, pointer in (
        ("recoded", "03", recoded, "wrong-quality-layer", "/quality"),
        ("damaged", "08", damaged, "unreadable-pixels", "/nir"),
    ):
        scene = {**SCENE, "ref": ref, "acquired_at": f"2024-06-{day}T10:10:31Z"}
        answer = service.post_scene(scene, files)
        assert (answer.status_code, answer.json()["state"]) == (200, "failed")
        failure = service.get(f"/v1/scenes/{ref}")["failure"]
        assert (failure["type"], failure["status"]) == (f"/problems/{code}", 422)
        assert failure["instance"] == f"/v1/scenes/{ref}"
        assert [error["pointer"] for error in failure["errors"]] == [pointer]
        assert str(service.settings.data) not in json.dumps(failure)
        # No parcel got a figure, not even the one whose pixels are sound.
        assert service.get(f"/v1/scenes/{ref}/parcels")["parcels"] == []
        assert service.get(f"/v1/scenes/{ref}")["parcels_measured"] is None
    assert service.series("B")["mean"] == []
    with service.sessions.reading() as session:
        assert session.scalar(select(func.count()).select_from(Write)) == 0
        assert session.scalar(select(func.count()).select_from(Observation)) == 0
