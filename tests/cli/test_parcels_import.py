"""Parcels imported from a terminal: what is printed where, and what a script can rely on."""

import json
import os
import socket
import subprocess
import sys
import threading
from collections.abc import Iterator
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path

import numpy as np
import pytest
import shapely

from tests.conftest import fresh_settings
from tests.outline_files import Drawn, field_at, geojson, geopackage, zipped_shapefile
from tests.serving import Service, serving

COMMAND_SECONDS = 120
SECRET = "flk_" + "x" * 43
CROSSING = shapely.Polygon(
    [(500_000, 5_500_000), (500_200, 5_500_200), (500_200, 5_500_000), (500_000, 5_500_200)]
)


@pytest.fixture
def service(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[Service]:
    """The service on SQLite: a client does not know its database."""
    with serving(fresh_settings(request, "sqlite", tmp_path / "data")) as running:
        yield running


def imported(
    service: Service, tmp_path: Path, *arguments: str | Path, url: str = "", secret: str = ""
) -> subprocess.CompletedProcess[str]:
    """Run the command against the running service, unless told otherwise."""
    address = url or str(service.client.base_url)
    return run(tmp_path, *arguments, url=address, secret=secret or service.secret)


def run(
    tmp_path: Path, *arguments: str | Path, url: str, secret: str
) -> subprocess.CompletedProcess[str]:
    """Run the command in a process of its own."""
    key_file = tmp_path / "key"
    key_file.write_text(secret, "utf-8")
    return subprocess.run(
        [
            *(sys.executable, "-m", "service.cli", "parcels", "import"),
            *map(str, arguments),
            *("--ref-field", "ref"),
        ],
        stdin=subprocess.DEVNULL,
        capture_output=True,
        env={
            **os.environ,
            "FURROWLIGHT_URL": url,
            "FURROWLIGHT_KEY_FILE": str(key_file),
        },
        text=True,
        timeout=COMMAND_SECONDS,
        check=False,
    )


def refs(service: Service) -> list[str]:
    features = service.get("/v1/parcels", params={"limit": 1000})["features"]
    return sorted(feature["id"] for feature in features)


def test_a_file_is_tried_sent_and_sent_again(service: Service, tmp_path: Path) -> None:
    file = zipped_shapefile(
        tmp_path / "a.zip", field_at("A", title="Long", owner="north", grown="maize"), field_at("B")
    )
    options = ("--name-field", "title", "--holding-field", "owner", "--crop-field", "grown")
    tried = imported(service, tmp_path, file, *options, "--dry-run")
    assert (tried.returncode, tried.stdout) == (0, ""), tried.stderr
    assert tried.stderr.splitlines()[-1] == (
        "Nothing was kept; this would be: 2 created, 0 updated, 0 unchanged, 0 rejected."
    )
    assert refs(service) == []
    sent = imported(service, tmp_path, file, *options)
    assert (sent.returncode, sent.stdout) == (0, ""), sent.stderr
    assert sent.stderr.splitlines()[-1] == "2 created, 0 updated, 0 unchanged, 0 rejected."
    properties = service.get("/v1/parcels/A")["properties"]
    assert [properties[name] for name in ("name", "holding", "crop")] == ["Long", "north", "maize"]
    again = imported(service, tmp_path, file, *options, "--json")
    assert again.returncode == 0
    assert json.loads(again.stdout) == {
        "created": 0,
        "updated": 0,
        "unchanged": 2,
        "rejected": 0,
        "errors": [],
        "warnings": [],
        "dry_run": False,
    }


def test_what_is_refused_exits_with_3_and_says_where(service: Service, tmp_path: Path) -> None:
    bad = Drawn(shape=CROSSING, attributes={"ref": "crossing"})
    file = geopackage(tmp_path / "a.gpkg", field_at("A"), bad, field_at("a/b"))
    strict = imported(service, tmp_path, file)
    assert (strict.returncode, strict.stdout) == (3, "")
    lines = strict.stderr.splitlines()
    assert lines[0].startswith("/file/features/1/geometry: Row 2: The outline is not valid")
    assert lines[1].startswith("/file/features/2/properties/ref: Row 3:")
    assert lines[-1].startswith("furrowlight: 2 things are wrong")
    assert refs(service) == []

    as_json = imported(service, tmp_path, file, "--json")
    assert as_json.returncode == 3
    assert [error["pointer"] for error in json.loads(as_json.stdout)["errors"]] == [
        "/file/features/1/geometry",
        "/file/features/2/properties/ref",
    ]

    lenient = imported(service, tmp_path, file, "--lenient", "--repair")
    assert lenient.returncode == 3
    assert lenient.stderr.splitlines()[-1] == "2 created, 0 updated, 0 unchanged, 1 rejected."
    assert any("Mended here" in line for line in lenient.stderr.splitlines())
    assert refs(service) == ["A", "crossing"]

    missing = imported(service, tmp_path, file, "--name-field", "none")
    assert missing.returncode == 3
    assert missing.stderr.splitlines()[-1].startswith("furrowlight: The file has no such field")
    disguised = tmp_path / "b.gpkg"
    disguised.write_text("<OGRVRTDataSource/>", "utf-8")
    other = imported(service, tmp_path, disguised)
    assert other.returncode == 3
    assert "no GeoPackage, zipped Shapefile or GeoJSON" in other.stderr
    assert "b.gpkg" not in other.stderr


def test_a_large_file_is_waited_for_or_left_to_go_on(service: Service, tmp_path: Path) -> None:
    turns = np.linspace(0, 2 * np.pi, 9_000)[:-1]
    ring = np.column_stack([np.cos(turns), np.sin(turns)]) * 90
    drawn = [
        Drawn(
            shape=shapely.Polygon(ring + np.array([500_000 + 200 * number, 5_499_900])),
            attributes={"ref": str(number)},
        )
        for number in range(30)
    ]
    file = geojson(tmp_path / "a.geojson", *drawn)
    done = imported(service, tmp_path, file, "--json")
    assert done.returncode == 0, done.stderr
    assert json.loads(done.stdout)["created"] == 30
    failing = geopackage(
        tmp_path / "b.gpkg", *drawn, Drawn(shape=CROSSING, attributes={"ref": "x"})
    )
    failed = imported(service, tmp_path, failing)
    assert failed.returncode == 3
    assert "Row 31: The outline is not valid" in failed.stderr
    assert "Nothing was kept" in failed.stderr.splitlines()[-1]


def test_keys_and_services_that_do_not_work_have_their_own_codes(
    service: Service, tmp_path: Path
) -> None:
    file = geopackage(tmp_path / "a.gpkg", field_at("A"))
    reader = imported(service, tmp_path, file, secret=service.key("read"))
    assert reader.returncode == 5
    assert "scope" in reader.stderr
    assert imported(service, tmp_path, file, secret=SECRET).returncode == 5
    with socket.create_server(("127.0.0.1", 0)) as free:
        port = free.getsockname()[1]
    away = imported(service, tmp_path, file, url=f"http://127.0.0.1:{port}")
    assert (away.returncode, away.stdout) == (4, "")
    assert away.stderr.startswith("furrowlight: The service can't be reached.")
    assert imported(service, tmp_path, tmp_path / "none").returncode == 2
    assert refs(service) == []


class _NeverDone(BaseHTTPRequestHandler):
    """Promises an import and says each time that it goes on."""

    def do_POST(self) -> None:
        self.rfile.read(int(self.headers["Content-Length"]))
        self._answer(202, "queued")

    def do_GET(self) -> None:
        self._answer(200, "running")

    def _answer(self, status: int, state: str) -> None:
        job = {"id": "job_1", "kind": "parcels-import", "state": state, "progress": 0.25}
        body = json.dumps({**job, "failure": None, "result": None}).encode()
        self.send_response(status)
        self.send_header("Content-Type", "application/json")
        self.send_header("Content-Length", str(len(body)))
        self.end_headers()
        self.wfile.write(body)

    def log_message(self, *_: object) -> None:
        pass


def test_waiting_too_long_exits_with_6_and_names_the_job(tmp_path: Path) -> None:
    file = geopackage(tmp_path / "a.gpkg", field_at("A"))
    with ThreadingHTTPServer(("127.0.0.1", 0), _NeverDone) as server:
        threading.Thread(target=server.serve_forever).start()
        url = f"http://127.0.0.1:{server.server_port}"
        done = run(tmp_path, file, "--timeout", "1", url=url, secret=SECRET)
        server.shutdown()
    assert (done.returncode, done.stdout) == (6, "")
    assert "job_1 is still running" in done.stderr
