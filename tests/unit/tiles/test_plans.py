"""Plans on disk: what is kept is what would be made, or it is not used."""

import os
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np
import pytest
import shapely
from affine import Affine

from service.clock import now
from service.tiles.plans import Plans
from service.tiles.reading import Grids
from service.zonal.grid import Grid
from service.zonal.plan import Plan

LIMIT = 2**30
GRIDS = Grids(
    measuring=Grid(
        crs="EPSG:32633", transform=Affine(10, 0, 500_000, 0, -10, 5_400_000), shape=(300, 300)
    ),
    others=(
        Grid(crs="EPSG:32633", transform=Affine(20, 0, 500_000, 0, -20, 5_400_000), shape=(150, 9)),
        Grid(crs="EPSG:32633", transform=Affine(30, 0, 499_987, 0, -30, 5_400_011), shape=(99, 99)),
    ),
)
# South-east of 15° E, 48.75° N, which is next to the corner of the grid.
FIELDS = [
    shapely.to_wkb(shapely.Point(15.0 + east, 48.745 - south).buffer(0.003))
    for east, south in [(0.003, 0.002), (0.02, 0.015), (0.004, 0.012), (5.0, 0.0)]
]


def arrays(plan: Plan) -> Iterator[np.ndarray]:
    yield from (plan.order, plan.indptr, plan.at, plan.weights, plan.totals, plan.cells)
    for view in plan.views:
        yield from (view.cells, view.at)


def assert_same(one: Plan, other: Plan) -> None:
    for mine, theirs in zip(arrays(one), arrays(other), strict=True):
        assert mine.dtype == theirs.dtype
        np.testing.assert_array_equal(mine, theirs)
    assert one.grid == other.grid
    assert [view.grid for view in one.views] == [view.grid for view in other.views]


def files(root: Path, suffix: str = "plan") -> list[Path]:
    return sorted(root.glob(f"*.{suffix}"))


@pytest.fixture
def plans(tmp_path: Path) -> Plans:
    return Plans(tmp_path, limit_bytes=LIMIT)


def test_a_plan_is_kept_and_taken_again(plans: Plans, tmp_path: Path) -> None:
    made = plans.plan_for(GRIDS, FIELDS)
    (file,) = files(tmp_path)
    first = file.stat()

    taken = plans.plan_for(GRIDS, FIELDS)

    assert len(made.cells) > 100
    assert made.own_cells().tolist() == [True, True, True, False]
    assert_same(taken, made)
    assert files(tmp_path) == [file]
    assert file.stat().st_ino == first.st_ino
    assert files(tmp_path, "part") == []


def test_no_parcels_have_a_plan_too(plans: Plans) -> None:
    assert_same(plans.plan_for(GRIDS, []), plans.plan_for(GRIDS, []))


def test_other_outlines_or_grids_have_another_plan(plans: Plans, tmp_path: Path) -> None:
    moved = Grids(measuring=GRIDS.measuring, others=GRIDS.others[:1])
    for grids, outlines in [
        (GRIDS, FIELDS),
        (GRIDS, FIELDS[:2]),
        (GRIDS, FIELDS[::-1]),
        (moved, FIELDS),
    ]:
        plans.plan_for(grids, outlines)

    assert len(files(tmp_path)) == 4


@pytest.mark.parametrize("where", [0.0, 0.001, 0.02, 0.3, 0.7, 0.999])
@pytest.mark.parametrize("how", ["cut", "changed", "longer head", "empty"])
def test_a_damaged_file_is_not_used_and_made_anew(
    plans: Plans, tmp_path: Path, where: float, how: str
) -> None:
    made = plans.plan_for(GRIDS, FIELDS)
    (file,) = files(tmp_path)
    whole = file.read_bytes()
    at = int(len(whole) * where)
    damaged = {
        "cut": whole[:at],
        "changed": whole[:at] + bytes([whole[at] ^ 0x10]) + whole[at + 1 :],
        "longer head": whole[:at] + b" " + whole[at:],
        "empty": b"",
    }
    file.write_bytes(damaged[how])

    assert_same(plans.plan_for(GRIDS, FIELDS), made)

    assert file.read_bytes() == whole


def test_a_folder_that_cannot_be_written_is_no_reason_not_to_measure(
    plans: Plans, tmp_path: Path
) -> None:
    tmp_path.rmdir()

    assert len(plans.plan_for(GRIDS, FIELDS)) == len(FIELDS)


def test_several_threads_make_the_same_plan_at_once(plans: Plans, tmp_path: Path) -> None:
    with ThreadPoolExecutor(4) as pool:
        made = list(pool.map(lambda _: plans.plan_for(GRIDS, FIELDS), range(8)))

    for one in made[1:]:
        assert_same(one, made[0])
    assert len(files(tmp_path)) == 1
    assert files(tmp_path, "part") == []


def test_the_plans_longest_out_of_use_go_first(plans: Plans, tmp_path: Path) -> None:
    for count in (1, 2, 3):
        plans.plan_for(GRIDS, FIELDS[:count])
        for file in files(tmp_path):
            os.utime(file, (0, file.stat().st_mtime - 1_000))
    oldest = min(files(tmp_path), key=lambda file: file.stat().st_mtime)
    # Used again, it is the newest.
    plans.plan_for(GRIDS, FIELDS[:1])
    sizes = {file: file.stat().st_size for file in files(tmp_path)}
    second = min(files(tmp_path), key=lambda file: file.stat().st_mtime)
    assert second != oldest

    assert Plans(tmp_path, limit_bytes=sum(sizes.values()) - 1).tidy() == 1

    assert set(files(tmp_path)) == set(sizes) - {second}
    assert plans.tidy() == 0


def test_what_a_crash_left_half_written_is_removed_once_it_is_old(
    plans: Plans, tmp_path: Path
) -> None:
    left = tmp_path / "abc.0123.part"
    left.write_bytes(b"half")

    assert plans.tidy() == 0
    long_ago = now().timestamp() - 7_200
    os.utime(left, (long_ago, long_ago))
    assert plans.tidy() == 1

    assert not left.exists()
