"""Shapefiles as others write them: encodings, numbers, heights, rings, deleted rows.

Written by `pyshp`; what it can't write is changed by hand, after the ESRI Shapefile Technical
Description, July 1998.
"""

import struct
from pathlib import Path
from typing import Any

import pytest
import shapefile
import shapely

from service.errors import RejectedInput
from service.outlines.dbase import encoding_named
from service.outlines.features import Drawing
from service.outlines.files import open_outlines
from service.zonal.boundary import Outline
from tests.outline_files import Drawn, field_at, in_degrees, shapefile_members, zipped

DRAWING = Drawing(repair=False, area_limit_ha=1e6)
FIELDS = ["ref", "title", "number", "share"]
LANGUAGE_BYTE = 29


def rows(path: Path, fields: list[str] = FIELDS) -> list[tuple[str, dict[str, Any]]]:
    with open_outlines(path) as file:
        return [(one.name, dict(one.attributes)) for one in file.features(fields)]


def outlines(path: Path) -> list[Outline]:
    with open_outlines(path) as file:
        return [file.outline(one, DRAWING, pointer="/g") for one in file.features([])]


def refusal(path: Path) -> tuple[str, str]:
    """Return kind and detail of what a whole file is refused for."""
    with pytest.raises(RejectedInput) as caught, open_outlines(path) as file:
        list(file.features(["ref"]))
    assert [fault.pointer for fault in caught.value.faults] == ["/file"]
    assert str(path) not in caught.value.detail
    return caught.value.code, caught.value.detail


TITLED = field_at("Ä1", title="Große Äcker, Żyto", number=12, share=2.5)


@pytest.mark.parametrize(
    ("encoding", "cpg", "title"),
    [
        ("utf-8", "UTF-8", "Große Äcker, Żyto"),
        ("utf-8", "65001\r\n", "Große Äcker"),
        ("cp1252", "ANSI 1252", "Große Äcker € “x”"),
        ("cp1250", "1250", "Große Żyto"),
        ("cp1251", "windows-1251", "Пшеница"),
        ("latin-1", "ISO-8859-1", "Große Äcker"),
        ("iso8859-2", "ISO 88592", "Große Żyto"),
        ("shift_jis", "SJIS", "小麦"),
        ("gb18030", "GB18030", "小麦"),
        ("big5", "Big5", "小麥"),
        ("cp437", "OEM 437", "Große Äcker"),
    ],
)
def test_text_is_read_in_the_encoding_that_the_file_names(
    tmp_path: Path, encoding: str, cpg: str, title: str
) -> None:
    members = shapefile_members([field_at("A", title=title)], encoding=encoding, cpg=cpg)
    assert rows(zipped(tmp_path / "a.zip", members))[0][1]["title"] == title


def test_without_a_word_on_encoding_the_table_s_own_byte_counts_else_only_ascii(
    tmp_path: Path,
) -> None:
    members = shapefile_members([TITLED], encoding="cp1250", cpg=None)
    table = bytearray(members["x.dbf"])
    for byte, title in [(0xC8, "Große Äcker, Żyto"), (0x57, "Große Äcker, ¯yto")]:
        table[LANGUAGE_BYTE] = byte
        members["x.dbf"] = bytes(table)
        assert rows(zipped(tmp_path / "a.zip", members))[0][1]["title"] == title
    table[LANGUAGE_BYTE] = 0
    members["x.dbf"] = bytes(table)
    (row,) = rows(zipped(tmp_path / "a.zip", members))
    # No guess is made: the bytes are kept as what no text can hold.
    assert any("\ud800" <= letter <= "\udfff" for letter in row[1]["title"])


@pytest.mark.parametrize("name", ["rot13", "utf-7", "idna", "x" * 500, "0", "8859-99", "zip", ""])
def test_an_encoding_that_is_not_one_of_text_is_refused(tmp_path: Path, name: str) -> None:
    members = shapefile_members([TITLED], cpg=name)
    code, detail = refusal(zipped(tmp_path / "a.zip", members))
    assert code == "unreadable-outlines"
    assert ".cpg" in detail


def test_every_name_of_utf_8_means_it() -> None:
    assert {encoding_named(n) for n in ("UTF-8", "utf8", "UTF 8", "65001", "utf-8\n")} == {"utf-8"}


def test_numbers_and_blanks_are_what_the_table_says(tmp_path: Path) -> None:
    drawn = [TITLED, field_at("B")]
    found = rows(zipped(tmp_path / "a.zip", shapefile_members(drawn)))
    assert found[0] == (
        "Record 1",
        {"ref": "Ä1", "title": "Große Äcker, Żyto", "number": 12, "share": 2.5},
    )
    assert found[1][1] == {"ref": "B", "title": "", "number": None, "share": None}
    members = shapefile_members(drawn)
    stars = members["x.dbf"].replace(b"          12", b"************")
    assert stars != members["x.dbf"]
    found = rows(zipped(tmp_path / "b.zip", {**members, "x.dbf": stars}))
    assert found[0][1]["number"] is None
    odd = members["x.dbf"].replace(b"          12", b"    1 2 3 4 ")
    found = rows(zipped(tmp_path / "c.zip", {**members, "x.dbf": odd}))
    assert found[0][1]["number"] == "1 2 3 4"


