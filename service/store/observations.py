"""Writing observations: append-only writes, and the newest look kept beside them.

Here is the only place that packs an observation.
"""

import hashlib
import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import ColumnElement, delete, func, insert, or_, select, update
from sqlalchemy.dialects import postgresql, sqlite
from sqlalchemy.orm import Session

from service.store.batches import in_batches
from service.store.columns import microseconds
from service.store.looks import LOOK_SHARE, PASS_GAP, bucket_of, newest_looks
from service.store.parcels import bump_revisions, in_force, intersects
from service.store.sessions import serialise
from service.store.tables import Boundary, Latest, Layout, Observation, Parcel, Scene, Write


@dataclass(frozen=True, slots=True, kw_only=True)
class Measured:
    """What measuring a scene gave.

    Attributes
    ----------
    parcel_ids, boundary_ids
        Whose row is whose, and by which outline it was measured.
    columns
        Names of the figures in order, such as ``ndvi.mean``.
    figures
        float32, shape (parcels, columns); NaN where unknown.
    recipe
        Everything else that made the numbers, as stored with the layout.
    scaling
        Scale and offset by band role, as used for this scene.
    """

    parcel_ids: Sequence[int]
    boundary_ids: Sequence[int]
    columns: Sequence[str]
    figures: NDArray[np.float32]
    recipe: Mapping[str, Any]
    scaling: Mapping[str, Any]


def parcels_to_measure(session: Session, scene: Scene) -> list[tuple[int, int, bytes]]:
    """Return (parcel, boundary version, WKB) of what a scene still has to measure.

    Parcels whose outline in force at the acquisition meets the footprint, less those that
    this content of the scene was measured for by that very outline; and those whose earlier
    outline was measured, wherever the present one lies. A parcel retired before the
    acquisition is left out.
    """
    done = _measured_outlines(session, scene)
    grid = scene.grid
    measured = (
        select(Observation.parcel_id)
        .join(Write, Write.id == Observation.write_id)
        .where(Write.scene_id == scene.id, Write.closed_at.is_(None))
    )
    meets: ColumnElement[bool] = Boundary.parcel_id.in_(measured)
    if grid is not None:
        meets = or_(meets, intersects((grid.west, grid.south, grid.east, grid.north)))
    query = (
        select(Boundary.parcel_id, Boundary.id, Boundary.wkb)
        .join(Parcel, Parcel.id == Boundary.parcel_id)
        .where(
            in_force(scene.acquired_at),
            meets,
            or_(Parcel.retired_at.is_(None), Parcel.retired_at > scene.acquired_at),
        )
        .order_by(Boundary.parcel_id)
    )
    rows = session.execute(query).all()
    return [(p, b, wkb) for p, b, wkb in rows if done.get(p) != b]


def _measured_outlines(session: Session, scene: Scene) -> dict[int, int]:
    """Return by parcel the outline that this content of the scene was last measured by."""
    query = (
        select(Observation.parcel_id, Observation.boundary_id)
        .join(Write, Write.id == Observation.write_id)
        .where(Write.scene_id == scene.id, Write.closed_at.is_(None), Write.digest == scene.digest)
        .order_by(Observation.write_id)
    )
    return dict(session.execute(query).all())


def has_write(session: Session, scene: Scene, generation: int) -> bool:
    """Whether this generation's observations are there already."""
    query = select(Write.id).where(Write.scene_id == scene.id, Write.generation == generation)
    return session.scalar(query) is not None


def record(session: Session, scene: Scene, measured: Measured, *, at: datetime) -> Write:
    """Record a scene's observations as one write, and bring what is derived up to date.

    Writes of other content of the same scene are closed. The scene's row must be held by
    `lock_scene`, and must not have a write of this generation.
    """
    is_first = session.scalar(select(Write.id).where(Write.scene_id == scene.id)) is None
    replaced = _current_writes(session, scene.id, other_than=scene.digest)
    write = Write(
        scene_id=scene.id,
        generation=scene.generation,
        digest=scene.digest,
        layout_id=_layout(session, measured).id,
        scaling=dict(measured.scaling),
        recorded_at=at,
        closed_at=None,
    )
    session.add(write)
    session.flush()
    _insert_rows(session, scene.acquired_at, write.id, measured)
    if replaced:
        _close(session, replaced, at=at)
    bump_revisions(session, [write.id])
    if is_first and _is_alone_in_pass(session, scene):
        _advance_latest(session, scene, write, measured)
    else:
        rebuild_latest(session, measured.parcel_ids)
    return write


def _layout(session: Session, measured: Measured) -> Layout:
    told = json.dumps([list(measured.columns), dict(measured.recipe)], sort_keys=True)
    digest = hashlib.sha256(told.encode()).hexdigest()
    serialise(session, "layouts")
    row = session.scalar(select(Layout).where(Layout.digest == digest))
    if row is None:
        row = Layout(digest=digest, columns=list(measured.columns), recipe=dict(measured.recipe))
        session.add(row)
        session.flush()
    return row


