"""Many rows at once, as each database takes them fastest: observations and newest looks.

A scene of ten thousand parcels brings as many observations and, at twenty measures, two
hundred newest looks to the thousand; through the mapper they would take seconds.
"""

from collections.abc import Iterable, Mapping
from datetime import UTC, datetime
from itertools import repeat
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import text
from sqlalchemy.orm import Session

from service.store.columns import microseconds

LatestRow = tuple[str, int, datetime, int, float | None, float]
"""Measure, parcel, instant, write, value (None where unknown), valid share."""

_OBSERVATION: Final = "observation (bucket, parcel_id, acquired_at, write_id, boundary_id, figures)"
_LATEST: Final = "latest (measure, parcel_id, acquired_at, write_id, value, valid_share)"
COPY_HEADER: Final = b"PGCOPY\n\xff\r\n\0" + bytes(8)
COPY_TRAILER: Final = b"\xff\xff"
FLOAT4_OID: Final = 700
# PostgreSQL counts binary instants from here.
POSTGRES_EPOCH_US: Final = microseconds(datetime(2000, 1, 1, tzinfo=UTC))


def is_sqlite(session: Session) -> bool:
    """Whether the session is on SQLite; else it is on PostgreSQL."""
    return session.get_bind().dialect.name == "sqlite"


def insert_observations(
    session: Session,
    *,
    bucket: int,
    acquired_at: datetime,
    write_id: int,
    parcel_ids: NDArray[np.int64],
    boundary_ids: NDArray[np.int64],
    figures: NDArray[np.float32],
) -> None:
    """Insert the observations of one write; the parcels ascend, so that keys do too.

    Parameters
    ----------
    parcel_ids, boundary_ids, figures
        Shapes (parcels,), (parcels,) and (parcels, columns); NaN where unknown.
    """
    instant = microseconds(acquired_at)
    if is_sqlite(session):
        packed = figures.astype("<f4")
        driver_of(session).executemany(
            f"INSERT INTO {_OBSERVATION} VALUES (?, ?, ?, ?, ?, ?)",  # noqa: S608 - constants
            zip(
                repeat(bucket),
                parcel_ids.tolist(),
                repeat(instant),
                repeat(write_id),
                boundary_ids.tolist(),
                (row.tobytes() for row in packed),
                strict=False,
            ),
        )
        return
    rows = _copied_rows(figures.shape)
    for field, value in (
        ("bucket", bucket),
        ("parcel_id", parcel_ids),
        ("acquired_at", instant - POSTGRES_EPOCH_US),
        ("write_id", write_id),
        ("boundary_id", boundary_ids),
    ):
        rows[field]["value"] = value
    rows["figures"]["value"] = figures
    with (
        driver_of(session).cursor() as cursor,
        cursor.copy(f"COPY {_OBSERVATION} FROM STDIN (FORMAT BINARY)") as copy,
    ):
        copy.write(COPY_HEADER + rows.tobytes() + COPY_TRAILER)


def _copied_rows(shape: tuple[int, ...]) -> NDArray[Any]:
    """Return empty observations in PostgreSQL's binary COPY format, lengths filled in.

    Every value is led by its length in bytes, an array also by its number of dimensions, a
    flag for nulls, the type of its elements, its size and its first subscript (PostgreSQL's
    manual, "COPY", and the output of ``array_send``).
    """
    count, columns = shape

    def field(number: str) -> list[tuple[str, str]]:
        return [("length", ">i4"), ("value", number)]

    array_head = [(name, ">i4") for name in ("length", "ndim", "nulls", "oid", "size", "first")]
    rows = np.zeros(
        count,
        dtype=[
            ("fields", ">i2"),
            ("bucket", field(">i4")),
            ("parcel_id", field(">i8")),
            ("acquired_at", field(">i8")),
            ("write_id", field(">i8")),
            ("boundary_id", field(">i8")),
            ("head", array_head),
            ("figures", field(">f4"), (columns,)),
        ],
    )
    rows["fields"] = 6
    rows["bucket"]["length"] = 4
    for name in ("parcel_id", "acquired_at", "write_id", "boundary_id"):
        rows[name]["length"] = 8
    rows["head"] = (20 + 8 * columns, 1, 0, FLOAT4_OID, columns, 1)
    rows["figures"]["length"] = 4
    return rows


