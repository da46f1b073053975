"""Scenes: received, listed, retried, withdrawn; what became of them and of their parcels."""

from collections.abc import Collection, Iterable
from contextlib import ExitStack
from datetime import datetime
from itertools import islice
from typing import Annotated, Any, Literal
from urllib.parse import quote

from fastapi import Query, Request, Response, status
from pydantic import BaseModel
from sqlalchemy import select
from sqlalchemy.orm import Session
from starlette.concurrency import run_in_threadpool

from service.api.context import Caller, Context, Ctx, Ingester, Reader
from service.api.items import ItemReceived, faults_of_item
from service.api.once import Once, OnceOnly, json_answer
from service.api.paging import Cursor, Limit, foreign_cursor, link_next, place_in
from service.api.preferences import Wait, is_settled
from service.api.problems import problem_document, status_of
from service.api.routes import contract_router, takes
from service.api.scene_bodies import MEDIA_TYPES, SceneBody, fingerprint_of, ready, ref_of
from service.api.uploads import SceneReceived
from service.api.wire import InstantOut, QueryBox, QueryInstant, Text, instant_from, written
from service.clock import now
from service.errors import RejectedInput
from service.store.batches import in_batches
from service.store.judging import want_judging_of_scenes
from service.store.looks import observations_of_scene
from service.store.parcels import is_within
from service.store.reports import LOSSES, ParcelInScene, figures_of, parcel_in_scene, scene_counts
from service.store.scenes import (
    SceneState,
    get_scene,
    keep_scene,
    list_scenes,
    retry_scene,
    withdraw_scene,
)
from service.store.sensors import SENSOR_VERSION
from service.store.tables import Parcel, Scene

router = contract_router("/scenes", "scenes")


class FoundOut(BaseModel):
    """Which asset of a STAC Item a part is, and what told it."""

    part: str
    asset: str
    by: str


class SceneOut(BaseModel):
    """A scene, how far it has come, and what was measured."""

    ref: str
    kind: str
    sensor: str
    sensor_version: int | None
    platform: str | None
    tile: str | None
    acquired_at: InstantOut
    processing_baseline: str | None
    state: SceneState
    progress: float
    generation: int
    received_at: InstantOut
    changed_at: InstantOut
    supersedes: str | None
    failure: dict[str, Any] | None
    parcels_in_footprint: int | None
    parcels_measured: int | None
    parcels_unseen: dict[str, int] | None
    parcels_small: int | None
    alerts_opened: int | None
    indices: dict[str, Any] | None
    seconds: dict[str, float] | None

    found: list[FoundOut] | None


class ScenesOut(BaseModel):
    """A page of scenes, newest acquisition first."""

    scenes: list[SceneOut]


class SceneParcelOut(BaseModel):
    """One parcel in one scene; shares are of the whole parcel, null without a quality layer."""

    parcel: str
    state: Literal["measured", "unseen"]
    reason: str | None
    is_small: bool
    pixels: float
    valid_share: float
    cloud: float | None
    shadow: float | None
    snow: float | None
    nodata: float
    saturation: float
    water: float | None


class SceneParcelsOut(BaseModel):
    """A page of the parcels in a scene."""

    parcels: list[SceneParcelOut]


def _out(session: Session, row: Scene, caller: Caller) -> SceneOut:
    report = dict(row.report or {})
    if caller.holdings is not None and report:
        # Counts of all parcels would tell of those that the key may not see.
        own = _within(session, row, caller.holdings)
        report |= scene_counts(figures_of(parcel.observed for parcel in own))
    replaced = session.get(Scene, row.supersedes_id) if row.supersedes_id else None
    return SceneOut(
        ref=row.ref,
        kind=row.kind,
        sensor=row.sensor,
        sensor_version=row.details.get(SENSOR_VERSION),
        platform=row.platform,
        tile=row.tile,
        acquired_at=row.acquired_at,
        processing_baseline=row.processing_baseline,
        state=SceneState(row.state),
        progress=row.progress,
        generation=row.generation,
        received_at=row.received_at,
        changed_at=row.changed_at,
        supersedes=replaced.ref if replaced else None,
        failure=_failure(row),
        found=row.found,
        **{name: report.get(name) for name in _REPORT},
    )


