"""Compiling what measures, before there is a scene to measure.

What is compiled outlives the process in the data folder, so that only the first start after an
upgrade compiles anything; later ones load it. A scene that comes earlier waits, and its time is
counted from then on.
"""

import os
import shutil
import threading
from pathlib import Path
from typing import Final

import numpy as np
import shapely
from affine import Affine
from numpy.typing import NDArray

from service.compiled import keep_in, source_digest
from service.observe import observe
from service.spectral.gathered import Gathered, Layer, Meaning
from service.spectral.indices import INDICES
from service.spectral.quality import SCL
from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling
from service.tiles.parts import blocks_with, take_cells
from service.zonal.coverage import zones_on
from service.zonal.grid import Grid
from service.zonal.plan import plan_of, row_starts

FOLDER: Final = "compiled"
_DTYPES: Final = ("u1", "i1", "u2", "i2", "u4", "i4", "f4", "f8")
_BITS: Final = ("u1", "u2", "u4", "u8")
_SIDE: Final = 40
_LOCK: Final = threading.Lock()
_WARM: Final = threading.Event()


def keep_compiled_in(folder: Path) -> None:
    """Keep what is compiled in a folder, or in that which ``NUMBA_CACHE_DIR`` names.

    What an earlier release left there is removed.
    """
    named = os.environ.get("NUMBA_CACHE_DIR")
    base = Path(named) if named else folder
    own = base / source_digest()
    own.mkdir(parents=True, exist_ok=True)
    if not named:
        for other in base.iterdir():
            if other != own:
                shutil.rmtree(other, ignore_errors=True)
    keep_in(str(own))


def warm_up_behind() -> None:
    """Begin to warm up in the background."""
    threading.Thread(target=warm_up, name="warming", daemon=True).start()


def warm_up() -> None:
    """Compile or load all that measuring calls, unless this process has; wait if it is at it."""
    with _LOCK:
        if not _WARM.is_set():
            _rehearse()
            _WARM.set()


def _rehearse() -> None:
    """Measure an invented scene with bands of every type, on the grid and on a coarser one."""
    grid = Grid(crs="EPSG:32633", transform=Affine(10, 0, 0, 0, -10, 0), shape=(_SIDE, _SIDE))
    coarse = Grid(crs="EPSG:32633", transform=Affine(20, 0, 0, 0, -20, 0), shape=(_SIDE, 15))
    fields = [shapely.box(5, -395, 395, -5), shapely.box(55, -305, 295, -95)]
    plan = plan_of(grid, zones_on(grid, fields), [coarse])
    at = plan.views[0].at
    ndvi = INDICES["ndvi"]
    others = [role for role in BandRole if role not in ndvi.roles]
    roles = [*ndvi.roles, *others][: len(_DTYPES)]
    strip = Gathered(0, len(plan.cells))
    strip.classes = Layer(numbers=np.full(len(plan.views[0].cells), 4, np.uint8), at=at)
    for role, dtype in zip(roles, _DTYPES, strict=True):
        numbers = np.arange(len(plan.views[0].cells)).astype(dtype)
        layer = Layer(numbers=numbers, at=at)
        strip.take(role, layer, Meaning(scaling=Scaling(scale=1.0, offset=0.0)))
    observe([strip], plan, roles=roles, indices=[ndvi], quality=SCL, rule="clear")
    _rehearse_reading(plan.cells, row_starts(plan.cells, grid.shape))


def _rehearse_reading(cells: NDArray[np.int32], starts: NDArray[np.int64]) -> None:
    wanted = np.ones(len(cells), dtype=np.bool_)
    blocks_with(cells, starts, 0, _SIDE, _SIDE, 16, 16, 0, wanted)
    for bits in _BITS:
        image = np.zeros((_SIDE, _SIDE), dtype=bits)
        area = (0, _SIDE, 0, _SIDE)
        take_cells(image, 0, 0, area, cells, starts, _SIDE, 0, np.empty(len(cells), dtype=bits))
