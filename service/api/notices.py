"""Regional notices: a shift that the crops of a region share."""

from collections.abc import Collection
from datetime import datetime
from typing import Annotated, Final

from fastapi import Query, Request, Response
from pydantic import BaseModel

from service.alerts.alert import CAUTION
from service.api.context import Ctx, Reader
from service.api.measures import split
from service.api.paging import Cursor, Limit, foreign_cursor, link_next, place_in
from service.api.routes import contract_router
from service.api.wire import InstantOut, QueryInstant, instant_from, joined, written
from service.errors import RejectedInput
from service.store.alert_tables import NoticeRow
from service.store.crops import parcels_by_crop
from service.store.notices import get_notice, held_back_by, list_notices, notice_not_found

router = contract_router("/notices", "alerts")
_STATES: Final = ("open", "closed", "retracted")


class NoticeOut(BaseModel):
    """A shift of a measure that the crops share; `shift` is the largest so far.

    `alerts_held_back` counts the alerts of parcels that it explains.
    """

    id: str
    kind: str
    state: str
    opened_at: InstantOut
    closed_at: InstantOut | None
    recorded_at: InstantOut
    season_start: str
    measure: str
    shift: float
    crops: list[str]
    alerts_held_back: int
    caution: str


class NoticesOut(BaseModel):
    """A page of notices, the last opened first."""

    notices: list[NoticeOut]


def _out(row: NoticeRow, crops: Collection[str] | None, held_back: int) -> NoticeOut:
    return NoticeOut(
        id=row.id,
        kind=row.kind,
        state=row.state,
        opened_at=row.opened_at,
        closed_at=row.closed_at,
        recorded_at=row.recorded_at,
        season_start=row.axis,
        measure=row.measure,
        shift=round(row.shift, 4),
        crops=[crop for crop in row.crops if crops is None or crop in crops],
        alerts_held_back=held_back,
        caution=CAUTION,
    )


@router.get("")
def get_notices(
    caller: Reader,
    context: Ctx,
    request: Request,
    response: Response,
    state: Annotated[list[str] | None, Query(description="States, comma-separated.")] = None,
    since: Annotated[QueryInstant | None, Query(description="Opened at or after.")] = None,
    limit: Limit = 100,
    cursor: Cursor = None,
) -> NoticesOut:
    """List regional notices. A key limited to holdings sees those of crops that they grow."""
    caller_sees_all = caller.holdings is None
    with context.sessions.reading() as session:
        crops = None if caller_sees_all else parcels_by_crop(session, holdings=caller.holdings)
        rows = list_notices(
            session, states=_states(state), since=since, after=_after(cursor), limit=limit + 1
        )
        page = [row for row in rows[:limit] if crops is None or set(crops) & set(row.crops)]
        held_back = held_back_by(session, [row.id for row in page])
    if len(rows) > limit:
        link_next(request, response, written(rows[limit - 1].opened_at), rows[limit - 1].id)
    return NoticesOut(notices=[_out(row, crops, held_back[row.id]) for row in page])


def _states(values: list[str] | None) -> list[str] | None:
    if values is None:
        return None
    named = split(values)
    if not set(named) <= set(_STATES):
        raise RejectedInput.parameter("state", f"States are {joined(_STATES)}.")
    return named


def _after(cursor: str | None) -> tuple[datetime, str] | None:
    place = place_in(cursor, str, str)
    if place is None:
        return None
    try:
        return instant_from(place[0]), place[1]
    except ValueError as error:
        raise foreign_cursor() from error


@router.get("/{notice_id}")
def get_one_notice(notice_id: str, caller: Reader, context: Ctx) -> NoticeOut:
    """Answer one notice."""
    with context.sessions.reading() as session:
        row = get_notice(session, notice_id)
        crops = None
        if caller.holdings is not None:
            crops = parcels_by_crop(session, holdings=caller.holdings)
            if not set(crops) & set(row.crops):
                raise notice_not_found()
        return _out(row, crops, held_back_by(session, [row.id])[row.id])