@pytest.mark.parametrize("kind", [shapefile.POLYGON, shapefile.POLYGONZ, shapefile.POLYGONM])
def test_outlines_with_holes_parts_heights_and_measures(tmp_path: Path, kind: int) -> None:
    outer = shapely.box(500_000, 5_499_000, 500_900, 5_499_900)
    lake = shapely.box(500_200, 5_499_200, 500_700, 5_499_700)
    island = shapely.box(500_300, 5_499_300, 500_500, 5_499_500)
    apart = shapely.box(502_000, 5_499_000, 502_300, 5_499_300)
    shapes = [
        outer,
        outer.difference(lake),
        shapely.MultiPolygon([outer.difference(lake), island, apart]),
    ]
    drawn = [Drawn(shape=s, attributes={"ref": str(n)}) for n, s in enumerate(shapes)]
    members = shapefile_members(drawn, kind=kind)
    assert struct.unpack_from("<i", members["x.shp"], 32) == (kind,)
    found = outlines(zipped(tmp_path / "a.zip", members))
    for outline, shape in zip(found, shapes, strict=True):
        assert not outline.geometry.has_z
        assert outline.geometry.normalize().equals_exact(in_degrees(shape).normalize(), 1e-12)


def test_members_may_lie_in_a_folder_in_any_case_beside_what_systems_add(tmp_path: Path) -> None:
    members = {name.upper(): content for name, content in shapefile_members([TITLED]).items()}
    extra = {"__MACOSX/._X.SHP": b"x", ".DS_Store": b"x", "X.SBN": b"x", "readme.txt": b"x"}
    assert len(rows(zipped(tmp_path / "a.zip", members | extra))) == 1
    assert len(rows(zipped(tmp_path / "b.zip", members, folder="export/2024/"))) == 1


def test_a_deleted_row_goes_with_its_outline(tmp_path: Path) -> None:
    members = shapefile_members([field_at("A"), field_at("B", col=50), field_at("C", col=90)])
    table = bytearray(members["x.dbf"])
    head, length = struct.unpack_from("<HH", table, 8)
    table[head + length : head + length + 1] = b"*"
    path = zipped(tmp_path / "a.zip", {**members, "x.dbf": bytes(table)})
    assert [(name, row["ref"]) for name, row in rows(path)] == [
        ("Record 1", "A"),
        ("Record 3", "C"),
    ]
    first, last = outlines(path)
    assert first.geometry.bounds[0] < last.geometry.bounds[0]


def test_a_null_shape_is_refused_alone(tmp_path: Path) -> None:
    drawn = [field_at("A"), Drawn(shape=None, attributes={"ref": "B"})]
    with open_outlines(zipped(tmp_path / "a.zip", shapefile_members(drawn))) as file:
        good, null = file.features(["ref"])
        assert file.outline(good, DRAWING, pointer="/g").area_ha == pytest.approx(1, abs=0.01)
        with pytest.raises(RejectedInput) as caught:
            file.outline(null, DRAWING, pointer="/g")
    assert caught.value.code == "invalid-geometry"


def test_what_is_missing_or_not_one_layer_is_refused_with_what_to_do(tmp_path: Path) -> None:
    members = shapefile_members([TITLED])

    def without(*suffixes: str) -> dict[str, bytes]:
        return {name: c for name, c in members.items() if not name.endswith(suffixes)}

    second = {name.replace("x", "y", 1): content for name, content in members.items()}
    for sent, code, says in [
        (without(".prj"), "no-crs", ".prj"),
        (without(".dbf"), "unreadable-outlines", ".dbf"),
        (without(".shp"), "unreadable-outlines", "one Shapefile"),
        ({**members, **second}, "unreadable-outlines", "one Shapefile"),
        ({**members, "x.prj": b""}, "no-crs", "coordinate reference system"),
        ({**members, "x.prj": b"x" * 99_999}, "unreadable-outlines", "too long"),
        ({**members, "x.prj": b"\xff\xfe"}, "unsupported-crs", ""),
    ]:
        found, detail = refusal(zipped(tmp_path / "a.zip", sent))
        assert found == code
        assert says in detail
    lines = shapefile_members([])
    lines["x.shp"] = (
        lines["x.shp"][:32] + struct.pack("<i", shapefile.POLYLINE) + lines["x.shp"][36:]
    )
    assert "no polygons" in refusal(zipped(tmp_path / "b.zip", lines))[1]


def test_counts_that_do_not_agree_are_refused(tmp_path: Path) -> None:
    one, two = shapefile_members([TITLED]), shapefile_members([TITLED, field_at("B")])
    fewer = {**two, "x.shp": one["x.shp"]}
    assert "fewer outlines" in refusal(zipped(tmp_path / "a.zip", fewer))[1]
    more = {**two, "x.dbf": one["x.dbf"]}
    assert "more outlines" in refusal(zipped(tmp_path / "b.zip", more))[1]
