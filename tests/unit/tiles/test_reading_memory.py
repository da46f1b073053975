"""Reading holds what is wanted, whatever the size of the scene."""

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
import shapely
from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling
from service.tiles.reading import BandSource, SceneSource, grids_of, read_strips
from service.zonal.coverage import zones_on
from service.zonal.plan import plan_of

def peak_kib():
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss

roles = (BandRole.BLUE, BandRole.GREEN, BandRole.RED, BandRole.NIR)
source = SceneSource(bands=tuple(
    BandSource(role=role, path=Path(sys.argv[1]), scaling=Scaling(scale=1.0, offset=0.0),
        band=place, nodata=0.0)
    for place, role in enumerate(roles, start=1)
))
grid = grids_of(source).measuring
# A parcel of one cell in every tile, so that all of the scene is decoded, and the last tile.
place, side = grid.transform, int(sys.argv[2])
x, y = np.meshgrid(place.c + 10 * np.arange(0, side, 256), place.f - 10 * np.arange(0, side, 256))
last = shapely.box(place.c + 10 * (side - 256), place.f - 10 * side,
    place.c + 10 * side, place.f - 10 * (side - 256))
plan = plan_of(grid, zones_on(grid, [*shapely.box(x, y - 10, x + 10, y).ravel(), last]))
before, total = peak_kib(), 0
for strip in read_strips(source, plan):
    total += np.nansum(strip.reflectance(BandRole.RED, np.arange(len(strip), dtype=np.int32)))
print(json.dumps([before // 1024, peak_kib() // 1024, int(total)]))
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
    before, peak, total = json.loads(done.stdout)
    assert total == 3 * corner.size
    # The library's cache (64 MiB), what is read at once (8 MiB), and what is compiled.
    assert peak - before < 200 < SCENE_MIB / 2
