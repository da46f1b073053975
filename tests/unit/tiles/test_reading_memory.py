"""Reading holds one block at a time, whatever the size of the scene."""

import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import rasterio

from tests.unit.tiles.conftest import grid_transform

SIDE, BANDS = 8000, 4
SCENE_MIB = SIDE * SIDE * BANDS * 2 // 2**20

READ_ALL = """
import json, resource, sys
from pathlib import Path
import numpy as np
from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling
from service.tiles.reading import BandSource, SceneSource, read_blocks

def peak_kib():
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss

roles = (BandRole.BLUE, BandRole.GREEN, BandRole.RED, BandRole.NIR)
scaling = Scaling(scale=1e-4, offset=0.0)
source = SceneSource(bands=tuple(
    BandSource(role=role, path=Path(sys.argv[1]), scaling=scaling, band=place, nodata=0.0)
    for place, role in enumerate(roles, start=1)
))
side = int(sys.argv[2])
# A wanted cell in every corner of every tile, so that all of the scene is read.
rows = np.unique(np.r_[np.arange(0, side, 256), np.arange(255, side, 256), side - 1])
cells = (rows[:, None] * side + rows).ravel()
before, cells_read, total = peak_kib(), 0, 0
for block in read_blocks(source, cells):
    cells_read += block["red"].size
    total += int(block["red"].sum())
    del block
print(json.dumps([before // 1024, peak_kib() // 1024, cells_read, total]))
"""


def test_a_scene_of_half_a_gibibyte_takes_a_fraction_of_it(tmp_path: Path) -> None:
    path = tmp_path / "stack.tif"
    corner = np.full((256, 256), 3, dtype=np.uint16)
    # Tiles that are never written take no disk, but decoding them takes memory all the same.
    with rasterio.open(
        path, "w", driver="GTiff", width=SIDE, height=SIDE, count=BANDS, dtype="uint16",
        crs="EPSG:32633", transform=grid_transform(10.0), tiled=True, compress="deflate",
        SPARSE_OK="TRUE", nodata=0,
    ) as file:  # fmt: skip
        for band in range(1, BANDS + 1):
            file.write(corner, band, window=((SIDE - 256, SIDE), (SIDE - 256, SIDE)))
    done = subprocess.run(
        [sys.executable, "-c", READ_ALL, str(path), str(SIDE)],
        check=True, capture_output=True, text=True,
    )  # fmt: skip
    before, peak, cells_read, total = json.loads(done.stdout)
    assert cells_read == SIDE * SIDE
    assert total == 3 * corner.size
    # One block (64 MiB), the library's cache (64 MiB) and a piece in hand (16 MiB).
    assert peak - before < 256 < SCENE_MIB / 1.5