def advance_latest(
    session: Session,
    *,
    acquired_at: datetime,
    write_id: int,
    parcel_ids: NDArray[np.int64],
    figures: NDArray[np.float32],
    places: Mapping[str, int],
    share_place: int,
) -> None:
    """Put a write's looks where the newest ones stood, unless those are newer.

    Parameters
    ----------
    parcel_ids, figures
        The parcels that have a look, in ascending order, and their observations, as they are
        in the database already.
    places, share_place
        Which column of the figures is the mean of a measure, and which is the valid share.
    """
    if is_sqlite(session):
        ids, shares = parcel_ids.tolist(), figures[:, share_place].tolist()
        driver: Any = session.connection().connection.driver_connection
        instant = microseconds(acquired_at)
        for measure in sorted(places):
            values = _known(figures[:, places[measure]])
            # Without a step of Python for each row, of which a scene brings hundred thousands.
            rows = zip(
                repeat(measure), ids, repeat(instant), repeat(write_id), values, shares,
                strict=False,
            )  # fmt: skip
            driver.executemany(_UPSERT_LATEST, rows)
        return
    looks = {
        "measures": list(places),
        "places": [place + 1 for place in places.values()],
        "share": share_place + 1,
        "write_id": write_id,
        "parcel_ids": parcel_ids.tolist(),
    }
    advanced = session.execute(text(_UPDATE_LATEST), looks).rowcount  # type: ignore[attr-defined]
    if advanced < len(places) * len(parcel_ids):
        session.execute(text(_INSERT_LATEST), looks)


_LOOKS: Final = """
    SELECT sent.measure, o.parcel_id, o.acquired_at, o.write_id,
        NULLIF(o.figures[sent.place], 'NaN'::real) AS value, o.figures[:share] AS valid_share
    FROM unnest(CAST(:measures AS text[]), CAST(:places AS int[])) AS sent (measure, place)
    CROSS JOIN observation o
    WHERE o.write_id = :write_id AND o.parcel_id = ANY(CAST(:parcel_ids AS bigint[]))
"""
# Updating what is there and then adding the rest takes half the time of an upsert.
_UPDATE_LATEST: Final = f"""
    UPDATE latest SET acquired_at = look.acquired_at, write_id = look.write_id,
        value = look.value, valid_share = look.valid_share
    FROM ({_LOOKS}) AS look
    WHERE latest.measure = look.measure AND latest.parcel_id = look.parcel_id
        AND latest.acquired_at <= look.acquired_at
"""  # noqa: S608 - constants
_INSERT_LATEST: Final = f"INSERT INTO {_LATEST} {_LOOKS} ORDER BY 1, 2 ON CONFLICT DO NOTHING"
_UPSERT_LATEST: Final = f"""
    INSERT INTO {_LATEST} VALUES (?, ?, ?, ?, ?, ?)
    ON CONFLICT (measure, parcel_id) DO UPDATE SET acquired_at = excluded.acquired_at,
        write_id = excluded.write_id, value = excluded.value, valid_share = excluded.valid_share
    WHERE latest.acquired_at <= excluded.acquired_at
"""  # noqa: S608 - constants


def insert_latest(session: Session, rows: Iterable[LatestRow]) -> None:
    """Insert newest looks of parcels that have none."""
    ordered = sorted(rows, key=lambda row: row[:2])
    if is_sqlite(session):
        _upsert_latest_sqlite(session, ordered)
        return
    with (
        driver_of(session).cursor() as cursor,
        cursor.copy(f"COPY {_LATEST} FROM STDIN (FORMAT BINARY)") as copy,
    ):
        copy.set_types(["varchar", "int8", "timestamptz", "int8", "float4", "float4"])
        for row in ordered:
            copy.write_row(row)


def _upsert_latest_sqlite(session: Session, rows: Iterable[LatestRow]) -> None:
    instants: dict[datetime, int] = {}

    def stored(instant: datetime) -> int:
        if instant not in instants:
            instants[instant] = microseconds(instant)
        return instants[instant]

    driver_of(session).executemany(
        _UPSERT_LATEST,
        (
            (measure, parcel_id, stored(acquired_at), write_id, value, share)
            for measure, parcel_id, acquired_at, write_id, value, share in rows
        ),
    )


def _known(values: NDArray[np.float32]) -> list[float | None]:
    """Return the values as the database takes them, None for NaN."""
    found: list[float | None] = values.tolist()
    for place in np.flatnonzero(np.isnan(values)).tolist():
        found[place] = None
    return found


def driver_of(session: Session) -> Any:
    """Return the driver's own connection, in the session's transaction."""
    driver = session.connection().connection.driver_connection
    assert driver is not None  # noqa: S101 - a session in a transaction has a connection
    return driver
