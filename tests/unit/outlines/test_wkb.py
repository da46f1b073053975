"""Well-known binary: what is believed, and what is refused before the geometry library sees it.

Layouts follow OGC 06-103r4, clause 8; the oracle is the geometry library's own writer.
"""

import struct

import pytest
import shapely
from hypothesis import given
from hypothesis import strategies as st
from shapely.geometry.base import BaseGeometry

from service.errors import RejectedInput
from service.outlines.wkb import shape_from_wkb

SQUARE = shapely.box(0, 0, 2, 2)
HOLED = shapely.Polygon(SQUARE.exterior, [shapely.box(0.5, 0.5, 1, 1).exterior])
SHAPES = [SQUARE, HOLED, shapely.MultiPolygon([HOLED, shapely.box(5, 5, 6, 6)])]


def refusal(blob: bytes) -> str:
    """Return why a blob is refused."""
    with pytest.raises(RejectedInput) as caught:
        shape_from_wkb(blob, pointer="/g")
    assert [fault.pointer for fault in caught.value.faults] == ["/g"]
    assert caught.value.code == "invalid-geometry"
    return caught.value.detail


def raised(shape: BaseGeometry) -> BaseGeometry:
    """Return a geometry with heights."""
    return shapely.force_3d(shape, 7.5)


@pytest.mark.parametrize("shape", SHAPES)
@pytest.mark.parametrize("byte_order", [0, 1])
@pytest.mark.parametrize("flavor", ["iso", "extended"])
@pytest.mark.parametrize("has_heights", [False, True])
def test_polygons_are_read_in_either_byte_order_with_and_without_heights(
    shape: BaseGeometry,
    byte_order: int,
    flavor: str,
    has_heights: bool,  # noqa: FBT001
) -> None:
    sent = raised(shape) if has_heights else shape
    blob = shapely.to_wkb(sent, output_dimension=3, byte_order=byte_order, flavor=flavor)
    assert shapely.force_2d(shape_from_wkb(blob, pointer="/g")).equals(shape)


def test_measures_are_read_over() -> None:
    with_measures = shapely.from_wkt("POLYGON ZM ((0 0 1 9, 2 0 1 9, 2 2 1 9, 0 2 1 9, 0 0 1 9))")
    blob = shapely.to_wkb(with_measures, output_dimension=4, flavor="iso")
    assert struct.unpack_from("<I", blob, 1) == (3003,)
    assert shapely.force_2d(shape_from_wkb(blob, pointer="/g")).equals(shapely.box(0, 0, 2, 2))


@pytest.mark.parametrize(
    "text",
    [
        "POINT (1 1)",
        "LINESTRING (0 0, 1 1)",
        "MULTIPOINT ((0 0))",
        "GEOMETRYCOLLECTION (POLYGON ((0 0, 1 0, 1 1, 0 0)))",
    ],
)
def test_what_has_no_area_is_refused(text: str) -> None:
    assert "points, lines" in refusal(shapely.to_wkb(shapely.from_wkt(text)))


def test_curves_are_refused() -> None:
    curve_polygon = struct.pack("<BII", 1, 10, 0)
    assert "Polygon or MultiPolygon" in refusal(curve_polygon)


def test_multipolygons_nested_in_one_another_are_refused_before_they_are_parsed() -> None:
    """Parsed, they overflow the stack and end the process: seen at ten thousand levels."""
    levels = struct.pack("<BII", 1, 6, 1) * 40_000
    assert "points, lines" in refusal(levels + shapely.to_wkb(SQUARE))


def test_counts_beyond_the_blob_are_refused_at_once() -> None:
    for blob in (
        struct.pack("<BII", 1, 3, 2**32 - 1),
        struct.pack("<BIII", 1, 3, 1, 9_999),
        struct.pack("<BII", 1, 6, 2**32 - 1),
        struct.pack("<BI", 1, 3),
        struct.pack("<BII", 7, 3, 0),
        b"",
    ):
        assert "damaged" in refusal(blob)
    many = shapely.Point(0, 0).buffer(1, quad_segs=2_600)
    assert "10,000 vertices" in refusal(shapely.to_wkb(many))


def test_a_ring_that_is_open_or_short_is_refused() -> None:
    for ring in ([(0.0, 0.0), (1.0, 0.0), (1.0, 1.0), (0.0, 1.0)], [(0.0, 0.0), (0.0, 0.0)]):
        flat = [number for position in ring for number in position]
        blob = struct.pack("<BIII", 1, 3, 1, len(ring)) + struct.pack(f"<{len(flat)}d", *flat)
        assert "A ring needs" in refusal(blob)


@given(st.binary(max_size=200), st.sampled_from(SHAPES), st.data())
def test_no_bytes_at_all_do_anything_but_give_a_polygon_or_a_refusal(
    noise: bytes, shape: BaseGeometry, data: st.DataObject
) -> None:
    blob = bytearray(shapely.to_wkb(shape))
    at = data.draw(st.integers(0, len(blob) - 1))
    blob[at : at + len(noise)] = noise
    for tried in (noise, bytes(blob), bytes(blob[:at])):
        try:
            found = shape_from_wkb(tried, pointer="/g")
        except RejectedInput:
            continue
        assert found.geom_type in ("Polygon", "MultiPolygon")