def _insert_rows(
    session: Session, acquired_at: datetime, write_id: int, measured: Measured
) -> None:
    """Insert the packed rows in key order: in bulk, as each database takes them fastest."""
    bucket = bucket_of(acquired_at)
    order = np.argsort(np.asarray(measured.parcel_ids, dtype=np.int64))
    keys = ((int(measured.parcel_ids[i]), int(measured.boundary_ids[i]), i) for i in order)
    if session.get_bind().dialect.name == "sqlite":
        packed = measured.figures.astype("<f4")
        instant = microseconds(acquired_at)
        driver = session.connection().connection.driver_connection
        assert driver is not None  # noqa: S101 - a session in a transaction has a connection
        driver.executemany(
            "INSERT INTO observation "
            "(bucket, parcel_id, acquired_at, write_id, boundary_id, figures) "
            "VALUES (?, ?, ?, ?, ?, ?)",
            ((bucket, p, instant, write_id, b, packed[i].tobytes()) for p, b, i in keys),
        )
        return
    driver = session.connection().connection.driver_connection
    assert driver is not None  # noqa: S101
    with (
        driver.cursor() as cursor,
        cursor.copy(
            "COPY observation (bucket, parcel_id, acquired_at, write_id, boundary_id, figures) "
            "FROM STDIN (FORMAT BINARY)"
        ) as copy,
    ):
        copy.set_types(["int4", "int8", "timestamptz", "int8", "int8", "float4[]"])
        for parcel_id, boundary_id, i in keys:
            copy.write_row(
                (
                    bucket,
                    parcel_id,
                    acquired_at,
                    write_id,
                    boundary_id,
                    measured.figures[i].tolist(),
                )
            )


def close_writes(session: Session, scene_id: int, *, at: datetime) -> None:
    """Close a scene's current writes: from now on they answer by `as_of` only."""
    closed = _current_writes(session, scene_id)
    if closed:
        parcel_ids = _close(session, closed, at=at)
        rebuild_latest(session, parcel_ids)


def _current_writes(session: Session, scene_id: int, *, other_than: str | None = None) -> list[int]:
    query = select(Write.id).where(Write.scene_id == scene_id, Write.closed_at.is_(None))
    if other_than is not None:
        query = query.where(Write.digest != other_than)
    return list(session.scalars(query))


def _close(session: Session, write_ids: Sequence[int], *, at: datetime) -> list[int]:
    """Close writes; return whose observations they hold."""
    session.execute(
        update(Write)
        .where(Write.id.in_(write_ids))
        .values(closed_at=at)
        .execution_options(synchronize_session="fetch")
    )
    bump_revisions(session, write_ids)
    query = select(Observation.parcel_id).where(Observation.write_id.in_(write_ids)).distinct()
    return sorted(session.scalars(query))


def _is_alone_in_pass(session: Session, scene: Scene) -> bool:
    """Whether no other scene with current figures can be of the same pass."""
    query = (
        select(Scene.id)
        .join(Write, Write.scene_id == Scene.id)
        .where(
            Scene.id != scene.id,
            Write.closed_at.is_(None),
            func.coalesce(Scene.platform, Scene.sensor) == (scene.platform or scene.sensor),
            Scene.acquired_at >= scene.acquired_at - PASS_GAP,
            Scene.acquired_at <= scene.acquired_at + PASS_GAP,
        )
    )
    return session.scalar(query.limit(1)) is None


def _advance_latest(session: Session, scene: Scene, write: Write, measured: Measured) -> None:
    """Put this write's looks where the newest ones stood, unless those are newer."""
    places = {column: place for place, column in enumerate(measured.columns)}
    shares = measured.figures[:, places[f"{measured.recipe['rule']}.valid_share"]]
    is_look = shares >= np.float32(LOOK_SHARE)
    for column, place in places.items():
        measure, _, stat = column.partition(".")
        if stat == "mean":
            rows = [
                _latest_row(measure, int(parcel_id), scene.acquired_at, write.id, value, share)
                for parcel_id, value, share, seen in zip(
                    measured.parcel_ids, measured.figures[:, place], shares, is_look, strict=True
                )
                if seen
            ]
            _upsert_latest(session, rows)


def _latest_row(
    measure: str,
    parcel_id: int,
    acquired_at: datetime,
    write_id: int,
    value: np.float32 | float | None,
    valid_share: np.float32 | float,
) -> dict[str, Any]:
    return {
        "measure": measure,
        "parcel_id": parcel_id,
        "acquired_at": acquired_at,
        "write_id": write_id,
        "value": None if value is None or np.isnan(value) else float(value),
        "valid_share": float(valid_share),
    }


def _upsert_latest(session: Session, rows: Sequence[dict[str, Any]]) -> None:
    if not rows:
        return
    dialect = sqlite if session.get_bind().dialect.name == "sqlite" else postgresql
    statement = dialect.insert(Latest)
    sent = statement.excluded
    session.execute(
        statement.on_conflict_do_update(
            index_elements=["measure", "parcel_id"],
            set_={
                "acquired_at": sent.acquired_at,
                "write_id": sent.write_id,
                "value": sent.value,
                "valid_share": sent.valid_share,
            },
            where=Latest.acquired_at <= sent.acquired_at,
        ),
        rows,
    )


def rebuild_latest(session: Session, parcel_ids: Sequence[int]) -> None:
    """Work out the newest looks of some parcels anew, from their observations."""
    for some in in_batches(int(parcel_id) for parcel_id in parcel_ids):
        session.execute(
            delete(Latest)
            .where(Latest.parcel_id.in_(some))
            .execution_options(synchronize_session=False)
        )
        rows = [
            _latest_row(
                measure,
                parcel_id,
                look.acquired_at,
                look.write_id,
                look.of_measure(measure, "mean"),
                look.of_look("valid_share"),
            )
            for parcel_id, looks in newest_looks(session, some)
            for measure, look in looks.items()
        ]
        if rows:
            session.execute(insert(Latest), rows)
