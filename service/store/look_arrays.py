"""Looks of many parcels at once, as arrays: what judging reads.

The same looks as `looks.one_per_pass` chooses, without an object for each observation.
"""

from collections.abc import Collection, Iterator, Mapping, Sequence
from datetime import datetime
from itertools import groupby
from operator import attrgetter, itemgetter
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import func, select
from sqlalchemy.orm import Session

from service.store.bulk import driver_of, is_sqlite
from service.store.columns import microseconds
from service.store.look_choice import (
    MEASURES,
    CurrentWrite,
    Looks,
    Numbers,
    Rows,
    Values,
    one_per_pass,
    one_per_scene,
)
from service.store.looks import PASS_GAP, Places, bucket_of, places_of
from service.store.tables import Layout, Scene, Write

_COPY_HEADER: Final = 19
_COPY_TRAILER: Final = 2
_ROWS_AT_ONCE: Final = 20_000
_FEW_WRITES: Final = 6
"""Up to so many writes of a bucket are looked up each; for more the bucket is read in order."""


def read_looks(
    session: Session,
    parcel_ids: Collection[int],
    measures: Sequence[str],
    *,
    since: datetime | None,
    until: datetime,
    is_judged: bool | None = None,
) -> Looks:
    """Return the looks of parcels from `since` until before `until`, one per pass.

    A look's figures are those of its scene: of each measure the newest write that has it.
    Measures may have been sent with different valid shares; of the writes whose figures count
    the one with the least tells of the look, whichever came last.
    """
    begin = None if since is None else since - PASS_GAP
    writes = _writes(session, begin, until + PASS_GAP, is_judged=is_judged)
    used = sorted({write.layout for write in writes})
    layouts = {each: places_of(session.get_one(Layout, each)) for each in used}
    rows = _read(session, writes, layouts, measures)
    rows = rows.kept(np.isin(rows.parcel_ids, np.fromiter(parcel_ids, np.int64)))
    rows = rows.kept(np.lexsort((rows.write, rows.parcel_ids)))
    looks = one_per_pass(one_per_scene(rows, writes, layouts, measures), writes)
    at = looks.instants()
    is_wanted = at < microseconds(until)
    if since is not None:
        is_wanted &= at >= microseconds(since)
    return looks.kept(is_wanted)


def _writes(
    session: Session, since: datetime | None, until: datetime, *, is_judged: bool | None
) -> list[CurrentWrite]:
    """Return the current writes of scenes by platform, acquisition, scene and number."""
    platform = func.coalesce(Scene.platform, Scene.sensor)
    query = (
        select(
            Write.id,
            Write.layout_id,
            Scene.ref,
            platform,
            func.coalesce(Scene.processing_baseline, ""),
            Scene.acquired_at,
        )
        .join(Scene, Scene.id == Write.scene_id)
        .where(Write.closed_at.is_(None), Scene.acquired_at <= until)
    )
    if since is not None:
        query = query.where(Scene.acquired_at >= since)
    if is_judged is not None:
        query = query.where(Scene.is_judged == is_judged)
    found = [
        CurrentWrite(
            id=write_id,
            layout=layout_id,
            ref=ref,
            platform=by,
            processing_baseline=processing,
            acquired_at=at,
        )
        for write_id, layout_id, ref, by, processing, at in session.execute(query)
    ]
    return sorted(found, key=attrgetter("platform", "acquired_at", "ref", "id"))


def _read(
    session: Session,
    writes: Sequence[CurrentWrite],
    layouts: Mapping[int, Places],
    measures: Sequence[str],
) -> Rows:
    """Read the observations of some writes, a bucket at a time."""
    read = _blocks_of_sqlite if is_sqlite(session) else _blocks_of_postgresql
    by_id = np.array([write.id for write in writes], dtype=np.int64)
    order = np.argsort(by_id)
    in_time = sorted(writes, key=attrgetter("acquired_at"))
    blocks = [
        Rows(
            parcel_ids=parcel_ids,
            write=order[np.searchsorted(by_id, write_ids, sorter=order)],
            figures=figures,
        )
        for bucket, some in groupby(in_time, key=lambda write: bucket_of(write.acquired_at))
        for parcel_ids, write_ids, figures in read(session, bucket, list(some), layouts, measures)
    ]
    return Rows(
        parcel_ids=np.concatenate([np.zeros(0, np.int64), *(b.parcel_ids for b in blocks)]),
        write=np.concatenate([np.zeros(0, np.int64), *(b.write for b in blocks)]),
        figures=np.concatenate(
            [np.zeros((0, MEASURES + len(measures)), np.float32), *(b.figures for b in blocks)]
        ),
    )


Block = tuple[Numbers, Numbers, Values]
"""Parcels, writes by id, figures."""


