"""Files made to mislead or to exhaust: each is refused by its header, with one sentence.

The attacks are those listed in the design notes (measured there on naive code); layouts of
hand-made headers follow TIFF 6.0 and ISO/IEC 15444-1.
"""

import json
import os
import struct
import subprocess
import sys
import threading
from collections.abc import Callable
from http.server import BaseHTTPRequestHandler, HTTPServer
from pathlib import Path

import numpy as np
import pytest
import rasterio
from affine import Affine
from rasterio.errors import RasterioIOError

from service.errors import RejectedInput
from service.tiles.environment import ALLOWED_DRIVERS
from service.tiles.intake import Budget, inspect

UTM = "EPSG:32633"
CORNER = Affine(10.0, 0.0, 500_000.0, 0.0, -10.0, 5_400_000.0)
HEADER_BYTES = 256 * 1024


def rejection_of(path: Path, **options: Budget) -> RejectedInput:
    with pytest.raises(RejectedInput) as caught:
        inspect(path, pointer="/red", **options)
    error = caught.value
    assert [fault.pointer for fault in error.faults] == ["/red"]
    assert error.detail.endswith(".")
    assert path.name not in error.detail
    assert str(path.parent) not in error.detail
    return error


def bytes_read_by(action: Callable[[], object]) -> int:
    """Return how many bytes this process asked the system to read meanwhile."""

    def so_far() -> int:
        lines = Path("/proc/self/io").read_text(encoding="ascii").splitlines()
        return int(dict(line.split(": ") for line in lines)["rchar"])

    start = so_far()
    action()
    return so_far() - start


def write_tiff(
    path: Path,
    *,
    rows: int = 64,
    cols: int = 64,
    bands: int = 1,
    dtype: str = "uint16",
    crs: str | None = UTM,
    transform: Affine = CORNER,
    **options: object,
) -> Path:
    numbers = np.random.default_rng(7).integers(1, 10_000, (bands, rows, cols)).astype(dtype)
    with rasterio.open(
        path, "w", driver="GTiff", height=rows, width=cols, count=bands, dtype=dtype, crs=crs,
        transform=transform, **options,
    ) as file:  # fmt: skip
        file.write(numbers)
    return path


def claimed_tiff(
    path: Path,
    *,
    cols: int,
    rows: int,
    rows_per_strip: int,
    size: int,
    bands: int = 1,
    bits: int = 16,
    sample_format: int = 1,
    compression: int = 1,
    strip: tuple[int, int] | None = None,
) -> Path:
    """Write a header alone, then lengthen the file to `size` without writing (a hole)."""
    tags = [
        (256, 4, cols),
        (257, 4, rows),
        (258, 3, bits),
        (259, 3, compression),
        (262, 3, 1),
        (273, 4, strip[0] if strip else 4096),
        (277, 3, bands),
        (278, 4, rows_per_strip),
        (279, 4, strip[1] if strip else size - 4096),
        (284, 3, 1),
        (339, 3, sample_format),
    ]
    body = struct.pack("<2sHL", b"II", 42, 8) + struct.pack("<H", len(tags))
    for tag, kind, value in tags:
        body += struct.pack("<HHL", tag, kind, 1)
        body += struct.pack("<HH", value, 0) if kind == 3 else struct.pack("<L", value)
    with path.open("wb") as file:
        file.write(body + struct.pack("<L", 0))
        file.truncate(size)
    return path


def test_only_the_allowed_drivers_are_registered() -> None:
    # Fails when a newer GDAL brings a driver that `environment` does not list.
    with rasterio.Env() as env:
        assert set(env.drivers()) <= ALLOWED_DRIVERS
        assert {"GTiff", "JP2OpenJPEG"} <= set(env.drivers())


def test_the_guards_of_the_design_stand_for_this_process_and_its_children() -> None:
    guards = {
        "GDAL_DISABLE_READDIR_ON_OPEN": "EMPTY_DIR",
        "GDAL_PAM_ENABLED": "NO",
        "GDAL_GEOREF_SOURCES": "INTERNAL",
        "GDAL_CACHEMAX": "64",
        "PROJ_NETWORK": "OFF",
    }
    seen = "import os, json, service.tiles; print(json.dumps(dict(os.environ)))"
    # A child that was started with the opposite is put right before it imports rasterio.
    started_with = os.environ | dict.fromkeys(guards, "YES")
    done = subprocess.run(
        [sys.executable, "-c", seen], env=started_with, check=True, capture_output=True
    )
    assert guards.items() <= json.loads(done.stdout).items()
    assert guards.items() <= os.environ.items()


