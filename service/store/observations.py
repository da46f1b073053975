"""Writing observations: append-only writes, and the newest look kept beside them."""

import hashlib
import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import ColumnElement, delete, func, or_, select, update
from sqlalchemy.orm import Session

from service.store.batches import in_batches
from service.store.bulk import advance_latest, insert_latest, insert_observations
from service.store.looks import LOOK_SHARE, PASS_GAP, bucket_of, newest_looks
from service.store.parcels import bump_revisions, in_force, intersects
from service.store.sensors import SENSOR_VERSION
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
        .where(
            Write.scene_id == scene.id, Write.closed_at.is_(None), Write.digest == _content(scene)
        )
        .order_by(Observation.write_id)
    )
    return dict(session.execute(query).all())


def _content(scene: Scene) -> str:
    """Return the digest of all that a scene's figures are made of.

    That is what was sent, and the version of a profile of one's own that it is read by.
    """
    version = scene.details.get(SENSOR_VERSION)
    if version is None:
        return scene.digest
    return hashlib.sha256(f"{scene.digest} {scene.sensor} {version}".encode()).hexdigest()


def count_writes(session: Session, scene_id: int) -> int:
    """Return how many current writes a scene has."""
    query = select(func.count()).where(Write.scene_id == scene_id, Write.closed_at.is_(None))
    return session.scalar(query) or 0


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
    replaced = _current_writes(session, scene.id, other_than=_content(scene))
    write = Write(
        scene_id=scene.id,
        generation=scene.generation,
        digest=_content(scene),
        layout_id=_layout(session, measured).id,
        scaling=dict(measured.scaling),
        recorded_at=at,
        closed_at=None,
    )
    session.add(write)
    session.flush()
    parcel_ids, figures = _insert(session, scene, write, measured)
    closed = _close(session, replaced, at=at) if replaced else []
    bump_revisions(session, [write.id])
    serialise(session, "latest")
    contested = {*parcel_ids.tolist(), *closed}
    if is_first:
        contested = _seen_in_same_pass(session, scene)
        # Nothing but this write decides about the pass of the others.
        alone = np.array([p not in contested for p in parcel_ids.tolist()], dtype=bool)
        _advance_latest(session, write, measured, scene, parcel_ids[alone], figures[alone])
        contested &= {*parcel_ids.tolist()}
    rebuild_latest(session, sorted(contested))
    return write


def _insert(
    session: Session, scene: Scene, write: Write, measured: Measured
) -> tuple[NDArray[np.int64], NDArray[np.float32]]:
    """Insert the observations in key order; return parcels and figures in that order."""
    order = np.argsort(np.asarray(measured.parcel_ids, dtype=np.int64))
    parcel_ids = np.asarray(measured.parcel_ids, dtype=np.int64)[order]
    figures = measured.figures[order]
    insert_observations(
        session,
        bucket=bucket_of(scene.acquired_at),
        acquired_at=scene.acquired_at,
        write_id=write.id,
        parcel_ids=parcel_ids,
        boundary_ids=np.asarray(measured.boundary_ids, dtype=np.int64)[order],
        figures=figures,
    )
    return parcel_ids, figures


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


def close_writes(session: Session, scene_id: int, *, at: datetime) -> None:
    """Close a scene's current writes: from now on they answer by `as_of` only."""
    closed = _current_writes(session, scene_id)
    if closed:
        parcel_ids = _close(session, closed, at=at)
        serialise(session, "latest")
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


def _seen_in_same_pass(session: Session, scene: Scene) -> set[int]:
    """Return the parcels that other scenes observed which can be of the same pass."""
    query = (
        select(Observation.parcel_id)
        .join(Write, Write.id == Observation.write_id)
        .join(Scene, Scene.id == Write.scene_id)
        .where(
            Scene.id != scene.id,
            Write.closed_at.is_(None),
            func.coalesce(Scene.platform, Scene.sensor) == (scene.platform or scene.sensor),
            Scene.acquired_at >= scene.acquired_at - PASS_GAP,
            Scene.acquired_at <= scene.acquired_at + PASS_GAP,
        )
    )
    return set(session.scalars(query))


def _advance_latest(
    session: Session,
    write: Write,
    measured: Measured,
    scene: Scene,
    parcel_ids: NDArray[np.int64],
    figures: NDArray[np.float32],
) -> None:
    """Put this write's looks where the newest ones stood, unless those are newer."""
    places = {column: place for place, column in enumerate(measured.columns)}
    rule, own_rules = measured.recipe["rule"], measured.recipe.get("rules", {})
    by_rule: dict[str, dict[str, int]] = {}
    for column, place in places.items():
        measure, _, stat = column.partition(".")
        if stat == "mean":
            by_rule.setdefault(own_rules.get(measure, rule), {})[measure] = place
    for each, means in by_rule.items():
        share_place = places[f"{each}.valid_share"]
        is_look = figures[:, share_place] >= np.float32(LOOK_SHARE)
        advance_latest(
            session,
            acquired_at=scene.acquired_at,
            write_id=write.id,
            parcel_ids=parcel_ids[is_look],
            figures=figures[is_look],
            places=means,
            share_place=share_place,
        )


def rebuild_latest(session: Session, parcel_ids: Sequence[int]) -> None:
    """Work out the newest looks of some parcels anew, from their observations."""
    for some in in_batches(parcel_ids):
        session.execute(
            delete(Latest)
            .where(Latest.parcel_id.in_(some))
            .execution_options(synchronize_session=False)
        )
        insert_latest(
            session,
            [
                (
                    measure,
                    parcel_id,
                    look.acquired_at,
                    look.write_id,
                    look.of_measure(measure, "mean"),
                    look.share_of(measure),
                )
                for parcel_id, looks in newest_looks(session, some)
                for measure, look in looks.items()
            ],
        )
