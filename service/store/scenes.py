"""Scenes: what was sent, in which state its ingest is, what replaces what."""

import hashlib
import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from enum import StrEnum
from typing import Any, Final

from sqlalchemy import and_, or_, select
from sqlalchemy.orm import Session

from service.errors import Conflict, NotFound
from service.store.looks import PASS_GAP
from service.store.observations import close_writes
from service.store.parcels import Box
from service.store.sensors import SENSOR_VERSION
from service.store.sessions import serialise
from service.store.tables import Boundary, GridRow, Observation, Scene, SceneFile, Write
from service.zonal.grid import Grid


class SceneState(StrEnum):
    """How far a scene has come."""

    QUEUED = "queued"
    RUNNING = "running"
    DONE = "done"
    FAILED = "failed"
    SUPERSEDED = "superseded"
    WITHDRAWN = "withdrawn"


_LIVE: Final = (SceneState.QUEUED, SceneState.RUNNING, SceneState.DONE)
_GONE: Final = (SceneState.SUPERSEDED, SceneState.WITHDRAWN)


@dataclass(frozen=True, slots=True, kw_only=True)
class FileSent:
    """A file of a scene, already in the archive."""

    part: str
    digest: str
    size: int


@dataclass(frozen=True, slots=True, kw_only=True)
class SceneSent:
    """A scene as sent: checked, hashed, its files kept.

    `found` says how each part was found, for a scene that did not come as parts.
    """

    ref: str
    sensor: str
    platform: str | None
    tile: str | None
    acquired_at: datetime
    processing_baseline: str | None
    details: Mapping[str, Any]
    digest: str
    grid: Grid
    footprint: Box
    files: Sequence[FileSent]
    replace: bool
    found: Sequence[Mapping[str, str]] | None = None


def get_scene(session: Session, ref: str) -> Scene:
    """Return the scene with this ref.

    Raises
    ------
    NotFound
        There is none.
    """
    row = session.scalar(select(Scene).where(Scene.ref == ref))
    if row is None:
        raise NotFound("scene-not-found", "There is no scene with this ref.")
    return row


def lock_scene(session: Session, scene_id: int) -> Scene:
    """Return a scene's row, held against other writers until the transaction ends."""
    row = session.get(Scene, scene_id, with_for_update={"of": Scene}, populate_existing=True)
    if row is None:
        raise NotFound("scene-not-found", "There is no scene with this id.")
    return row


def keep_scene(session: Session, sent: SceneSent, *, at: datetime) -> tuple[Scene, bool]:
    """Keep a scene and promise its ingest; return its row and whether work was promised.

    The same ref and content again promises nothing, unless the first try failed or was
    withdrawn, or `replace` is said and the sensor's profile has a newer version by now; it is
    read by that version then. Other content under the same ref, or another ref for the same
    tile and pass, needs `replace`; its figures then supersede the old ones in one step, once
    measured.

    Raises
    ------
    Conflict
        The content is there under another ref, or something has to be replaced and
        `replace` was not said.
    """
    serialise(session, "scenes")
    row = session.scalar(select(Scene).where(Scene.ref == sent.ref))
    if row is not None and row.digest == sent.digest and row.state in (*_LIVE, SceneState.FAILED):
        if row.state == SceneState.FAILED or (sent.replace and _is_outdated(row, sent)):
            row.details = dict(sent.details)
            _requeue(session, row, at=at)
            return row, True
        return row, False
    _refuse_known_content(session, sent)
    rival = find_rival(session, sent)
    if not sent.replace and (rival is not None or _differs(row, sent)):
        raise _must_replace(rival)
    row = _written(session, row, sent, at=at)
    row.supersedes_id = rival.id if rival else None
    session.flush()
    return row, True


def _differs(row: Scene | None, sent: SceneSent) -> bool:
    """Whether the ref stands for something else: other content, or one that was superseded."""
    if row is None:
        return False
    return row.digest != sent.digest or row.state == SceneState.SUPERSEDED


def _is_outdated(row: Scene, sent: SceneSent) -> bool:
    """Whether the sensor's profile has another version than when the scene was received."""
    return row.details.get(SENSOR_VERSION) != sent.details.get(SENSOR_VERSION)


