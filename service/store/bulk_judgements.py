"""Judgements of a whole pass at once, as each database takes them fastest."""

from collections.abc import Sequence
from datetime import datetime
from itertools import repeat
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sqlalchemy.orm import Session

from service.store.bulk import (
    COPY_HEADER,
    COPY_TRAILER,
    FLOAT4_OID,
    POSTGRES_EPOCH_US,
    driver_of,
    is_sqlite,
)
from service.store.columns import microseconds

_COLUMNS = (
    "parcel_id",
    "acquired_at",
    "baseline_id",
    "crop",
    "score",
    "p",
    "unjudged",
    "figures",
    "recorded_at",
)


def insert_judgements(
    session: Session,
    table: str,
    *,
    parcel_ids: NDArray[np.int64],
    instants: NDArray[np.int64],
    baseline_id: int,
    crops: Sequence[str | None],
    score: NDArray[np.float64],
    p: NDArray[np.float64],
    unjudged: Sequence[str | None],
    figures: NDArray[np.float32],
    recorded_at: datetime,
) -> None:
    """Insert the judgements of one pass into a table of their shape.

    Parameters
    ----------
    parcel_ids, instants, score, p, figures
        Shapes (looks,) and (looks, columns); instants in microseconds since 1970, a score or
        p that is not known is NaN.
    crops, unjudged
        One each; None is null.
    """
    if is_sqlite(session):
        driver_of(session).executemany(
            f"INSERT INTO {table} ({', '.join(_COLUMNS)}) "  # noqa: S608 - constants
            "VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?)",
            zip(
                parcel_ids.tolist(),
                instants.tolist(),
                repeat(baseline_id),
                crops,
                _with_nulls(score),
                _with_nulls(p),
                unjudged,
                (row.tobytes() for row in figures.astype("<f4")),
                repeat(microseconds(recorded_at)),
                strict=False,
            ),
        )
        return
    with (
        driver_of(session).cursor() as cursor,
        cursor.copy(f"COPY {table} ({', '.join(_COLUMNS)}) FROM STDIN (FORMAT BINARY)") as copy,
    ):
        copy.write(COPY_HEADER)
        alike = _alike(crops, unjudged, np.isfinite(score), np.isfinite(p))
        for (crop, reason, has_score, has_p), places in alike.items():
            fields: list[tuple[str, bytes | NDArray[Any] | None]] = [
                (">i8", parcel_ids[places]),
                (">i8", instants[places] - POSTGRES_EPOCH_US),
                (">i8", np.full(len(places), baseline_id)),
                _text(crop),
                (">f8", score[places] if has_score else None),
                (">f8", p[places] if has_p else None),
                _text(reason),
                (">f4", figures[places]),
                (">i8", np.full(len(places), microseconds(recorded_at) - POSTGRES_EPOCH_US)),
            ]
            copy.write(_copied(fields, len(places)))
        copy.write(COPY_TRAILER)


def _with_nulls(values: NDArray[np.float64]) -> list[float | None]:
    known = np.isfinite(values).tolist()
    return [
        value if is_known else None for value, is_known in zip(values.tolist(), known, strict=True)
    ]


Alike = tuple[str | None, str | None, bool, bool]


def _alike(
    crops: Sequence[str | None],
    unjudged: Sequence[str | None],
    has_score: NDArray[np.bool_],
    has_p: NDArray[np.bool_],
) -> dict[Alike, list[int]]:
    """Return the places of looks whose rows have values of the same widths."""
    found: dict[Alike, list[int]] = {}
    keys = zip(crops, unjudged, has_score.tolist(), has_p.tolist(), strict=True)
    for at, key in enumerate(keys):
        found.setdefault(key, []).append(at)
    return found


def _text(value: str | None) -> tuple[str, bytes | None]:
    return "text", None if value is None else value.encode()


def _copied(fields: Sequence[tuple[str, bytes | NDArray[Any] | None]], count: int) -> bytes:
    """Return rows in PostgreSQL's binary COPY format.

    Every value is led by its length in bytes, -1 for null; an array also by its number of
    dimensions, a flag for nulls, the type of its elements, its size and its first subscript
    (PostgreSQL's manual, "COPY", and the output of ``array_send``).
    """
    parts = [np.full((count, 1), len(fields), dtype=">i2").view(np.uint8)]
    for kind, value in fields:
        if value is None:
            parts.append(np.full((count, 1), -1, dtype=">i4").view(np.uint8))
        elif isinstance(value, bytes):
            told = len(value).to_bytes(4, "big") + value
            parts.append(np.tile(np.frombuffer(told, dtype=np.uint8), (count, 1)))
        else:
            parts += _numbers(kind, value)
    return np.concatenate(parts, axis=1).tobytes()


def _numbers(kind: str, values: NDArray[Any]) -> list[NDArray[np.uint8]]:
    count = len(values)
    numbers = np.ascontiguousarray(values.reshape(count, -1).astype(kind)).view(np.uint8)
    if values.ndim == 1:
        return [np.full((count, 1), numbers.shape[1], dtype=">i4").view(np.uint8), numbers]
    each = np.frombuffer(np.dtype(kind).itemsize.to_bytes(4, "big"), dtype=np.uint8)
    size = values.shape[1]
    led = np.concatenate([np.tile(each, (count, size, 1)), numbers.reshape(count, size, -1)], 2)
    head = np.array([20 + 8 * size, 1, 0, FLOAT4_OID, size, 1], dtype=">i4").view(np.uint8)
    return [np.tile(head, (count, 1)), led.reshape(count, -1)]