def test_a_virtual_raster_under_a_tiff_name_is_refused_and_not_followed(tmp_path: Path) -> None:
    secret = tmp_path / "secret.bin"
    secret.write_bytes(b"s" * 64)
    path = tmp_path / "scene.tif"
    path.write_text(
        '<VRTDataset rasterXSize="8" rasterYSize="8"><VRTRasterBand dataType="Byte" band="1" '
        f'subClass="VRTRawRasterBand"><SourceFilename>{secret}</SourceFilename>'
        "<ImageOffset>0</ImageOffset><PixelOffset>1</PixelOffset><LineOffset>8</LineOffset>"
        "</VRTRasterBand></VRTDataset>",
        encoding="ascii",
    )
    assert rejection_of(path).code == "not-a-raster"
    # Nor does the library itself know the format any more.
    with pytest.raises(RasterioIOError):
        rasterio.open(path)


def test_a_url_makes_no_request() -> None:
    asked: list[str] = []

    class Recorder(BaseHTTPRequestHandler):
        def do_GET(self) -> None:
            asked.append(self.path)
            self.send_error(404)

        do_HEAD = do_GET  # noqa: N815

    server = HTTPServer(("127.0.0.1", 0), Recorder)
    thread = threading.Thread(target=server.serve_forever)
    thread.start()
    try:
        with pytest.raises(RasterioIOError):
            rasterio.open(f"/vsicurl/http://127.0.0.1:{server.server_port}/scene.tif")
    finally:
        server.shutdown()
        thread.join()
        server.server_close()
    assert asked == []


def test_files_beside_a_raster_are_not_read(tmp_path: Path) -> None:
    path = write_tiff(tmp_path / "scene.tif", nodata=0)
    (tmp_path / "scene.tif.aux.xml").write_text(
        "<PAMDataset><SRS>EPSG:3857</SRS><GeoTransform>1, 2, 0, 3, 0, -2</GeoTransform>"
        '<PAMRasterBand band="1"><NoDataValue>77</NoDataValue></PAMRasterBand></PAMDataset>',
        encoding="ascii",
    )
    (tmp_path / "scene.tfw").write_text("1\n0\n0\n-1\n0\n0\n", encoding="ascii")
    write_tiff(tmp_path / "scene.tif.ovr", rows=32, cols=32, crs=None)
    header = inspect(path, pointer="/red")
    assert (header.grid.crs, header.grid.transform, header.nodata) == (UTM, CORNER, (0.0,))
    with rasterio.open(path) as file:
        assert file.overviews(1) == []
        assert [Path(name).name for name in file.files] == ["scene.tif"]


def test_a_world_file_does_not_place_a_raster_that_says_nothing(tmp_path: Path) -> None:
    path = tmp_path / "scene.tif"
    with pytest.warns(rasterio.errors.NotGeoreferencedWarning):
        write_tiff(path, transform=Affine.identity())
    (tmp_path / "scene.tfw").write_text("10\n0\n0\n-10\n500005\n5399995\n", encoding="ascii")
    assert rejection_of(path).code == "unsupported-grid"


@pytest.mark.parametrize("content", [b"", b"II", b"not a raster at all\n" * 50, b"GIF89a" * 20])
def test_what_is_not_a_raster_is_refused(tmp_path: Path, content: bytes) -> None:
    path = tmp_path / "scene.tif"
    path.write_bytes(content)
    assert rejection_of(path).code == "not-a-raster"


@pytest.mark.parametrize("magic", [b"II*\x00", b"MM\x00*", b"II+\x00", b"MM\x00+"])
def test_magic_bytes_alone_are_a_truncated_raster(tmp_path: Path, magic: bytes) -> None:
    path = tmp_path / "scene.tif"
    path.write_bytes(magic)
    assert rejection_of(path).code == "truncated-raster"


@pytest.mark.parametrize("magic", [b"II*\x00", b"MM\x00*", b"II+\x00", b"\xff\x4f\xff\x51"])
def test_magic_bytes_before_nonsense_are_refused(tmp_path: Path, magic: bytes) -> None:
    path = tmp_path / "scene.tif"
    path.write_bytes(magic + np.random.default_rng(3).bytes(4000))
    assert rejection_of(path).code in {"truncated-raster", "unsupported-raster"}


def test_one_strip_of_a_huge_block_is_refused_without_reading_it(tmp_path: Path) -> None:
    path = claimed_tiff(
        tmp_path / "scene.tif", cols=20_000, rows=20_000, rows_per_strip=20_000,
        size=900_000_000, strip=(4096, 800_000_000),
    )  # fmt: skip
    spent = bytes_read_by(lambda: rejection_of(path))
    assert rejection_of(path).code == "raster-too-large"
    assert spent < HEADER_BYTES