_REPORT = (
    "parcels_in_footprint",
    "parcels_measured",
    "parcels_unseen",
    "parcels_small",
    "alerts_opened",
    "indices",
    "seconds",
)


def _failure(row: Scene) -> dict[str, Any] | None:
    """Return the problem document that the POST would have got, had the headers shown it."""
    if row.failure is None:
        return None
    code, errors = row.failure["code"], row.failure["errors"]
    return problem_document(
        code,
        row.failure["detail"],
        status=status_of(code, RejectedInput),
        instance=_address(row),
        errors=errors if row.found is None else faults_of_item(errors, row.found, row.details),
    )


def _address(row: Scene) -> str:
    return f"/v1/scenes/{quote(row.ref, safe='')}"


@router.post("", status_code=202, response_model=SceneOut, openapi_extra=takes(*MEDIA_TYPES))
async def receive_scene(
    caller: Ingester, received: SceneBody, context: Ctx, once: OnceOnly, wait: Wait
) -> Response:
    """Keep a scene, sent as parts or as a STAC Item, and promise its ingest.

    The row in state `queued` is the promise: it commits before the answer, and the sweep
    enqueues it should this process die before the next line. The same content sent again
    answers 200 with the scene that is there.
    """
    ref, answer = await run_in_threadpool(_keep, received, caller, context, once)
    return await _held(ref, answer, caller, context, wait)


def _keep(
    received: SceneReceived | ItemReceived, caller: Caller, context: Context, once: Once
) -> tuple[str, Response]:
    caller.must_see_all("a scene")
    at = now()
    if (known := fingerprint_of(received)) is not None:
        # A retry of the same Item fetches nothing.
        with context.sessions.writing() as session:
            if (first := once.replay(session, caller, known)) is not None:
                return ref_of(received), first
    with ExitStack() as stack:
        sent = ready(received, context, stack, at=at)
    fingerprint = known or f"{sent.ref}\n{sent.digest}\n{sent.replace}"
    with context.sessions.writing() as session:
        if (first := once.replay(session, caller, fingerprint)) is not None:
            return sent.ref, first
        row, is_promised = keep_scene(session, sent, at=at)
        made = json_answer(
            _out(session, row, caller), 202 if is_promised else 200, Location=_address(row)
        )
        answer = once.keep(session, caller, fingerprint, made)
        promised = (row.id, row.generation)
    if is_promised:
        context.promise(*promised)
    return sent.ref, answer


async def _held(
    ref: str, answer: Response, caller: Caller, context: Context, seconds: float
) -> Response:
    """Hold a promise's answer while the caller waits for the work; 200 once it is done."""
    if answer.status_code != status.HTTP_202_ACCEPTED or not seconds:
        return answer
    if not await is_settled(context, ref, seconds):
        return answer
    made = await run_in_threadpool(_read, ref, caller, context)
    return json_answer(made, Location=answer.headers["Location"])


def _read(ref: str, caller: Caller, context: Context) -> SceneOut:
    with context.sessions.reading() as session:
        return _out(session, get_scene(session, ref), caller)


@router.get("")
def get_scenes(
    caller: Reader,
    context: Ctx,
    request: Request,
    response: Response,
    since: Annotated[QueryInstant | None, Query(alias="from")] = None,
    until: Annotated[QueryInstant | None, Query(alias="to")] = None,
    sensor: Annotated[Text | None, Query()] = None,
    state: Annotated[SceneState | None, Query()] = None,
    bbox: Annotated[QueryBox, Query(description="west,south,east,north in degrees.")] = None,
    limit: Limit = 100,
    cursor: Cursor = None,
) -> ScenesOut:
    """List scenes, newest acquisition first."""
    with context.sessions.reading() as session:
        rows = list_scenes(
            session,
            since=since,
            until=until,
            sensor=sensor,
            state=state,
            box=bbox,
            after=_after(cursor),
            limit=limit + 1,
        )
        page = [_out(session, row, caller) for row in rows[:limit]]
    if len(rows) > limit:
        link_next(request, response, written(rows[limit - 1].acquired_at), rows[limit - 1].id)
    return ScenesOut(scenes=page)


def _after(cursor: str | None) -> tuple[datetime, int] | None:
    place = place_in(cursor, str, int)
    if place is None:
        return None
    try:
        return instant_from(place[0]), place[1]
    except ValueError as error:
        raise foreign_cursor() from error


