"""The published tables of quality values, number by number and over a parcel.

Sources: QA_PIXEL, the tables of pixel values in USGS LSDS-1619 (Landsat 8 and 9) and LSDS-1618
(Landsat 4 to 7), as in `checks.csv`, group `qa_pixel`, with three numbers that occur in
distributed scenes and are in no table (from memory); SCL, the agency's legend of the scene
classification, group `scl`. What is lost to which reason is worked out by hand from the
meaning that the tables state; which rule keeps what is our own choice.
"""

import csv
import json
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from service.spectral.quality_bits import QA_PIXEL
from tests.serving import SCENE, Service, square, write_band

Row = dict[str, str]

with (Path(__file__).parent / "checks.csv").open(newline="", encoding="utf-8") as lines:
    ROWS = [row for row in csv.DictReader(lines) if row["group"] == "qa_pixel"]

every_row = pytest.mark.parametrize("row", ROWS, ids=[row["id"] for row in ROWS])

FIELDS = {
    "fill": 0, "dilated_cloud": 1, "cirrus": 2, "cloud": 3, "cloud_shadow": 4, "snow": 5,
    "clear": 6, "water": 7,
}  # fmt: skip
PAIRS = {"cloud": 8, "shadow": 10, "snow": 12, "cirrus": 14}

CLEAR, WATER = "clear", "water"
"""What a cell is by hand: kept as land or as water, or the reason, with `, water` beside it."""

LANDSAT_8_9 = {
    1: "nodata",
    21824: CLEAR,
    21826: "cloud",  # dilated cloud over land
    21888: WATER,
    21890: "cloud, water",  # dilated cloud over water
    22080: CLEAR,  # medium confidence of cloud
    22144: WATER,  # medium confidence of cloud over water
    22280: "cloud",
    23888: "shadow",
    23952: "shadow, water",
    24088: "cloud",  # medium confidence with shadow: the cloud bit is set
    24216: "cloud, water",
    24344: "cloud",
    24472: "cloud, water",
    30048: "snow",
    54596: "cloud",  # cirrus
    54852: "cloud",
    55052: "cloud",
    56856: "cloud",
    56984: "cloud, water",
    57240: "cloud, water",  # the water bit is set, though the table's label does not say so
    21762: "cloud",  # dilated cloud, as some scenes have it
    21952: WATER,  # clear and water, as some scenes have it
    29986: "cloud",  # dilated cloud over snow
}
LANDSAT_4_7 = {
    1: "nodata",
    5440: CLEAR,
    5442: "cloud",  # dilated cloud over land
    5504: WATER,
    5506: "cloud, water",
    5696: CLEAR,  # medium confidence of cloud
    5760: WATER,
    5896: "cloud",
    7440: "shadow",
    7568: "shadow, water",
    7696: "shadow",  # medium confidence of cloud with shadow: here the cloud bit is not set
    7824: "shadow, water",
    7960: "cloud",
    8088: "cloud, water",
    13664: "snow",
}
SCENE_CLASSES = {
    0: "nodata",
    1: "saturation",
    2: CLEAR,
    3: "shadow",
    4: CLEAR,
    5: CLEAR,
    6: WATER,
    7: CLEAR,
    8: "cloud",
    9: "cloud",
    10: "cloud",
    11: "snow",
}


def verdict(row: Row) -> tuple[int, dict[str, Any]]:
    return json.loads(row["input"])["value"], json.loads(row["expected"])


def kept(value: int, rule: str) -> bool:
    return bool(QA_PIXEL.judge(np.array([value], np.uint16), rule).usable[0])


@every_row
def test_a_published_number_has_the_published_flags(row: Row) -> None:
    value, worked = verdict(row)
    assert {name for name, bit in FIELDS.items() if value >> bit & 1} == set(worked["flags"])
    for name, confidence in worked.get("conf", {}).items():
        assert value >> PAIRS[name] & 0b11 == confidence


@every_row
def test_a_published_number_is_kept_as_in_the_table(row: Row) -> None:
    value, worked = verdict(row)
    assert not QA_PIXEL.unknown(np.array([value], np.uint16))
    if "keep_default_land" not in worked:
        by_hand = LANDSAT_8_9[value]
        assert kept(value, "clear") == (by_hand in (CLEAR, WATER))
        return
    assert kept(value, "land") == worked["keep_default_land"]
    assert kept(value, "water") == worked["keep_water"]
    assert kept(value, "snow") == worked["keep_snow"]
    assert kept(value, "clear") == (worked["keep_default_land"] or worked["keep_water"])
    # The table's strict land rule is `strict` and `land` at once.
    strict_land = kept(value, "strict") and kept(value, "land")
    assert strict_land == worked["keep_strict_land"]
    assert kept(value, "surface") == (
        worked["keep_default_land"] or worked["keep_water"] or worked["keep_snow"]
    )


def test_the_parcels_below_have_every_published_number() -> None:
    assert sorted({*LANDSAT_8_9, *LANDSAT_4_7}) == sorted(verdict(row)[0] for row in ROWS)