def _blocks_of_sqlite(
    session: Session,
    bucket: int,
    writes: Sequence[CurrentWrite],
    layouts: Mapping[int, Places],
    measures: Sequence[str],
) -> Iterator[Block]:
    layout_of = {write.id: write.layout for write in writes}
    places = {each: _columns_in(layouts[each], measures) for each in set(layout_of.values())}
    for found in _rows_of_sqlite(session, bucket, writes):
        rows = [row for row in found if row[1] in layout_of]
        in_order = [layout_of[row[1]] for row in rows]
        for layout in set(in_order):
            some = [row for row, each in zip(rows, in_order, strict=True) if each == layout]
            packed = b"".join(map(itemgetter(2), some))
            table = np.frombuffer(packed, dtype="<f4").reshape(len(some), -1)
            yield (
                np.fromiter(map(itemgetter(0), some), np.int64, len(some)),
                np.fromiter(map(itemgetter(1), some), np.int64, len(some)),
                _taken(table, places[layout]),
            )


def _rows_of_sqlite(
    session: Session, bucket: int, writes: Sequence[CurrentWrite]
) -> Iterator[list[tuple[int, int, bytes]]]:
    """Yield parcel, write and packed figures, many at a time; of other writes as well."""
    cursor = driver_of(session).cursor()
    select_rows = "SELECT parcel_id, write_id, figures FROM observation"
    if len(writes) <= _FEW_WRITES:
        marks = ", ".join("?" * len(writes))
        cursor.execute(f"{select_rows} WHERE write_id IN ({marks})", [write.id for write in writes])
    else:
        first, last = microseconds(writes[0].acquired_at), microseconds(writes[-1].acquired_at)
        cursor.execute(
            f"{select_rows} WHERE bucket = ? AND acquired_at BETWEEN ? AND ?",
            (bucket, first, last),
        )
    while rows := cursor.fetchmany(_ROWS_AT_ONCE):
        yield rows


def _taken(table: Values, places: Sequence[int | None]) -> Values:
    """Return the columns at some places, NaN for a place of None."""
    taken = np.full((len(table), len(places)), np.nan, dtype=np.float32)
    for column, place in enumerate(places):
        if place is not None:
            taken[:, column] = table[:, place]
    return taken


def _columns_in(places: Places, measures: Sequence[str]) -> list[int | None]:
    """Return where a layout holds valid share, water and means; None where it does not."""
    names = (f"{places.rule}.valid_share", f"{places.rule}.water", *(f"{m}.mean" for m in measures))
    return [places.by_column.get(name) for name in names]


def _blocks_of_postgresql(
    session: Session,
    bucket: int,
    writes: Sequence[CurrentWrite],
    layouts: Mapping[int, Places],
    measures: Sequence[str],
) -> Iterator[Block]:
    """Yield the rows of each layout, by binary COPY."""
    by_layout: dict[int, list[int]] = {}
    for write in writes:
        by_layout.setdefault(write.layout, []).append(write.id)
    for layout, ids in by_layout.items():
        places = _columns_in(layouts[layout], measures)
        held = [place for place in places if place is not None]
        figures = "".join(f", coalesce(figures[{place + 1}], 'NaN')" for place in held)
        copied = _copied_out(
            session,
            f"SELECT parcel_id, write_id{figures} FROM observation "  # noqa: S608 - numbers
            f"WHERE bucket = {bucket} AND write_id IN ({', '.join(map(str, ids))})",
            ["i8", "i8", *("f4" for _ in held)],
        )
        at = {place: copied[f"v{column}"] for column, place in enumerate(held, start=2)}
        table = np.full((copied.size, len(places)), np.nan, dtype=np.float32)
        for column, place in enumerate(places):
            if place is not None:
                table[:, column] = at[place]
        yield copied["v0"].astype(np.int64), copied["v1"].astype(np.int64), table


def _copied_out(session: Session, query: str, types: Sequence[str]) -> NDArray[Any]:
    """Return what a query answers, by columns ``v0``, ``v1`` … of numbers, none of them null.

    In PostgreSQL's binary COPY format each row leads with its number of fields, each field
    with its length (PostgreSQL's manual, "COPY").
    """
    fields = [
        field
        for at, each in enumerate(types)
        for field in ((f"l{at}", ">i4"), (f"v{at}", f">{each}"))
    ]
    with (
        driver_of(session).cursor() as cursor,
        cursor.copy(f"COPY ({query}) TO STDOUT (FORMAT BINARY)") as copy,
    ):
        copied = b"".join(bytes(part) for part in copy)
    return np.frombuffer(copied[_COPY_HEADER:-_COPY_TRAILER], dtype=[("fields", ">i2"), *fields])
