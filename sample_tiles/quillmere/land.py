"""The parcels of Quillmere Growers and what grew on them; every name is invented."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final

from shapely.geometry import MultiPolygon, Polygon

from quillmere.tile import Shape

Ring = tuple[tuple[int, int], ...]

WHEAT, BARLEY, RAPE = "winter wheat", "winter barley", "winter rape"
BEET, MAIZE, GRASS = "sugar beet", "grain maize", "permanent grassland"
NETHER, MERE_END, OVER = "nether-quill", "mere-end", "over-quill"

# The last is the running season. A season is named by the year that it ends in.
YEARS: Final = (2021, 2022, 2023, 2024)
# Crops of the four seasons by rotation. In every season each crop stands on 6 to 8 parcels,
# and each parcel has grown the running season's crop before.
ROTATIONS: Final[Mapping[str, tuple[str, str, str, str]]] = {
    "A": (RAPE, WHEAT, BARLEY, RAPE),
    "B": (BARLEY, RAPE, WHEAT, BARLEY),
    "C": (WHEAT, BARLEY, RAPE, WHEAT),
    "D": (BEET, MAIZE, BEET, MAIZE),
    "E": (MAIZE, BEET, MAIZE, BEET),
    "F": (GRASS, GRASS, GRASS, GRASS),
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Field:
    """One parcel; rings in metres right of and below the tile's corner."""

    ref: str
    name: str
    holding: str
    rotation: str
    parts: tuple[Ring, ...]
    hole: Ring = ()
    tags: tuple[str, ...] = ()

    @property
    def shape(self) -> Shape:
        """The outline without its hole, in metres right of and below the tile's corner."""
        pieces = [Polygon(ring, [self.hole] if self.hole else []) for ring in self.parts]
        return pieces[0] if len(pieces) == 1 else MultiPolygon(pieces)

    def crop_in(self, year: int) -> str:
        """Return the crop of the season that ends in a year."""
        return ROTATIONS[self.rotation][YEARS.index(year)]