def _must_replace(rival: Scene | None) -> Conflict:
    if rival is None:
        return Conflict(
            "scene-exists",
            'Another content is kept under this ref. Send it with "replace": true if it is a '
            "corrected or reprocessed product; the old figures stay queryable by as_of.",
        )
    return Conflict(
        "tile-pass-taken",
        f"This tile was already sent for this pass as {rival.ref}. Send it with "
        '"replace": true if this scene supersedes that one.',
    )


def _refuse_known_content(session: Session, sent: SceneSent) -> None:
    known = session.scalar(
        select(Scene).where(
            Scene.digest == sent.digest, Scene.ref != sent.ref, Scene.state.not_in(_GONE)
        )
    )
    if known is not None:
        raise Conflict(
            "content-known",
            f"The same files and metadata are already there as {known.ref}; a scene is kept "
            "under one ref only.",
        )


def find_rival(session: Session, sent: SceneSent | Scene) -> Scene | None:
    """Return the live scene of the same tile and pass under another ref, if there is one."""
    if sent.tile is None:
        return None
    return session.scalar(
        select(Scene)
        .where(
            Scene.ref != sent.ref,
            Scene.sensor == sent.sensor,
            Scene.platform.is_not_distinct_from(sent.platform),
            Scene.tile == sent.tile,
            Scene.state.in_(_LIVE),
            Scene.acquired_at >= sent.acquired_at - PASS_GAP,
            Scene.acquired_at <= sent.acquired_at + PASS_GAP,
        )
        .order_by(Scene.id.desc())
        .limit(1)
    )


def _written(session: Session, row: Scene | None, sent: SceneSent, *, at: datetime) -> Scene:
    """Write what was sent into its row, new or not, and promise the ingest."""
    grid = _grid_row(session, sent.grid, sent.footprint)
    if row is None:
        row = Scene(ref=sent.ref, kind="measured", is_judged=True, generation=0, received_at=at)
    row.sensor, row.platform, row.tile = sent.sensor, sent.platform, sent.tile
    row.acquired_at, row.processing_baseline = sent.acquired_at, sent.processing_baseline
    row.details, row.digest, row.grid = dict(sent.details), sent.digest, grid
    row.found = None if sent.found is None else [dict(one) for one in sent.found]
    kept = {file.part: file for file in row.files}
    row.files = [
        _file_row(kept.get(file.part), file) for file in sorted(sent.files, key=lambda f: f.part)
    ]
    _promise(row, at=at)
    session.add(row)
    session.flush()
    return row


def _file_row(row: SceneFile | None, file: FileSent) -> SceneFile:
    row = row or SceneFile(part=file.part)
    row.digest, row.size = file.digest, file.size
    return row


def _grid_row(session: Session, grid: Grid, footprint: Box) -> GridRow:
    transform = [float(number) for number in grid.transform[:6]]
    digest = hashlib.sha256(json.dumps([grid.crs, transform, grid.shape]).encode()).hexdigest()
    row = session.scalar(select(GridRow).where(GridRow.digest == digest))
    if row is None:
        west, south, east, north = footprint
        row = GridRow(
            digest=digest,
            crs=grid.crs,
            transform=transform,
            rows=grid.shape[0],
            cols=grid.shape[1],
            west=west,
            south=south,
            east=east,
            north=north,
        )
        session.add(row)
    return row


def _requeue(session: Session, row: Scene, *, at: datetime) -> None:
    _promise(row, at=at)
    session.flush()


def _promise(row: Scene, *, at: datetime) -> None:
    row.generation += 1
    row.state = SceneState.QUEUED
    row.progress = 0.0
    row.failure = None
    row.changed_at = at


def retry_scene(session: Session, ref: str, *, at: datetime) -> Scene:
    """Promise another try of a failed scene.

    Raises
    ------
    Conflict
        The scene has not failed, or another scene took its tile and pass since.
    """
    serialise(session, "scenes")
    row = get_scene(session, ref)
    if row.state != SceneState.FAILED:
        raise Conflict(
            "not-failed", f"Only a failed scene is tried again; this one is {row.state}."
        )
    rival = find_rival(session, row)
    if rival is not None and rival.id != row.supersedes_id:
        raise _must_replace(rival)
    _requeue(session, row, at=at)
    return row