@pytest.mark.parametrize(
    ("cols", "rows", "rows_per_strip", "bands", "word"),
    [
        (70_000, 10, 1, 1, "columns"),
        (10, 70_000, 70_000, 1, "rows"),
        (30_000, 30_000, 1, 1, "cells"),
        (16, 16, 16, 65, "bands"),
        (16, 16, 16, 60_000, "bands"),
        (1024, 40_000, 40_000, 1, "strip"),
        (2**32 - 1, 2**32 - 1, 2**32 - 1, 1, "columns"),
    ],
)
def test_a_claim_beyond_the_budget_is_refused_without_reading_pixels(
    tmp_path: Path, *, cols: int, rows: int, rows_per_strip: int, bands: int, word: str
) -> None:
    path = claimed_tiff(
        tmp_path / "scene.tif", cols=cols, rows=rows, rows_per_strip=rows_per_strip, bands=bands,
        size=200_000_000,
    )  # fmt: skip
    spent = bytes_read_by(lambda: rejection_of(path))
    error = rejection_of(path)
    assert error.code == "raster-too-large"
    assert word in error.detail
    assert spent < HEADER_BYTES


def test_a_real_raster_of_65_bands_is_refused(tmp_path: Path) -> None:
    assert rejection_of(write_tiff(tmp_path / "a.tif", rows=8, cols=8, bands=65)).code == (
        "raster-too-large"
    )
    assert inspect(write_tiff(tmp_path / "b.tif", rows=8, cols=8, bands=64), pointer="").count == 64


def test_accepting_a_large_raster_reads_its_header_only(tmp_path: Path) -> None:
    path = write_tiff(tmp_path / "scene.tif", rows=2048, cols=2048, tiled=True, compress="deflate")
    assert path.stat().st_size > 20 * HEADER_BYTES
    assert bytes_read_by(lambda: inspect(path, pointer="/red")) < HEADER_BYTES


def test_more_blocks_than_the_budget_are_refused(tmp_path: Path) -> None:
    path = write_tiff(tmp_path / "scene.tif", rows=64, cols=64, blockysize=1)
    assert rejection_of(path, budget=Budget(blocks=63)).code == "raster-too-large"
    assert inspect(path, pointer="/red", budget=Budget(blocks=64)).block_shape == (1, 64)


def test_a_list_of_blocks_that_does_not_fit_the_size_is_refused(tmp_path: Path) -> None:
    path = claimed_tiff(tmp_path / "a.tif", cols=64, rows=64, rows_per_strip=8, size=20_000)
    assert rejection_of(path).code == "unsupported-raster"