# A mere that belongs to nobody's fields, and a bare yard that must not be charged to the
# meadow around it.
MERE: Final[Ring] = ((90, 1030), (200, 1000), (246, 1090), (230, 1200), (120, 1235), (60, 1150))
YARD: Final[Ring] = ((1190, 1070), (1270, 1060), (1280, 1140), (1200, 1150))
FIELDS: Final = (
    Field(ref="QM-01", name="Long Rise", holding=NETHER, rotation="A",
          parts=(((15, 21), (252, 19), (253, 289), (18, 292)),)),
    Field(ref="QM-02", name="Teal Piece", holding=NETHER, rotation="B",
          parts=(((290, 29), (520, 16), (539, 168), (521, 306), (290, 299)),)),
    Field(ref="QM-03", name="Shade Field", holding=NETHER, rotation="C",
          parts=(((577, 18), (805, 23), (795, 301), (567, 299)),)),
    Field(ref="QM-04", name="Cloudberry Flat", holding=NETHER, rotation="D",
          parts=(((837, 26), (1077, 23), (1086, 188), (1069, 296), (850, 305)),)),
    Field(ref="QM-05", name="Half Moon", holding=NETHER, rotation="E",
          parts=(((1124, 22), (1354, 25), (1346, 293), (1118, 296)),)),
    Field(ref="QM-06", name="Bee Ley", holding=NETHER, rotation="F",
          parts=(((1388, 19), (1628, 25), (1624, 302), (1396, 304)),)),
    Field(ref="QM-07", name="Bald Knoll", holding=NETHER, rotation="A",
          parts=(((1668, 16), (1896, 17), (1900, 295), (1675, 298)),)),
    Field(ref="QM-08", name="Crake Corner", holding=NETHER, rotation="C",
          parts=(((27, 342), (258, 343), (253, 613), (22, 611)),)),
    Field(ref="QM-09", name="Oxlip Ten", holding=NETHER, rotation="D",
          parts=(((293, 350), (525, 336), (534, 447), (530, 615), (302, 624)),)),
    Field(ref="QM-10", name="Ringmeadow", holding=NETHER, rotation="E",
          parts=(((564, 342), (808, 341), (793, 612), (565, 613)),)),
    Field(ref="QM-11", name="Sill End", holding=NETHER, rotation="F",
          parts=(((837, 335), (1083, 342), (1069, 621), (847, 611)),)),
    Field(ref="QM-12", name="Wren Acre", holding=NETHER, rotation="A",
          parts=(((1124, 337), (1352, 338), (1353, 618), (1116, 617)),)),
    Field(ref="QM-13", name="Gleaner's Strip", holding=NETHER, rotation="B",
          parts=(((1398, 337), (1623, 336), (1616, 624), (1399, 622)),)),
    Field(ref="QM-14", name="Beet Bottom", holding=NETHER, rotation="C",
          parts=(((1663, 346), (1902, 341), (1892, 619), (1665, 613)),)),
    Field(ref="QM-15", name="Lantern Hill", holding=MERE_END, rotation="E",
          parts=(((20, 654), (246, 658), (262, 811), (247, 937), (22, 942)),)),
    Field(ref="QM-16", name="Dunnock Piece", holding=MERE_END, rotation="F",
          parts=(((302, 663), (534, 659), (526, 940), (303, 927)),)),
    Field(ref="QM-17", name="Ferret Bank", holding=MERE_END, rotation="A",
          parts=(((574, 660), (806, 662), (801, 929), (569, 929)),)),
    Field(ref="QM-18", name="Saltgate", holding=MERE_END, rotation="B",
          parts=(((853, 663), (1080, 667), (1072, 937), (839, 940)),)),
    Field(ref="QM-19", name="Candle Close", holding=MERE_END, rotation="C",
          parts=(((1122, 668), (1356, 655), (1347, 941), (1124, 936)),)),
    Field(ref="QM-20", name="Upper Thrum", holding=MERE_END, rotation="D",
          parts=(((1392, 659), (1620, 657), (1635, 794), (1623, 943), (1398, 928)),)),
    Field(ref="QM-21", name="Lower Thrum", holding=MERE_END, rotation="E",
          parts=(((1671, 665), (1815, 683), (1892, 660), (1905, 942), (1676, 929)),)),
    Field(ref="QM-22", name="Moth Leys", holding=MERE_END, rotation="C",
          parts=(((297, 988), (450, 1001), (529, 984), (525, 1262), (302, 1249)),)),
    Field(ref="QM-23", name="Tansy Ground", holding=MERE_END, rotation="D",
          parts=(((565, 988), (805, 989), (813, 1139), (799, 1247), (568, 1254)),)),
    Field(ref="QM-24", name="Kestrel Side", holding=MERE_END, rotation="E",
          parts=(((844, 980), (1071, 975), (1083, 1261), (847, 1252)),)),
    Field(ref="QM-25", name="Drover's Rest", holding=MERE_END, rotation="F",
          parts=(((1112, 986), (1351, 979), (1350, 1251), (1111, 1259)),),
          hole=YARD, tags=("grazed",)),
    Field(ref="QM-26", name="Split Oak", holding=MERE_END, rotation="A",
          parts=(((1388, 980), (1490, 980), (1495, 1255), (1392, 1253)),
                 ((1520, 980), (1616, 979), (1637, 1092), (1617, 1257), (1524, 1255)),)),
    Field(ref="QM-27", name="Penny Flat", holding=MERE_END, rotation="B",
          parts=(((1662, 987), (1787, 991), (1899, 981), (1903, 1259), (1674, 1257)),)),
    Field(ref="QM-28", name="Rush Bottom", holding=OVER, rotation="D",
          parts=(((24, 1299), (247, 1298), (263, 1431), (247, 1568), (18, 1580)),)),
    Field(ref="QM-29", name="Harebell Rise", holding=OVER, rotation="E",
          parts=(((294, 1294), (381, 1323), (523, 1303), (524, 1574), (302, 1573)),)),
    Field(ref="QM-30", name="Mill Tongue", holding=OVER, rotation="F",
          parts=(((572, 1303), (805, 1307), (814, 1403), (800, 1577), (564, 1581)),)),
    Field(ref="QM-31", name="Cuckoo Ten", holding=OVER, rotation="A",
          parts=(((839, 1300), (1069, 1299), (1076, 1569), (850, 1578)),)),
    Field(ref="QM-32", name="Sorrel Field", holding=OVER, rotation="B",
          parts=(((1117, 1301), (1355, 1305), (1341, 1582), (1126, 1584)),)),
    Field(ref="QM-33", name="Otter Reach", holding=OVER, rotation="C",
          parts=(((1399, 1298), (1622, 1296), (1632, 1572), (1391, 1583)),)),
    Field(ref="QM-34", name="Stony Lap", holding=OVER, rotation="D",
          parts=(((1666, 1298), (1771, 1312), (1904, 1303), (1900, 1577), (1661, 1584)),)),
    Field(ref="QM-35", name="Plover Hide", holding=OVER, rotation="F",
          parts=(((20, 1615), (246, 1619), (256, 1904), (30, 1895)),)),
    Field(ref="QM-36", name="Barrow Foot", holding=OVER, rotation="A",
          parts=(((297, 1621), (530, 1625), (522, 1890), (297, 1893)),)),
    Field(ref="QM-37", name="Quince Yard", holding=OVER, rotation="B",
          parts=(((563, 1619), (795, 1627), (805, 1890), (573, 1895)),)),
    Field(ref="QM-38", name="Marl Pit", holding=OVER, rotation="C",
          parts=(((847, 1620), (1071, 1621), (1078, 1889), (849, 1906)),)),
    Field(ref="QM-39", name="Twelve Ridges", holding=OVER, rotation="D",
          parts=(((1116, 1619), (1344, 1619), (1353, 2010), (1121, 2010)),)),
    Field(ref="QM-40", name="Lark Lease", holding=OVER, rotation="E",
          parts=(((1387, 1621), (1548, 1636), (1617, 1621), (1627, 1901), (1388, 1904)),)),
    Field(ref="QM-41", name="Winter Gate", holding=OVER, rotation="F",
          parts=(((1664, 1625), (1896, 1614), (1892, 1896), (1664, 1901)),)),
    Field(ref="QM-42", name="Calf Paddock", holding=MERE_END, rotation="F",
          parts=(((24, 985), (52, 985), (52, 1010), (24, 1010)),), tags=("grazed",)),
)  # fmt: skip
