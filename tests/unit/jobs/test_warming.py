"""After warming up nothing is left to compile, and what was compiled is kept by its sources."""

import json
import subprocess
import sys
from pathlib import Path

import pytest

from service.compiled import source_digest

MEASURE = """
import json, sys
from pathlib import Path
import numpy as np
import rasterio
import shapely
from affine import Affine
from service.compiled import compiled_versions
from service.jobs.warming import keep_compiled_in, warm_up
from service.observe import may_count, observe
from service.spectral.indices import INDICES
from service.spectral.quality import SCL
from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling
from service.tiles.buffering import CloudBuffer
from service.tiles.plans import Plans
from service.tiles.reading import BandSource, SceneSource, grids_of, read_strips

folder, dtype = Path(sys.argv[1]), sys.argv[2]
keep_compiled_in(folder)
warm_up()
before = compiled_versions()

def layer(name, dtype, step):
    side = 120 // step
    numbers = np.random.default_rng(step).integers(1, 10, (side, side)).astype(dtype)
    with rasterio.open(
        folder / name, "w", driver="GTiff", width=side, height=side, count=1, dtype=dtype,
        crs="EPSG:32633", transform=Affine(10 * step, 0, 500_000, 0, -10 * step, 5_400_000),
        tiled=True, blockxsize=32, blockysize=16,
    ) as file:
        file.write(numbers, 1)
    return folder / name

scaling = Scaling(scale=0.01, offset=0.0)
roles = {BandRole.RED: 1, BandRole.NIR: 1, BandRole.GREEN: 1, BandRole.SWIR16: 2}
source = SceneSource(
    bands=tuple(
        BandSource(role=role, path=layer(f"{role}.tif", dtype, step), scaling=scaling, nodata=2)
        for role, step in roles.items()
    ),
    quality=BandSource(role="quality", path=layer("q.tif", "uint8", 2), scaling=None, nodata=0),
    cloud_buffer=CloudBuffer(cells=1, is_cloud=lambda numbers: numbers == 9),
)
grids = grids_of(source)
fields = [shapely.to_wkb(shapely.Point(15.006, 48.745).buffer(r)) for r in (0.002, 0.005, 0.05)]
indices = list(INDICES.values())
for _ in range(2):  # a plan that is made, and one that is mapped
    plan = Plans(folder / "plans", limit_bytes=2**30).plan_for(grids, fields)
    strips = read_strips(
        source, plan, may_count=may_count(SCL, indices, "clear"), strip_cells=1_000
    )
    seen = observe(strips, plan, roles=list(roles), indices=indices, quality=SCL, rule="clear")
print(json.dumps([before, compiled_versions(), float(seen.figures[0, 1])]))
"""


@pytest.mark.parametrize("dtype", ["uint8", "uint16", "int16", "float32", "float64"])
def test_no_scene_waits_for_the_compiler(tmp_path: Path, dtype: str) -> None:
    done = subprocess.run(
        [sys.executable, "-c", MEASURE, str(tmp_path), dtype],
        check=False,
        capture_output=True,
        text=True,
    )
    assert done.returncode == 0, done.stderr
    before, after, usable_cells = json.loads(done.stdout)
    assert after == before > 15
    assert usable_cells > 50


def test_what_other_sources_left_is_removed(tmp_path: Path) -> None:
    script = "from service.jobs.warming import keep_compiled_in as keep; from pathlib import Path; "
    (tmp_path / "0123456789abcdef").mkdir()

    subprocess.run(
        [sys.executable, "-c", f"{script}keep(Path({str(tmp_path)!r}))"],
        check=True,
        env={"PATH": ""},
    )

    assert [path.name for path in tmp_path.iterdir()] == [source_digest()]
