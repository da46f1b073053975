"""Any quality layer of a profile of one's own, judged cell by cell in plain Python.

The oracle reads the document as its documentation tells people to, one number at a time, and
knows nothing of the service's layers.
"""

from collections.abc import Mapping
from typing import Any

import numpy as np
from hypothesis import event, given
from hypothesis import strategies as st

from service.spectral.profiles import sensor_from
from service.spectral.quality import Loss

Document = dict[str, Any]
LOSSES = [None, *(loss.value for loss in Loss)]
BANDS = [{"role": "red", "centre_um": 0.66, "width_um": 0.03}]
NAMES = ["alpha", "beta", "gamma", "delta"]


def profile(quality: Document) -> Document:
    return {"title": "Any", "bands": BANDS, "quality": quality, "quality_rule": "any_rule"}


@st.composite
def class_layers(draw: st.DrawFn) -> Document:
    numbers = draw(st.lists(st.integers(0, 65_535), min_size=1, max_size=12, unique=True))
    nodata = draw(st.one_of(st.sampled_from(numbers), st.integers(0, 65_535)))
    classes = [
        {
            "value": number,
            "name": f"class {number}",
            "loss": "nodata" if number == nodata else draw(st.sampled_from(LOSSES)),
            "water": draw(st.booleans()),
        }
        for number in numbers
    ]
    can_keep = [one["value"] for one in classes if one["loss"] != "nodata"]
    if not can_keep:
        spare = next(number for number in range(65_536) if number not in (*numbers, nodata))
        classes.append({"value": spare, "name": "spare", "loss": None, "water": False})
        can_keep = [spare]
    keep = draw(st.lists(st.sampled_from(can_keep), min_size=1, unique=True))
    return {
        "name": "classes",
        "dtype": "uint16",
        "nodata": nodata,
        "classes": classes,
        "rules": {"any_rule": {"keep": keep}},
    }


@st.composite
def bit_layers(draw: st.DrawFn) -> Document:
    names = draw(st.lists(st.sampled_from(NAMES), min_size=1, unique=True))
    wet = draw(st.sampled_from([None, *names]))
    fields = []
    for name in names:
        width = draw(st.integers(1, 4))
        bit = draw(st.integers(0, 16 - width))
        loss = draw(st.sampled_from(LOSSES))
        fields.append(
            {"name": name, "bit": bit, "width": width, "loss": loss, "water": name == wet}
        )
    some = st.lists(st.sampled_from(fields), max_size=4)
    drop = [
        {"field": field["name"], "at_least": draw(st.integers(1, 2 ** field["width"] - 1))}
        for field in draw(some)
    ]
    need = [field["name"] for field in draw(some)]
    return {
        "name": "bits",
        "dtype": "uint16",
        "nodata": draw(st.one_of(st.just(0), st.just(65_535), st.integers(0, 65_535))),
        "bits": fields,
        "rules": {"any_rule": {"drop": drop, "need": need}},
    }


def verdict_by_class(layer: Mapping[str, Any], number: int) -> tuple[bool, str | None, bool]:
    """Say of one cell whether it is usable, what it is lost to, and whether it is water."""
    for one in layer["classes"]:
        if one["value"] == number:
            if number in layer["rules"]["any_rule"]["keep"]:
                return True, None, one["water"]
            return False, one["loss"], one["water"]
    return False, "nodata", False


def verdict_by_bits(layer: Mapping[str, Any], number: int) -> tuple[bool, str | None, bool]:
    """Say the same of one cell of a layer of bits."""
    if number == layer["nodata"]:
        return False, "nodata", False
    written = f"{number:016b}"[::-1]

    def of(field: Mapping[str, Any]) -> int:
        digits = written[field["bit"] : field["bit"] + field["width"]]
        return int(digits[::-1], 2)

    fields = {field["name"]: field for field in layer["bits"]}
    is_water = any(of(field) > 0 for field in layer["bits"] if field["water"])
    if any(of(field) > 0 for field in layer["bits"] if field["loss"] == "nodata"):
        return False, "nodata", is_water
    rule = layer["rules"]["any_rule"]
    for entry in rule["drop"]:
        field = fields[entry["field"]]
        if of(field) >= entry["at_least"]:
            return False, field["loss"], is_water
    return all(of(fields[name]) > 0 for name in rule["need"]), None, is_water


def check(layer: Document, numbers: list[int], dtype: type, verdict: Any) -> None:
    sensor = sensor_from("any", 1, profile(layer))
    assert sensor.quality is not None
    with np.errstate(all="raise"):
        judged = sensor.quality.judge(np.array(numbers, dtype), sensor.quality_rule)
    for place, number in enumerate(numbers):
        lost = [loss.value for loss in Loss if judged.lost[loss][place]]
        assert len(lost) <= 1
        found = (bool(judged.usable[place]), lost[0] if lost else None, bool(judged.water[place]))
        assert found == verdict(layer, number), (number, found)
        event(f"usable {found[0]}, lost to {found[1]}")


TYPES = st.sampled_from([np.uint16, np.uint32, np.int32])


@given(class_layers(), st.lists(st.integers(0, 65_535), max_size=20), TYPES)
def test_any_layer_of_classes_is_judged_as_cell_by_cell(
    layer: Document, numbers: list[int], dtype: type
) -> None:
    known = [one["value"] for one in layer["classes"]]
    check(layer, [*known, layer["nodata"], *numbers], dtype, verdict_by_class)
    sensor = sensor_from("any", 1, profile(layer))
    assert sensor.quality is not None
    strays = [number for number in numbers if number not in (*known, layer["nodata"])]
    assert sensor.quality.unknown(np.array([*known, *strays], dtype)) == bool(strays)


@given(bit_layers(), st.lists(st.integers(0, 65_535), max_size=30), TYPES)
def test_any_layer_of_bits_is_judged_as_cell_by_cell(
    layer: Document, numbers: list[int], dtype: type
) -> None:
    single = [1 << bit for bit in range(16)]
    check(layer, [0, 65_535, layer["nodata"], *single, *numbers], dtype, verdict_by_bits)
