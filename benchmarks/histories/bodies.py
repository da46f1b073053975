"""A history as the bodies that a client would send: outlines, seasons, figures."""

import csv
import io
import json
from collections.abc import Iterator, Sequence
from typing import Any, Final

import numpy as np

from benchmarks.histories.crops import Places
from benchmarks.histories.making import LATITUDE, History
from benchmarks.histories.optics import MEASURES

ROWS_PER_CALL: Final = 100_000
SOURCE: Final = "thornholm"
COLUMNS: Final = ("parcel", "index", "observed_at", "mean", "valid_share", "sensor", "source")
# Thornholm is invented; it lies in open sea, so that no real field is shown.
_WEST: Final = 2.60
_SIDE_KM: Final = 0.2
_KM_PER_DEGREE: Final = 111.3


def outlines_of(history: History) -> dict[str, Any]:
    """Return the parcels as a FeatureCollection of squares."""
    east_km = _KM_PER_DEGREE * np.cos(np.radians(LATITUDE))
    west = _WEST + history.places[:, 0] / east_km
    south = LATITUDE + history.places[:, 1] / _KM_PER_DEGREE
    wide, high = _SIDE_KM / east_km, _SIDE_KM / _KM_PER_DEGREE
    features = []
    for ref, left, low in zip(history.refs, west.tolist(), south.tolist(), strict=True):
        ring = [(0, 0), (wide, 0), (wide, high), (0, high), (0, 0)]
        corners = [[round(left + x, 6), round(low + y, 6)] for x, y in ring]
        features.append(
            {
                "type": "Feature",
                "geometry": {"type": "Polygon", "coordinates": [corners]},
                "properties": {"ref": ref, "name": f"Thornholm {ref[3:]}"},
            }
        )
    return {"type": "FeatureCollection", "features": features}


def seasons_of(history: History) -> list[dict[str, str]]:
    """Return what grew where, as rows of a season import."""
    return [
        {
            "parcel": history.refs[one.parcel],
            "crop": one.crop,
            "from_on": one.from_on.isoformat(),
            "until_on": one.until_on.isoformat(),
        }
        for one in history.crop_seasons
    ]


def figures_of(history: History, looks: Places) -> Iterator[bytes]:
    """Yield CSV bodies with all measures of some looks, each of one call's size.

    A pass is never cut in two unless it alone is larger than a call.
    """
    rows: list[tuple[Any, ...]] = []
    for of_pass in _by_pass(history, looks):
        if len(rows) + len(of_pass) * len(MEASURES) > ROWS_PER_CALL and rows:
            yield _csv(rows)
            rows = []
        rows += _rows(history, of_pass)
        while len(rows) > ROWS_PER_CALL:
            yield _csv(rows[:ROWS_PER_CALL])
            rows = rows[ROWS_PER_CALL:]
    if rows:
        yield _csv(rows)


def pass_bodies(history: History, looks: Places) -> Iterator[bytes]:
    """Yield the CSV of one pass after the other, in order of acquisition."""
    for of_pass in _by_pass(history, looks):
        yield _csv(_rows(history, of_pass))


def outlines_body(history: History) -> bytes:
    """Return the outlines as one body."""
    return json.dumps(outlines_of(history)).encode()


def seasons_body(history: History) -> bytes:
    """Return the crop seasons as one body."""
    return json.dumps(seasons_of(history)).encode()


def _by_pass(history: History, looks: Places) -> list[Places]:
    """Return some looks pass by pass (looks are in order of their passes)."""
    if looks.size == 0:
        return []
    ends = np.flatnonzero(np.diff(history.look_pass[looks])) + 1
    return np.split(looks, ends)


def _rows(history: History, looks: Places) -> Sequence[tuple[Any, ...]]:
    one = history.passes[int(history.look_pass[looks[0]])]
    at = one.at.isoformat().replace("+00:00", "Z")
    return [
        (history.refs[parcel], measure, at, value, share, one.sensor, SOURCE)
        for parcel, share, values in zip(
            history.look_parcel[looks].tolist(),
            history.valid_share[looks].tolist(),
            history.values[looks].tolist(),
            strict=True,
        )
        for measure, value in zip(MEASURES, values, strict=True)
    ]


def _csv(rows: Sequence[tuple[Any, ...]]) -> bytes:
    file = io.StringIO()
    writer = csv.writer(file, lineterminator="\n")
    writer.writerow(COLUMNS)
    writer.writerows(rows)
    return file.getvalue().encode()
