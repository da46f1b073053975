"""Writing series: one entry a format, by media type."""

import csv
import io
import json
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

Column = Sequence[Any]


@dataclass(frozen=True, slots=True, kw_only=True)
class MeasureSeries:
    """One measure of one parcel in time order, by column.

    `stats` are by name, None where unknown; what judging says in words stands among them.
    Instants are written as RFC 3339 in UTC. A name with a point, ``baseline.mid``, is a column
    of a group.
    """

    measure: str
    observed_at: Sequence[str]
    scene: Sequence[str]
    sensor: Sequence[str]
    crop: Sequence[str | None]
    stats: Mapping[str, Sequence[float | str | None]]

    def columns(self) -> dict[str, Column]:
        """Return all columns by name, in the order of the contract."""
        keys = {
            "observed_at": self.observed_at,
            "scene": self.scene,
            "sensor": self.sensor,
            "crop": self.crop,
        }
        return {**keys, **self.stats}


@dataclass(frozen=True, slots=True, kw_only=True)
class ParcelSeries:
    """The measures of one parcel, all with the same statistics."""

    parcel: str
    measures: Sequence[MeasureSeries]
    stats: Sequence[str]


@dataclass(frozen=True, slots=True, kw_only=True)
class SeriesFormat:
    """A format of series: its short name, and what writes it."""

    name: str
    write: Callable[[ParcelSeries], bytes]


def json_by_column(series: ParcelSeries) -> bytes:
    """Write JSON with one array a column, ready to plot."""
    document = {
        "parcel": series.parcel,
        "indices": {measure.measure: _grouped(measure.columns()) for measure in series.measures},
    }
    return json.dumps(document, ensure_ascii=False, allow_nan=False).encode()


def _grouped(columns: Mapping[str, Column]) -> dict[str, Any]:
    """Return the columns with those of a group together."""
    grouped: dict[str, Any] = {}
    for name, column in columns.items():
        group, _, member = name.rpartition(".")
        (grouped.setdefault(group, {}) if group else grouped)[member] = column
    return grouped


def long_csv(series: ParcelSeries) -> bytes:
    """Write CSV with one row an observation and measure (RFC 4180); unknown is empty."""
    text = io.StringIO()
    writer = csv.writer(text)
    stats = [name.replace(".", "_") for name in series.stats]
    writer.writerow(["parcel", "index", "observed_at", "scene", "sensor", "crop", *stats])
    for measure in series.measures:
        for row in zip(*measure.columns().values(), strict=True):
            writer.writerow([series.parcel, measure.measure, *row])
    return text.getvalue().encode()


SERIES_FORMATS: Final[Mapping[str, SeriesFormat]] = {
    "application/json": SeriesFormat(name="json", write=json_by_column),
    "text/csv": SeriesFormat(name="csv", write=long_csv),
}