@router.get("/{ref}")
async def get_one_scene(ref: str, caller: Reader, context: Ctx, wait: Wait) -> SceneOut:
    """Answer a scene: its state, and the report once it is measured."""
    if wait:
        await is_settled(context, ref, wait)
    return await run_in_threadpool(_read, ref, caller, context)


@router.get("/{ref}/parcels")
def get_scene_parcels(
    ref: str,
    caller: Reader,
    context: Ctx,
    request: Request,
    response: Response,
    state: Annotated[Literal["measured", "unseen"] | None, Query()] = None,
    limit: Limit = 100,
    cursor: Cursor = None,
) -> SceneParcelsOut:
    """List the parcels in a scene: what was usable of each, and what was lost to what."""
    place = place_in(cursor, int)
    with context.sessions.reading() as session:
        parcels = _within(session, get_scene(session, ref), caller.holdings)
        wanted = (
            parcel
            for parcel in parcels
            if state in (None, _state(parcel))
            and (place is None or parcel.observed.parcel_id > place[0])
        )
        page = list(islice(wanted, limit + 1))
        refs = _refs(session, [parcel.observed.parcel_id for parcel in page])
    if len(page) > limit:
        link_next(request, response, page[limit - 1].observed.parcel_id)
    return SceneParcelsOut(
        parcels=[_parcel_out(parcel, refs[parcel.observed.parcel_id]) for parcel in page[:limit]]
    )


def _within(session: Session, row: Scene, holdings: Collection[str] | None) -> list[ParcelInScene]:
    parcels = [parcel_in_scene(observed) for observed in observations_of_scene(session, row.id)]
    if holdings is None:
        return parcels
    ids = [parcel.observed.parcel_id for parcel in parcels]
    visible = {
        found.id
        for some in in_batches(ids)
        for found in session.scalars(select(Parcel).where(Parcel.id.in_(some)))
        if is_within(found, holdings)
    }
    return [parcel for parcel in parcels if parcel.observed.parcel_id in visible]


def _refs(session: Session, parcel_ids: Iterable[int]) -> dict[int, str]:
    query = select(Parcel.id, Parcel.ref).where(Parcel.id.in_(list(parcel_ids)))
    return dict(session.execute(query).all())


def _state(parcel: ParcelInScene) -> Literal["measured", "unseen"]:
    return "measured" if parcel.is_look else "unseen"


def _parcel_out(parcel: ParcelInScene, ref: str) -> SceneParcelOut:
    figures = ("pixels", "valid_share", *LOSSES, "water")
    rule = parcel.observed.places.rule
    return SceneParcelOut(
        parcel=ref,
        state=_state(parcel),
        reason=parcel.reason,
        is_small=parcel.is_small,
        **{figure: parcel.observed.figure(f"{rule}.{figure}") for figure in figures},
    )


@router.post("/{ref}/retry", status_code=202, response_model=SceneOut)
async def retry_one_scene(
    ref: str, caller: Ingester, context: Ctx, once: OnceOnly, wait: Wait
) -> Response:
    """Run a failed scene again."""
    answer = await run_in_threadpool(_retry, ref, caller, context, once)
    return await _held(ref, answer, caller, context, wait)


def _retry(ref: str, caller: Caller, context: Context, once: Once) -> Response:
    caller.must_see_all("a scene")
    with context.sessions.writing() as session:
        if (first := once.replay(session, caller, ref)) is not None:
            return first
        row = retry_scene(session, ref, at=now())
        made = json_answer(_out(session, row, caller), 202, Location=_address(row))
        answer = once.keep(session, caller, ref, made)
        promised = (row.id, row.generation)
    context.promise(*promised)
    return answer


@router.delete("/{ref}")
def withdraw_one_scene(ref: str, caller: Ingester, context: Ctx) -> SceneOut:
    """Withdraw a scene and what was measured from it; the figures stay queryable by `as_of`."""
    caller.must_see_all("a scene")
    with context.sessions.writing() as session:
        row = withdraw_scene(session, ref, at=now())
        want_judging_of_scenes(session, [row], context.settings.season_starts)
        told = _out(session, row, caller)
    context.promise_judging()
    return told
