"""The diary of a parcel: known events that explain what is seen."""

from datetime import date, datetime, timedelta
from typing import Annotated, Final

from fastapi import Request, Response
from pydantic import BaseModel, Field

from service.alerts.diary import DiaryKind
from service.api.context import Ctx, Reader, Triager
from service.api.once import OnceOnly, json_answer
from service.api.paging import Cursor, Limit, foreign_cursor, link_next, place_in
from service.api.routes import contract_router
from service.api.wire import Day, InstantOut, Sent
from service.clock import now
from service.errors import RejectedInput
from service.store.alert_tables import DiaryRow
from service.store.diary import add_entry, get_entry, list_entries, remove_entry
from service.store.judging import want_judging_of_diary
from service.store.notices import explained_on
from service.store.parcels import get_parcel
from service.store.sessions import serialise

router = contract_router("/parcels", "alerts")
_FIRST_DAY: Final = date(1972, 1, 1)
_LONGEST: Final = timedelta(days=366)
_AHEAD: Final = timedelta(days=366)


class EntrySent(Sent):
    """Something that happened, or is going to, on a day or from one day until another."""

    kind: DiaryKind
    on: Day
    until: Day | None = None
    note: Annotated[str, Field(min_length=1, max_length=2000)] | None = None


class EntryOut(BaseModel):
    """An entry, both days included, and who wrote it."""

    id: str
    kind: DiaryKind
    on: date
    until: date
    note: str | None
    who: str
    recorded_at: InstantOut


class ExplainedOut(BaseModel):
    """A departure that opened no alert: the likely cause, and what explains it."""

    rule: str
    departed_at: InstantOut
    cause: str
    because: str


class DiaryOut(BaseModel):
    """A page of a parcel's diary, and all departures of it that something explains."""

    diary: list[EntryOut]
    explained: list[ExplainedOut]


def _out(row: DiaryRow) -> EntryOut:
    return EntryOut(
        id=row.public_id,
        kind=DiaryKind(row.kind),
        on=row.first_on,
        until=row.last_on,
        note=row.note,
        who=row.who,
        recorded_at=row.recorded_at,
    )


@router.post("/{ref}/diary", status_code=201, response_model=EntryOut)
def post_entry(
    ref: str, sent: EntrySent, caller: Triager, context: Ctx, once: OnceOnly
) -> Response:
    """Write down what happened. What is judged already is judged anew with it.

    A departure that an entry explains raises no alert; an alert that stands then becomes
    `retracted`. An entry that does not explain an alert is named in it, under `diary`.
    """
    at = now()
    last = _checked(sent, at)
    fingerprint = sent.model_dump_json()
    with context.sessions.writing() as session:
        if (first := once.replay(session, caller, fingerprint)) is not None:
            return first
        serialise(session, "judging")
        parcel = get_parcel(session, ref, holdings=caller.holdings)
        row = add_entry(
            session,
            parcel,
            kind=sent.kind.value,
            first_on=sent.on,
            last_on=last,
            note=sent.note,
            who=caller.label,
            at=at,
        )
        want_judging_of_diary(session, parcel, sent.on, context.settings.season_starts)
        answer = once.keep(session, caller, fingerprint, json_answer(_out(row), 201))
    context.promise_judging()
    return answer


def _checked(sent: EntrySent, at: datetime) -> date:
    """Return the last day of an entry, which must be one that can have happened."""
    last = sent.until or sent.on
    if last < sent.on:
        raise RejectedInput.at("/until", "The last day is before the first one.")
    if last - sent.on > _LONGEST:
        raise RejectedInput.at("/until", "An entry is of a year at most; send several.")
    if not _FIRST_DAY <= sent.on <= (at + _AHEAD).date():
        raise RejectedInput.at("/on", "Send a day from 1972 on, at most a year ahead.")
    return last


@router.get("/{ref}/diary")
def get_diary(
    ref: str,
    caller: Reader,
    context: Ctx,
    request: Request,
    response: Response,
    limit: Limit = 100,
    cursor: Cursor = None,
) -> DiaryOut:
    """List what people wrote down of a parcel, and which departures something explains."""
    with context.sessions.reading() as session:
        parcel = get_parcel(session, ref, holdings=caller.holdings)
        rows = list_entries(session, parcel, after=_after(cursor), limit=limit + 1)
        explained = [
            ExplainedOut(
                rule=row.rule,
                departed_at=row.departed_at,
                cause=row.cause,
                because=row.because,
            )
            for row in explained_on(session, parcel)
        ]
    if len(rows) > limit:
        last = rows[limit - 1]
        link_next(request, response, last.first_on.isoformat(), last.id)
    return DiaryOut(diary=[_out(row) for row in rows[:limit]], explained=explained)


def _after(cursor: str | None) -> tuple[date, int] | None:
    place = place_in(cursor, str, int)
    if place is None:
        return None
    try:
        return date.fromisoformat(place[0]), place[1]
    except ValueError as error:
        raise foreign_cursor() from error


@router.delete("/{ref}/diary/{entry_id}")
def delete_entry(ref: str, entry_id: str, caller: Triager, context: Ctx) -> EntryOut:
    """Strike an entry out; what is judged already is judged anew without it."""
    with context.sessions.writing() as session:
        serialise(session, "judging")
        parcel = get_parcel(session, ref, holdings=caller.holdings)
        row = get_entry(session, parcel, entry_id)
        gone = _out(row)
        remove_entry(session, row)
        want_judging_of_diary(session, parcel, gone.on, context.settings.season_starts)
    context.promise_judging()
    return gone