CASES: Mapping[str, tuple[dict[str, Any], Mapping[int, str], int, int]] = {
    # The scene, what its numbers are by hand, the quality layer's cell in metres, cells a side.
    "landsat-9": (
        {"sensor": "landsat-c2-l2", "platform": "landsat-9"}, LANDSAT_8_9, 30, 5,
    ),
    "landsat-5": (
        {"sensor": "landsat-c2-l2", "platform": "landsat-5"}, LANDSAT_4_7, 30, 4,
    ),
    "sentinel-2b": (
        {
            "sensor": "sentinel-2-l2a",
            "platform": "sentinel-2b",
            "processing_baseline": "05.10",
        },
        SCENE_CLASSES, 20, 4,
    ),
}  # fmt: skip


def reason_of(by_hand: str) -> str | None:
    reason = by_hand.split(",", maxsplit=1)[0]
    return None if reason in (CLEAR, WATER) else reason


def laid_out(numbers: Mapping[int, str], side: int) -> NDArray[Any]:
    """Return every number once in a square, filled up with the first clear one."""
    clear = next(number for number, by_hand in numbers.items() if by_hand == CLEAR)
    every = [*numbers, *[clear] * (side * side - len(numbers))]
    dtype = np.uint8 if max(every) < 256 else np.uint16
    return np.array(every, dtype=dtype).reshape(side, side)


@pytest.mark.parametrize("name", CASES)
def test_a_parcel_of_all_published_numbers_has_the_shares_worked_out_by_hand(
    service: Service, tmp_path: Path, name: str
) -> None:
    more, numbers, cell_m, side = CASES[name]
    quality = laid_out(numbers, side)
    by_hand = [numbers[int(number)] for number in quality.flat]
    files = {
        role: write_band(
            tmp_path / f"{role}.tif", np.full((side, side), number, np.uint16), cell_m=cell_m
        )
        for role, number in {"green": 10_000, "red": 12_000, "nir": 20_000, "swir16": 9_000}.items()
    }
    files["quality"] = write_band(tmp_path / "quality.tif", quality, cell_m=cell_m)
    step = cell_m // 10
    service.put_parcels(
        square("whole", col=0, row=0, size=step * side),
        *(
            square(
                f"cell-{place}", col=step * (place % side), row=step * (place // side), size=step
            )
            for place in range(len(by_hand))
        ),
    )
    scene = {"ref": "s1", "acquired_at": SCENE["acquired_at"], **more}
    answer = service.post_scene(scene, files)
    assert answer.json()["state"] == "done", answer.text

    listed = service.get("/v1/scenes/s1/parcels", params={"limit": 1000})["parcels"]
    parcels = {entry["parcel"]: entry for entry in listed}
    for place, told in enumerate(by_hand):
        entry, reason = parcels[f"cell-{place}"], reason_of(told)
        assert entry["state"] == ("measured" if reason is None else "unseen"), told
        assert entry["reason"] == reason, told
        assert entry["valid_share"] == pytest.approx(float(reason is None), abs=1e-5), told
        assert entry["water"] == pytest.approx(float("water" in told), abs=1e-5), told

    whole = parcels["whole"]
    expected = {
        loss: sum(reason_of(told) == loss for told in by_hand) / len(by_hand)
        for loss in ("cloud", "shadow", "snow", "nodata", "saturation")
    }
    assert {loss: whole[loss] for loss in expected} == pytest.approx(expected, abs=1e-5)
    clear = sum(reason_of(told) is None for told in by_hand)
    assert whole["valid_share"] == pytest.approx(clear / len(by_hand), abs=1e-5)
    assert whole["pixels"] == pytest.approx(clear, abs=1e-3)
    water = sum("water" in told for told in by_hand)
    assert whole["water"] == pytest.approx(water / len(by_hand), abs=1e-5)

    # NDSI is of snow too, so its share is that of clear cells and of snow together.
    snow = service.series("whole", "ndsi", min_valid=0, stat="valid_share,pixels")
    seen = clear + sum(told == "snow" for told in by_hand)
    assert snow["valid_share"] == [pytest.approx(seen / len(by_hand), abs=1e-5)]
    assert snow["pixels"] == [pytest.approx(seen, abs=1e-3)]


@pytest.mark.parametrize(
    ("numbers", "figures"),
    # Counted on paper: clear and water, cloud, shadow, snow, nodata, saturation, water.
    [
        (laid_out(LANDSAT_8_9, 5), (6, 15, 2, 1, 1, 0, 9)),
        (laid_out(LANDSAT_4_7, 4), (5, 5, 4, 1, 1, 0, 6)),
        (laid_out(SCENE_CLASSES, 4), (9, 3, 1, 1, 1, 1, 1)),
    ],
    ids=["landsat-9", "landsat-5", "sentinel-2b"],
)
def test_the_tables_worked_by_hand_add_up_as_counted_on_paper(
    numbers: NDArray[Any], figures: tuple[int, ...]
) -> None:
    worked = {**LANDSAT_8_9, **LANDSAT_4_7, **({} if numbers.dtype == np.uint16 else SCENE_CLASSES)}
    told = [worked[int(number)] for number in numbers.flat]
    losses = ("cloud", "shadow", "snow", "nodata", "saturation")
    counted = [sum(reason_of(each) == loss for each in told) for loss in (None, *losses)]
    assert (*counted, sum("water" in each for each in told)) == figures