@pytest.mark.parametrize(
    "options",
    [{"tiled": True, "blockxsize": 64, "blockysize": 64}, {"blockysize": 4}, {"BIGTIFF": "YES"},
     {"ENDIANNESS": "BIG"}, {"ENDIANNESS": "BIG", "BIGTIFF": "YES", "compress": "lzw"},
     {"bands": 3, "interleave": "pixel"}, {"bands": 3, "interleave": "band"}],
)  # fmt: skip
def test_a_truncated_geotiff_is_refused_by_its_header(
    tmp_path: Path, options: dict[str, object]
) -> None:
    path = write_tiff(tmp_path / "scene.tif", rows=256, cols=256, **options)
    assert inspect(path, pointer="/red").grid.shape == (256, 256)
    content = path.read_bytes()
    for kept in (len(content) - 1, len(content) // 2, 9):
        path.write_bytes(content[:kept])
        assert rejection_of(path).code == "truncated-raster"


def test_a_strip_said_to_lie_at_the_end_of_numbers_is_truncated(tmp_path: Path) -> None:
    path = claimed_tiff(
        tmp_path / "a.tif", cols=8, rows=8, rows_per_strip=8, size=9000, strip=(2**32 - 1, 2**31)
    )
    assert rejection_of(path).code == "truncated-raster"


def test_a_raster_without_reference_system_is_refused(tmp_path: Path) -> None:
    assert rejection_of(write_tiff(tmp_path / "scene.tif", crs=None)).code == "no-crs"


@pytest.mark.parametrize("crs", ["EPSG:4326", "EPSG:2263"])
def test_a_reference_system_not_in_metres_is_refused(tmp_path: Path, crs: str) -> None:
    path = write_tiff(tmp_path / "scene.tif", crs=crs, transform=Affine(0.1, 0, 1, 0, -0.1, 2))
    assert rejection_of(path).code == "unsupported-crs"


@pytest.mark.parametrize(
    "transform",
    [
        Affine(9.8, 1.7, 500_000.0, 1.7, -9.8, 5_400_000.0),
        Affine(10.0, 0.001, 500_000.0, 0.0, -10.0, 5_400_000.0),
        Affine(-10.0, 0.0, 500_000.0, 0.0, -10.0, 5_400_000.0),
        Affine(10.0, 0.0, 1e30, 0.0, -10.0, 1e30),
        Affine(10.0, 0.0, float("nan"), 0.0, -10.0, 0.0),
    ],
)
def test_a_grid_that_is_rotated_mirrored_or_nowhere_is_refused(
    tmp_path: Path, transform: Affine
) -> None:
    path = write_tiff(tmp_path / "scene.tif", transform=transform)
    assert rejection_of(path).code == "unsupported-grid"


@pytest.mark.parametrize("dtype", ["complex64", "complex_int16", "int64", "uint64"])
def test_a_type_of_numbers_that_is_no_measurement_is_refused(tmp_path: Path, dtype: str) -> None:
    path = tmp_path / "scene.tif"
    if dtype == "complex_int16":
        claimed_tiff(
            path, cols=8, rows=8, rows_per_strip=8, size=9000, bits=32, sample_format=5,
            strip=(4096, 256),
        )  # fmt: skip
    else:
        write_tiff(path, dtype=dtype)
    assert rejection_of(path).code == "unsupported-raster"


def test_a_compression_outside_the_list_is_refused(tmp_path: Path) -> None:
    path = write_tiff(tmp_path / "scene.tif", dtype="uint8", compress="jpeg")
    assert rejection_of(path).code == "unsupported-raster"


@pytest.mark.parametrize("compress", ["none", "lzw", "deflate", "packbits", "zstd"])
def test_the_compressions_of_the_list_are_accepted(tmp_path: Path, compress: str) -> None:
    options = {} if compress == "none" else {"compress": compress}
    assert inspect(write_tiff(tmp_path / "a.tif", **options), pointer="").dtypes == ("uint16",)


def claimed_jpeg2000(*, cols: int, rows: int, tile: int, bands: int = 1, step: int = 1) -> bytes:
    marker = struct.pack(">4sHH8LH", b"\xff\x4f\xff\x51", 38 + 3 * bands, 0,
                         cols, rows, 0, 0, tile, tile, 0, 0, bands)  # fmt: skip
    return marker + bytes([15, step, step]) * bands


@pytest.mark.parametrize(
    ("claim", "code"),
    [
        ({"cols": 70_000, "rows": 10, "tile": 1024}, "raster-too-large"),
        ({"cols": 10_000, "rows": 10_000, "tile": 10_000}, "raster-too-large"),
        ({"cols": 20_000, "rows": 20_000, "tile": 16}, "raster-too-large"),
        ({"cols": 64, "rows": 64, "tile": 64, "bands": 65}, "raster-too-large"),
        ({"cols": 64, "rows": 64, "tile": 64, "step": 2}, "unsupported-raster"),
        ({"cols": 64, "rows": 0, "tile": 64}, "unsupported-raster"),
        ({"cols": 64, "rows": 64, "tile": 64}, "truncated-raster"),
    ],
)
def test_a_jpeg2000_header_is_judged_before_it_is_decoded(
    tmp_path: Path, claim: dict[str, int], code: str
) -> None:
    path = tmp_path / "scene.jp2"
    path.write_bytes(claimed_jpeg2000(**claim))
    assert rejection_of(path).code == code


def test_a_truncated_jpeg2000_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "scene.jp2"
    numbers = np.random.default_rng(5).integers(0, 10_000, (1, 200, 200)).astype("uint16")
    with rasterio.open(
        path, "w", driver="JP2OpenJPEG", height=200, width=200, count=1, dtype="uint16", crs=UTM,
        transform=CORNER, QUALITY=100, REVERSIBLE="YES",
    ) as file:  # fmt: skip
        file.write(numbers)
    assert inspect(path, pointer="/red").driver == "JP2OpenJPEG"
    content = path.read_bytes()
    for kept in (len(content) - 1, len(content) // 2, 20):
        path.write_bytes(content[:kept])
        assert rejection_of(path).code == "truncated-raster"


def test_boxes_that_never_end_are_refused(tmp_path: Path) -> None:
    path = tmp_path / "scene.jp2"
    magic = b"\x00\x00\x00\x0cjP  \r\n\x87\n"
    path.write_bytes(magic + struct.pack(">L4s", 8, b"free") * 5000)
    assert rejection_of(path).code == "unsupported-raster"
    path.write_bytes(magic + struct.pack(">L4s", 4, b"free") * 10)
    assert rejection_of(path).code == "unsupported-raster"