def withdraw_scene(session: Session, ref: str, *, at: datetime) -> Scene:
    """Withdraw a scene and what was measured from it; doing so again changes nothing."""
    serialise(session, "scenes")
    row = get_scene(session, ref)
    if row.state not in _GONE:
        retire_figures(session, row, SceneState.WITHDRAWN, at=at)
    return row


def retire_figures(session: Session, row: Scene, state: SceneState, *, at: datetime) -> None:
    """End a scene's life as superseded or withdrawn: its figures answer by `as_of` only.

    The raised generation makes a step still at work on the scene leave it alone.
    """
    row.state = state
    row.generation += 1
    row.changed_at = at
    session.flush()
    close_writes(session, row.id, at=at)


def remeasure(session: Session, boundaries: Sequence[Boundary], *, at: datetime) -> list[Scene]:
    """Promise that the looks which new boundary versions touch are measured again."""
    touched: dict[int, Scene] = {}
    for boundary in boundaries:
        measured = (
            select(Write.scene_id)
            .join(Observation, Observation.write_id == Write.id)
            .where(Observation.parcel_id == boundary.parcel_id, Write.closed_at.is_(None))
        )
        conditions = [Scene.kind == "measured", Scene.state.in_((*_LIVE, SceneState.FAILED))]
        if boundary.valid_from is not None:
            conditions.append(Scene.acquired_at >= boundary.valid_from)
        if boundary.valid_to is not None:
            conditions.append(Scene.acquired_at < boundary.valid_to)
        query = select(Scene).outerjoin(Scene.grid).where(*conditions)
        query = query.where(or_(Scene.id.in_(measured), footprint_meets(boundary_box(boundary))))
        touched |= {scene.id: scene for scene in session.scalars(query)}
    for scene in touched.values():
        if scene.state != SceneState.FAILED:
            _requeue(session, scene, at=at)
    return list(touched.values())


def boundary_box(boundary: Boundary) -> Box:
    """Return a boundary's box."""
    return boundary.west, boundary.south, boundary.east, boundary.north


def footprint_meets(box: Box) -> Any:
    """Return the condition that a scene's footprint meets a box."""
    west, south, east, north = box
    across = and_(GridRow.west <= east, GridRow.east >= west)
    wrapped = and_(GridRow.west > GridRow.east, or_(GridRow.west <= east, GridRow.east >= west))
    if west > east:
        across = or_(GridRow.west <= east, GridRow.east >= west)
    return and_(or_(across, wrapped), GridRow.south <= north, GridRow.north >= south)


def list_scenes(
    session: Session,
    *,
    since: datetime | None = None,
    until: datetime | None = None,
    sensor: str | None = None,
    state: str | None = None,
    box: Box | None = None,
    after: tuple[datetime, int] | None = None,
    limit: int,
) -> Sequence[Scene]:
    """List scenes from the newest acquisition back; `since` is included, `until` is not."""
    query = select(Scene).outerjoin(Scene.grid)
    if since is not None:
        query = query.where(Scene.acquired_at >= since)
    if until is not None:
        query = query.where(Scene.acquired_at < until)
    if sensor is not None:
        query = query.where(Scene.sensor == sensor)
    if state is not None:
        query = query.where(Scene.state == state)
    if box is not None:
        query = query.where(footprint_meets(box))
    if after is not None:
        acquired_at, scene_id = after
        query = query.where(
            or_(
                Scene.acquired_at < acquired_at,
                and_(Scene.acquired_at == acquired_at, Scene.id < scene_id),
            )
        )
    return session.scalars(
        query.order_by(Scene.acquired_at.desc(), Scene.id.desc()).limit(limit)
    ).all()


def unfinished_scenes(session: Session) -> Sequence[Scene]:
    """Return the scenes that are promised or at work, oldest promise first."""
    query = select(Scene).where(Scene.state.in_((SceneState.QUEUED, SceneState.RUNNING)))
    return session.scalars(query.order_by(Scene.changed_at, Scene.id)).all()


def put_back(session: Session, row: Scene, *, at: datetime) -> None:
    """Promise a scene anew whose workflow ended without saying so."""
    _requeue(session, row, at=at)


def kept_digests(session: Session) -> set[str]:
    """Return the digests of all files that a scene still needs."""
    return set(session.scalars(select(SceneFile.digest).distinct()))
