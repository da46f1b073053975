"""What the demo shows of its figures, and how it holds them against what was put in."""

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any, Final

SHOWN: Final = ("ndvi", "ndmi", "ndwi", "nbr")
LOSSES: Final = ("cloud", "shadow", "snow", "nodata", "saturation")
LOSS_WORDS: Final = {"nodata": "outside the tile", "saturation": "saturated"}
LOOK_VALID_SHARE: Final = 0.6
FEW_CELLS: Final = 4.0
SHARE_WORTH_A_REMARK: Final = 0.01
VALID_SHARE_TOLERANCE: Final = 0.03
COVERS_BY_FALLING_NDVI: Final = ("dense", "bare", "water")

Truth = Mapping[str, Mapping[str, Any]]


@dataclass(frozen=True, slots=True, kw_only=True)
class Row:
    """What the service says of one parcel in one scene; a mean that is not known is None."""

    ref: str
    crop: str
    valid_share: float
    pixels: float
    lost: Mapping[str, float]
    means: Mapping[str, float | None]

    @property
    def is_look(self) -> bool:
        """Whether enough of the parcel was in clear view."""
        return self.valid_share >= LOOK_VALID_SHARE

    @property
    def remark(self) -> str:
        """What a reader should know of the figures."""
        remarks = [
            f"{share:.0%} {LOSS_WORDS.get(name, name)}"
            for name, share in self.lost.items()
            if share >= SHARE_WORTH_A_REMARK
        ]
        if self.is_look and self.pixels < FEW_CELLS:
            remarks.append(f"only {self.pixels:.1f} cells, all on its edge")
        return ("" if self.is_look else "unseen: ") + ", ".join(remarks)


def table_of(rows: Sequence[Row]) -> str:
    """Return the rows as an aligned table for people."""
    heads = ("parcel", "crop", "valid", *SHOWN, "remark")
    cells = [heads, *(_cells_of(row) for row in rows)]
    widths = [max(len(line[at]) for line in cells) for at in range(len(heads))]
    figures = range(2, len(heads) - 1)
    return "\n".join(
        "  ".join(
            text.rjust(width) if at in figures else text.ljust(width)
            for at, (text, width) in enumerate(zip(line, widths, strict=True))
        ).rstrip()
        for line in cells
    )


def _cells_of(row: Row) -> tuple[str, ...]:
    means = (row.means[index] for index in SHOWN)
    figures = ["-" if mean is None or not row.is_look else f"{mean:.2f}" for mean in means]
    return (row.ref, row.crop, f"{row.valid_share:.0%}", *figures, row.remark)


def faults_of(rows: Sequence[Row], truth: Truth) -> list[str]:
    """Return in what the figures differ from the truth behind the scene; none if they agree.

    Held against it: the valid share, a figure for every index wherever a look is owed, the
    range of NDVI, and the order of canopy, soil and water.
    """
    by_ref = {row.ref: row for row in rows}
    missing = [f"{ref}: nothing came back." for ref in truth if ref not in by_ref]
    faults = [
        f"{ref}: {fault}"
        for ref, facts in truth.items()
        if ref in by_ref
        for fault in _faults_of_row(by_ref[ref], facts)
    ]
    return [*missing, *faults, *_faults_of_order(rows, truth)]


def _faults_of_row(row: Row, facts: Mapping[str, Any]) -> Iterator[str]:
    if abs(row.valid_share - facts["valid_share"]) > VALID_SHARE_TOLERANCE:
        yield f"valid share {row.valid_share:.2f}, but {facts['valid_share']:.2f} is in view."
    if not facts["look"]:
        return
    for index, mean in row.means.items():
        if mean is None:
            yield f"no {index}, though the parcel is in clear view."
    low, high = facts["ndvi"]
    ndvi = row.means["ndvi"]
    if ndvi is not None and not low <= ndvi <= high:
        yield f"NDVI {ndvi:.3f} of {facts['cover']} land lies outside {low:.2f} to {high:.2f}."


def _faults_of_order(rows: Sequence[Row], truth: Truth) -> Iterator[str]:
    """Yield where a denser cover does not have the higher NDVI."""
    found: dict[str, list[float]] = {}
    for row in rows:
        facts, ndvi = truth.get(row.ref), row.means["ndvi"]
        if facts is not None and ndvi is not None and facts["look"] and not facts["small"]:
            found.setdefault(facts["cover"], []).append(ndvi)
    for greener, barer in pairwise(COVERS_BY_FALLING_NDVI):
        if greener not in found or barer not in found:
            yield f"No parcel of {greener} or of {barer} cover was measured."
        elif min(found[greener]) <= max(found[barer]):
            yield f"NDVI of {greener} cover does not exceed that of {barer} cover."
