"""Products pushed from a terminal: what is sent, what is not, and what a script can rely on."""

import json
import os
import re
import resource
import signal
import socket
import subprocess
import tarfile
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from datetime import timedelta
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path
from typing import Any

import httpx
import pytest

from tests.conftest import fresh_settings
from tests.products_made import SENSED_AT, write_landsat, write_safe
from tests.pushing import command, environment, pushed, pushing
from tests.serving import SCENE, Service, serving, square, uniform_scene

SECRET = "flk_" + "x" * 43
SURFACE = {"red": 0.05, "green": 0.08, "blue": 0.04, "nir": 0.40, "swir16": 0.2, "swir22": 0.1}


@pytest.fixture
def service(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[Service]:
    """The service on SQLite: a client does not know its database."""
    with serving(fresh_settings(request, "sqlite", tmp_path / "data")) as running:
        yield running


def folder_product(folder: Path, *, red: float = 0.05, **members: Any) -> Path:
    """Write a folder of GeoTIFFs named by part, with its manifest."""
    uniform_scene(folder, {"red": red, "nir": 0.40})
    (folder / "scene.json").write_text(json.dumps({**SCENE, **members}), "utf-8")
    return folder


def scenes(service: Service) -> dict[str, dict[str, Any]]:
    """Return the scenes by ref, oldest acquisition first."""
    found = service.get("/v1/scenes")["scenes"]
    return {scene["ref"]: scene for scene in reversed(found)}


def three_products(folder: Path) -> list[str]:
    """Write a product of each kind; return their refs in order of acquisition."""
    folder_product(folder / "a-folder", acquired_at="2024-06-09T10:10:31Z")
    bundle = write_landsat(folder, SURFACE, sensed_at=SENSED_AT + timedelta(days=1))
    safe = write_safe(folder, SURFACE, sensed_at=SENSED_AT)
    (folder / "read me.txt").write_text("nothing to see", "utf-8")
    return [safe.stem, bundle.name, "s1"]


def test_a_folder_of_products_is_found_sent_and_not_sent_again(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(square("A", col=6, row=6, size=12))
    refs = three_products(tmp_path / "in")
    found = pushed(service, tmp_path, tmp_path / "in", "--dry-run", url="http://127.0.0.1:1")
    assert (found.code, found.outcomes) == (0, ["found"] * 3), found.told
    assert [line["scene"]["ref"] for line in found.lines] == refs
    assert "nir08 ← B8A 20 m" in found.told
    assert "TCI (no reflectance)" in found.told
    assert scenes(service) == {}

    sent = pushed(service, tmp_path, tmp_path / "in", "--wait")
    assert (sent.code, sent.outcomes) == (0, ["sent"] * 3), sent.told
    assert list(scenes(service)) == refs
    assert [line["report"]["state"] for line in sent.lines] == ["done"] * 3
    assert f"{refs[0]}: done, 1 parcels measured, 0 unseen, 0 alerts opened" in sent.told
    assert sent.told.splitlines()[-1] == "3 sent."
    # Half a step of the stored numbers is the most that rounding does to a mean.
    assert service.series("A", "red")["mean"] == pytest.approx([0.05] * 3, abs=5e-5)
    before = scenes(service)

    again = pushed(service, tmp_path, tmp_path / "in", "--wait")
    assert (again.code, again.outcomes) == (0, ["already-there"] * 3), again.told
    assert scenes(service) == before


def test_what_is_there_is_told_without_sending_a_byte_of_it(
    request: pytest.FixtureRequest, tmp_path: Path
) -> None:
    settings = fresh_settings(request, "sqlite", tmp_path / "data")
    three_products(tmp_path / "in")
    with serving(settings) as service:
        secret = service.key("ingest")
        assert pushed(service, tmp_path, tmp_path / "in", secret=secret).code == 0
    full = settings.model_copy(update={"disk_reserve_bytes": 2**62})
    with serving(full) as service:
        there = pushed(service, tmp_path, tmp_path / "in", secret=secret)
        assert (there.code, there.outcomes) == (0, ["already-there"] * 3), there.told
        folder_product(tmp_path / "new", ref="s2", acquired_at="2024-07-09T10:10:31Z")
        # What is not there would have to be sent, for which this disk has no room.
        more = pushed(service, tmp_path, tmp_path / "new", tmp_path / "in", secret=secret)
        assert (more.code, more.outcomes[-1]) == (4, "unavailable"), more.told
        assert "disk is too full" in more.told


def test_other_content_of_a_ref_is_refused_unless_it_is_to_replace(
    service: Service, tmp_path: Path
) -> None:
    service.put_parcels(square("A", col=5, row=5))
    product = folder_product(tmp_path / "in" / "p")
    assert pushed(service, tmp_path, product, "--wait").code == 0
    folder_product(product, red=0.10)
    other = pushed(service, tmp_path, product)
    assert (other.code, other.outcomes) == (3, ["refused"])
    assert "Say `--replace`" in other.lines[0]["detail"]
    replaced = pushed(service, tmp_path, product, "--wait", "--replace")
    assert (replaced.code, replaced.outcomes) == (0, ["sent"]), replaced.told
    assert service.series("A", "red")["mean"] == pytest.approx([0.10], abs=1e-6)
    again = pushed(service, tmp_path, product, "--replace")
    assert (again.code, again.outcomes) == (0, ["already-there"])
    # The same files with other metadata are other content too; the service says so.
    folder_product(product, red=0.10, tile="t2")
    renamed = pushed(service, tmp_path, product)
    assert (renamed.code, renamed.outcomes) == (3, ["refused"])
    assert '"replace": true' in renamed.lines[0]["detail"]


def test_a_product_under_the_other_name_of_its_near_infrared_is_known_again(
    service: Service, tmp_path: Path
) -> None:
    product = folder_product(
        tmp_path / "p",
        sensor="generic",
        scaling={"nir08": {"scale": 1e-4, "offset": -0.1}, "red": {"scale": 1e-4, "offset": -0.1}},
    )
    (product / "nir.tif").rename(product / "nir08.tif")
    (product / "quality.tif").unlink()
    assert pushed(service, tmp_path, product).outcomes == ["sent"]
    assert pushed(service, tmp_path, product).outcomes == ["already-there"]


def test_what_failed_or_was_withdrawn_is_sent_again(service: Service, tmp_path: Path) -> None:
    product = folder_product(tmp_path / "p")
    assert pushed(service, tmp_path, product, "--wait").outcomes == ["sent"]
    service.call("DELETE", "/v1/scenes/s1")
    assert scenes(service)["s1"]["state"] == "withdrawn"
    assert pushed(service, tmp_path, product, "--wait").outcomes == ["sent"]
    assert scenes(service)["s1"]["state"] == "done"

    bad = folder_product(tmp_path / "bad", ref="bad", acquired_at="2024-07-03T10:10:31Z")
    service.put_parcels(square("A", col=5, row=5))
    path = bad / "nir.tif"
    content = bytearray(path.read_bytes())
    start = content.find(b"\x78\x9c") if b"\x78\x9c" in content else len(content) // 2
    content[start : start + 8] = b"\xff" * 8
    path.write_bytes(content)
    for _ in range(2):
        failed = pushed(service, tmp_path, bad, "--wait")
        assert (failed.code, failed.outcomes) == (3, ["refused"]), failed.told
        assert failed.lines[0]["report"]["state"] == "failed"
        assert failed.lines[0]["detail"]
    assert service.get("/v1/scenes/bad")["generation"] == 2


def test_a_tar_is_read_as_the_folder_that_is_in_it(service: Service, tmp_path: Path) -> None:
    bundle = write_landsat(tmp_path / "in", SURFACE, number=5)
    packed = tmp_path / "in" / f"{bundle.name}.tar"
    with tarfile.open(packed, "w") as tar:
        for path in sorted(bundle.iterdir()):
            tar.add(path, arcname=path.name)
    both = pushed(service, tmp_path, packed, bundle)
    assert (both.code, both.outcomes) == (0, ["sent", "already-there"]), both.told
    (scene,) = scenes(service).values()
    assert (scene["platform"], scene["tile"]) == ("landsat-5", "192027")
    assert scene["acquired_at"] == "2024-06-03T10:17:59.919000Z"


def test_a_landsat_scaling_of_its_own_goes_along(service: Service, tmp_path: Path) -> None:
    service.put_parcels(square("A", col=6, row=6, size=12))
    write_landsat(tmp_path / "in", SURFACE, scaling=(3e-05, -0.1))
    sent = pushed(service, tmp_path, tmp_path / "in", "--wait")
    assert (sent.code, sent.outcomes) == (0, ["sent"]), sent.told
    assert sent.lines[0]["scene"]["scaling"]["red"] == {"scale": 3e-05, "offset": -0.1}
    assert service.series("A", "red")["mean"] == pytest.approx([0.05], abs=3e-05)
    assert service.series("A", "lwir11")["mean"] == pytest.approx([296.0], abs=0.01)


def _xml(safe: Path) -> Path:
    return safe / "MTD_MSIL2A.xml"


def _edited(path: Path, old: str, new: str) -> None:
    text = path.read_text("utf-8")
    assert old in text
    path.write_text(text.replace(old, new), "utf-8")


def _without_b08(safe: Path) -> None:
    next(safe.rglob("*_B08_10m.jp2")).unlink()


def _with_two_granules(safe: Path) -> None:
    (safe / "GRANULE" / "L2A_T33UVS_A012345_20240603T101759").mkdir()


def _with_two_listed(safe: Path) -> None:
    _edited(_xml(safe), "</Granule_List>", "<Granule/></Granule_List>")


def _of_another_baseline(safe: Path) -> None:
    _edited(_xml(safe), "<PROCESSING_BASELINE>05.10", "<PROCESSING_BASELINE>02.12")


def _without_offsets(safe: Path) -> None:
    text = _xml(safe).read_text("utf-8")
    _xml(safe).write_text(re.sub(r"<BOA_ADD_OFFSET_.*OFFSET_VALUES_LIST>", "", text, flags=re.S))


def _without_one_offset(safe: Path) -> None:
    _edited(_xml(safe), '<BOA_ADD_OFFSET band_id="7">-1000</BOA_ADD_OFFSET>', "")


def _with_a_file_outside(safe: Path) -> None:
    image = next(safe.rglob("*_B04_10m.jp2"))
    outside = safe.parent.parent / "elsewhere.jp2"
    image.rename(outside)
    image.symlink_to(outside)


def _with_a_bomb(safe: Path) -> None:
    levels = "".join(
        f'<!ENTITY b{n} "{f"&b{n - 1};" * 10}">' if n else '<!ENTITY b0 "b">' for n in range(12)
    )
    _edited(_xml(safe), "<n1:Level-2A", f"<!DOCTYPE x [{levels}]><n1:Level-2A")
    _edited(_xml(safe), "<PRODUCT_TYPE>S2MSI2A", "<PRODUCT_TYPE>&b11;")


def _too_large(safe: Path) -> None:
    with _xml(safe).open("ab") as file:
        file.truncate(17 * 2**20)


def _half_written(safe: Path) -> None:
    content = _xml(safe).read_bytes()
    _xml(safe).write_bytes(content[: len(content) // 2])


def _of_level_1(safe: Path) -> None:
    _xml(safe).rename(safe / "MTD_MSIL1C.xml")


def _called_otherwise(safe: Path) -> None:
    safe.rename(safe.with_name(safe.name.replace("T33UVR", "T33UVS")))


def _of_another_unit(safe: Path) -> None:
    _edited(_xml(safe), "Sentinel-2B", "Sentinel-2A")


SPOILED_SAFES: list[tuple[Callable[[Path], None], str]] = [
    (_without_b08, "files that are not there or are empty: B08 10 m."),
    (_with_two_granules, "does not hold exactly one granule"),
    (_with_two_listed, "does not hold exactly one granule"),
    (_of_another_baseline, "say different processing baselines"),
    (_without_offsets, "do not state BOA_ADD_OFFSET of B01"),
    (_without_one_offset, "do not state BOA_ADD_OFFSET of B08"),
    (_with_a_file_outside, "names a file outside of its own folder"),
    (_with_a_bomb, "declares a document type or entities"),
    (_too_large, "is over 16 MiB"),
    (_half_written, "is no well-formed XML, or ends early"),
    (_of_level_1, "This is a Level-1C product"),
    (_called_otherwise, "the name of another product than its metadata"),
    (_of_another_unit, "say different spacecraft"),
]


def test_safe_folders_that_can_not_be_trusted_are_refused_each_in_one_sentence(
    tmp_path: Path,
) -> None:
    folders = []
    for number, (spoil, _) in enumerate(SPOILED_SAFES):
        folders.append(tmp_path / f"in-{number}" / "in")
        spoil(write_safe(folders[-1], SURFACE))
    _are_refused(tmp_path, folders, [said for _, said in SPOILED_SAFES])


def _are_refused(tmp_path: Path, folders: list[Path], said: list[str]) -> None:
    """Hold that what is in each folder is refused, before a service is asked for anything."""
    done = subprocess.run(
        command(*folders),
        stdin=subprocess.DEVNULL,
        capture_output=True,
        env=environment(tmp_path, url="http://127.0.0.1:1", secret=SECRET),
        text=True,
        timeout=120,
        check=False,
    )
    assert done.returncode == 3, done.stderr
    lines = [json.loads(line) for line in done.stdout.splitlines()]
    assert {line["outcome"] for line in lines} == {"refused"}
    for line, wanted in zip(lines, said, strict=True):
        assert wanted in line["detail"]
    assert str(tmp_path) not in done.stderr + done.stdout
    assert f"{len(said)} refused." in done.stderr.splitlines()


def _mtl(bundle: Path) -> Path:
    return next(bundle.glob("*_MTL.txt"))


def _without_group(name: str) -> Callable[[Path], None]:
    def spoil(bundle: Path) -> None:
        text = _mtl(bundle).read_text("ascii")
        kept = re.sub(rf"  GROUP = {name}\n.*END_GROUP = {name}\n", "", text, flags=re.S)
        assert kept != text
        _mtl(bundle).write_text(kept, "ascii")

    return spoil


def _flat(bundle: Path) -> None:
    lines = _mtl(bundle).read_text("ascii").splitlines()
    _mtl(bundle).write_text("\n".join(line for line in lines if "GROUP" not in line), "ascii")


def _open_ended(bundle: Path) -> None:
    text = _mtl(bundle).read_text("ascii")
    _mtl(bundle).write_text(text[: text.index("  GROUP = LEVEL1_RADIOMETRIC")], "ascii")


def _of_level_1_text(bundle: Path) -> None:
    _edited(_mtl(bundle), 'PROCESSING_LEVEL = "L2SP"', 'PROCESSING_LEVEL = "L1TP"')


def _with_a_path(bundle: Path) -> None:
    _edited(_mtl(bundle), f'"{bundle.name}_SR_B4.TIF"', '"../secret.TIF"')


def _on_another_day(bundle: Path) -> None:
    _edited(_mtl(bundle), "DATE_ACQUIRED = 2024-06-03", "DATE_ACQUIRED = 2024-06-04")


def _without_band_4(bundle: Path) -> None:
    next(bundle.glob("*_SR_B4.TIF")).unlink()


def _without_mtl(bundle: Path) -> None:
    _mtl(bundle).unlink()


SPOILED_BUNDLES: list[tuple[Callable[[Path], None], str]] = [
    (_flat, "has no group LANDSAT_METADATA_FILE"),
    (_without_group("PRODUCT_CONTENTS"), "has no group PRODUCT_CONTENTS"),
    (
        _without_group("LEVEL2_SURFACE_REFLECTANCE_PARAMETERS"),
        "has no group LEVEL2_SURFACE_REFLECTANCE_PARAMETERS",
    ),
    (
        _without_group("LEVEL2_SURFACE_TEMPERATURE_PARAMETERS"),
        "has no group LEVEL2_SURFACE_TEMPERATURE_PARAMETERS",
    ),
    (_open_ended, "has a group that does not end"),
    (_of_level_1_text, "This is a Level-1 product"),
    (_with_a_path, "names a file outside of its own folder"),
    (_on_another_day, "another date than its product identifier"),
    (_without_band_4, "files that are not there or are empty: SR_B4."),
    (_without_mtl, "has no MTL text"),
]


def test_landsat_bundles_that_can_not_be_trusted_are_refused_each_in_one_sentence(
    tmp_path: Path,
) -> None:
    folders = []
    for number, (spoil, _) in enumerate(SPOILED_BUNDLES):
        folders.append(tmp_path / f"in-{number}" / "in")
        spoil(write_landsat(folders[-1], SURFACE))
    _are_refused(tmp_path, folders, [said for _, said in SPOILED_BUNDLES])


SPOILED_MANIFESTS: list[tuple[dict[str, Any], str]] = [
    ({"files": {"red": "../red.tif"}}, "names a file outside of its own folder"),
    ({"files": {"red": "/etc/hostname"}}, "names a file outside of its own folder"),
    ({"files": {"red": "no.tif"}}, "lacks the files of red"),
    ({"files": {"purple": "red.tif"}}, "names a part that there isn't"),
    ({"files": ["red.tif"]}, "`files` in scene.json is an object"),
    ({"replace": True}, "say `--replace`"),
    ({"ref": None}, "at least `ref`"),
]


def test_what_has_a_manifest_that_can_not_be_followed_or_is_no_product_is_refused(
    tmp_path: Path,
) -> None:
    folders = []
    for number, (members, _) in enumerate(SPOILED_MANIFESTS):
        folders.append(tmp_path / f"in-{number}" / "in")
        folder_product(folders[-1] / "p", **members)
        (folders[-1] / "red.tif").write_bytes(b"II*\0")
    (tmp_path / "empty").mkdir()
    archive = tmp_path / "S2.SAFE.zip"
    archive.write_bytes(b"PK\x03\x04")
    # Of these it is known at once that they hold no product, before others are read.
    _are_refused(
        tmp_path,
        [tmp_path / "empty", archive, *folders],
        [
            "What is read: Sentinel-2 Level-2A SAFE folder; Landsat Collection 2",
            "unpack it",
            *(said for _, said in SPOILED_MANIFESTS),
        ],
    )


def test_one_bad_product_does_not_stop_the_others_and_decides_the_code(
    service: Service, tmp_path: Path
) -> None:
    _without_b08(write_safe(tmp_path / "in", SURFACE))
    folder_product(tmp_path / "in" / "bad", ref="bad", sensor="none")
    folder_product(tmp_path / "in" / "good", acquired_at="2024-07-03T10:10:31Z")
    done = pushed(service, tmp_path, tmp_path / "in")
    assert (done.code, sorted(done.outcomes)) == (3, ["refused", "refused", "sent"]), done.told
    assert list(scenes(service)) == ["s1"]
    *_, first, second, third = done.told.splitlines()
    assert first == "2 refused, 1 sent."
    assert second.startswith("  S2B_MSIL2A_20240603T101559_N0510_R065_T33UVR")
    assert third.startswith("  bad: refused: No sensor profile")


def test_keys_and_services_that_do_not_work_have_their_own_codes(
    service: Service, tmp_path: Path
) -> None:
    product = folder_product(tmp_path / "in" / "a")
    folder_product(tmp_path / "in" / "b", ref="s2", acquired_at="2024-07-03T10:10:31Z")
    for secret in (SECRET, service.key("read"), service.key("ingest", holdings=["north"])):
        refused = pushed(service, tmp_path, tmp_path / "in", secret=secret)
        assert (refused.code, refused.outcomes) == (5, ["not-allowed"]), refused.told
        assert "1 not allowed, 1 not tried." in refused.told
    with socket.create_server(("127.0.0.1", 0)) as free:
        port = free.getsockname()[1]
    away = pushed(service, tmp_path, product, "--patience", "0", url=f"http://127.0.0.1:{port}")
    assert (away.code, away.outcomes) == (4, ["unavailable"])
    assert "can't be reached" in away.told
    assert pushed(service, tmp_path, tmp_path / "none").code == 2
    assert pushed(service, tmp_path).code == 2
    assert scenes(service) == {}


class _Front(ThreadingHTTPServer):
    """A proxy before the service that is troubled at first, then passes requests on."""

    def __init__(self, target: str, troubles: list[str]) -> None:
        super().__init__(("127.0.0.1", 0), _FrontRequest)
        self.target = target
        self.troubles = troubles
        self.met: list[str] = []


class _FrontRequest(BaseHTTPRequestHandler):
    server: _Front

    def do_GET(self) -> None:
        self._pass_on("GET", b"")

    def do_POST(self) -> None:
        trouble = self.server.troubles.pop(0) if self.server.troubles else ""
        self.server.met.append(trouble)
        if trouble == "cut":
            # In the middle of the body.
            self.rfile.read(1000)
            self.connection.shutdown(socket.SHUT_RDWR)
            self.close_connection = True
            return
        body = self.rfile.read(int(self.headers["Content-Length"]))
        if trouble == "answer lost":
            self._ask("POST", body)
            self.connection.shutdown(socket.SHUT_RDWR)
            self.close_connection = True
        elif trouble:
            self.send_response(int(trouble))
            self.send_header("Retry-After", "1")
            self.send_header("Content-Length", "0")
            self.end_headers()
        else:
            self._pass_on("POST", body)

    def _ask(self, method: str, body: bytes) -> httpx.Response:
        names = ("Authorization", "Content-Type", "Content-Digest", "Prefer")
        headers = {name: self.headers[name] for name in names if name in self.headers}
        url = f"{self.server.target}{self.path}"
        return httpx.request(
            method, url, content=body, headers=headers, trust_env=False, timeout=60
        )

    def _pass_on(self, method: str, body: bytes) -> None:
        answer = self._ask(method, body)
        self.send_response(answer.status_code)
        self.send_header("Content-Type", answer.headers["Content-Type"])
        self.send_header("Content-Length", str(len(answer.content)))
        self.end_headers()
        self.wfile.write(answer.content)

    def log_message(self, *_: object) -> None:
        pass


@contextmanager
def front(service: Service, *troubles: str) -> Iterator[tuple[str, list[str]]]:
    """Put a troubled proxy before the service; yield its address and what it did."""
    with _Front(str(service.client.base_url).rstrip("/"), list(troubles)) as server:
        thread = threading.Thread(target=server.serve_forever)
        thread.start()
        yield f"http://127.0.0.1:{server.server_port}", server.met
        server.shutdown()
        thread.join()


def test_what_passes_is_waited_for_as_asked_and_the_scene_is_there_once(
    service: Service, tmp_path: Path
) -> None:
    product = folder_product(tmp_path / "p")
    with front(service, "503", "cut", "429") as (url, met):
        done = pushed(service, tmp_path, product, url=url)
    assert (done.code, done.outcomes) == (0, ["sent"]), done.told
    assert met == ["503", "cut", "429", ""]
    assert done.told.count("Trying again in 1 s.") >= 2
    assert scenes(service)["s1"]["generation"] == 1


def test_an_answer_that_is_lost_is_asked_for_and_nothing_is_sent_twice(
    service: Service, tmp_path: Path
) -> None:
    product = folder_product(tmp_path / "p")
    with front(service, "answer lost") as (url, met):
        done = pushed(service, tmp_path, product, url=url)
    assert (done.code, done.outcomes) == (0, ["already-there"]), done.told
    assert met == ["answer lost"]
    assert scenes(service)["s1"]["generation"] == 1


def test_a_service_that_fails_is_a_fault_and_the_next_product_is_tried(
    service: Service, tmp_path: Path
) -> None:
    folder_product(tmp_path / "in" / "a")
    folder_product(tmp_path / "in" / "b", ref="s2", acquired_at="2024-07-03T10:10:31Z")
    with front(service, "500") as (url, _):
        done = pushed(service, tmp_path, tmp_path / "in", url=url)
    assert (done.code, done.outcomes) == (70, ["fault", "sent"]), done.told


def test_a_watched_folder_is_pushed_as_its_products_become_complete(
    service: Service, tmp_path: Path
) -> None:
    """A product is copied in three steps; what is half there is left, and said once."""
    (inbox := tmp_path / "in").mkdir()
    safe = write_safe(tmp_path / "from", SURFACE)
    last = next(safe.rglob("*_SCL_20m.jp2"))
    content = last.read_bytes()
    last.unlink()
    url = str(service.client.base_url)
    with pushing(
        tmp_path, "--watch-folder", inbox, "--every", "0.2", url=url, secret=service.secret
    ) as process:
        assert process.stdout is not None
        folder_product(inbox / "p", acquired_at="2024-07-03T10:10:31Z")
        first = json.loads(process.stdout.readline())
        assert (first["outcome"], first["scene"]["ref"]) == ("sent", "s1")
        safe.rename(inbox / safe.name)
        half = json.loads(process.stdout.readline())
        assert (half["outcome"], half["product"]) == ("incomplete", safe.name)
        assert "SCL 20 m" in half["detail"]
        (inbox / last.relative_to(tmp_path / "from")).write_bytes(content)
        whole = json.loads(process.stdout.readline())
        assert (whole["outcome"], whole["product"]) == ("sent", safe.name)
        process.send_signal(signal.SIGINT)
        out, told = process.communicate(timeout=30)
    assert (process.returncode, out) == (130, ""), told
    assert told.splitlines()[-1] == "2 sent, 1 incomplete."
    assert "Traceback" not in told
    assert set(scenes(service)) == {"s1", safe.stem}


def test_a_large_product_is_sent_in_little_memory(service: Service, tmp_path: Path) -> None:
    small, large = (folder_product(tmp_path / name, ref=name) for name in ("small", "large"))
    with (large / "red.tif").open("r+b") as file:
        file.truncate(256 * 2**20)
    peaks = [peak_bytes(service, tmp_path, product) for product in (small, large)]
    # The large one is sent whole: the service finds that it is the same tile and pass.
    assert peaks[1] - peaks[0] < 32 * 2**20


def peak_bytes(service: Service, folder: Path, product: Path) -> int:
    """Push a product; return the most memory that the command took."""
    url = str(service.client.base_url)
    child = subprocess.Popen(
        command(product),
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
        env=environment(folder, url=url, secret=service.secret),
    )
    _, status, used = os.wait4(child.pid, 0)
    child.returncode = os.waitstatus_to_exitcode(status)
    assert child.returncode == (0 if product.name == "small" else 3)
    assert isinstance(used, resource.struct_rusage)
    return used.ru_maxrss * 1024
