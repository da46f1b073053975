"""Alerts: listed for triage, acknowledged, closed with a verdict, reopened."""

from datetime import datetime
from typing import Annotated, Any, Literal

from fastapi import Header, Query, Request, Response
from pydantic import BaseModel, Field

from service.alerts.actions import ActionKind
from service.api.context import Caller, Context, Ctx, Reader, Triager
from service.api.measures import split
from service.api.once import Once, OnceOnly, json_answer
from service.api.paging import Cursor, Limit, foreign_cursor, link_next, place_in
from service.api.routes import contract_router
from service.api.wire import InstantOut, QueryInstant, Ref, Sent, instant_from, written
from service.clock import now
from service.errors import Conflict, RejectedInput
from service.jobs.announce import announce_alert
from service.store.alert_tables import AlertChange, AlertRow
from service.store.alerts import act_on, document_of, get_alert, history_of, list_alerts
from service.store.judging import want_judging_of
from service.store.sessions import serialise

router = contract_router("/alerts", "alerts")
States = ("open", "acknowledged", "closed", "retracted")
Severity = Literal["low", "medium", "high"]


class CauseOut(BaseModel):
    """The likely cause, its evidence, and the next candidates."""

    kind: str
    because: str
    others: list[str]


class ChangeOut(BaseModel):
    """Something that happened to an alert; `who` is null where judging did it."""

    kind: str
    look_at: InstantOut
    recorded_at: InstantOut
    who: str | None
    verdict: str | None
    note: str | None
    what: dict[str, Any]


class AlertOut(BaseModel):
    """A parcel's departure from its baseline.

    `chance` is the odds that it is a false one, null without a past to tell; `p` how rare a
    look as far out as its worst one was in the past; `baseline` the version it was judged by;
    `diary` what was written down for its time without explaining it.
    """

    id: str
    state: str
    parcel: str
    holding: str | None
    crop: str
    rule: str
    opened_at: str
    closed_at: str | None
    first_departure_at: str
    last_observed_at: str
    recorded_at: str
    index: str
    direction: str
    observed: float
    expected: float
    shortfall: float
    departure: float
    departures: dict[str, float]
    score: float
    severity: str
    chance: float | None
    p: float | None
    cause: CauseOut
    looks: int
    scenes: list[str]
    diary: list[str]
    basis: str
    baseline: str
    is_new_crop: bool
    is_weak: bool
    low_power: bool
    closed_by: str | None
    verdict: str | None
    revision: int
    caution: str


class AlertWithHistory(AlertOut):
    """An alert with everything that happened to it."""

    history: list[ChangeOut]


class AlertsOut(BaseModel):
    """A page of alerts, the last opened first."""

    alerts: list[AlertOut]


class Remark(Sent):
    """What a person wants to note."""

    note: Annotated[str, Field(min_length=1, max_length=2000)] | None = None


class Closing(Remark):
    """A person's verdict: what the alert was."""

    verdict: Literal["confirmed", "expected", "false_alarm", "bad_data"]


IfMatch = Annotated[
    str | None, Header(description="The alert's entity tag, so that nobody is overwritten.")
]


@router.get("")
def get_alerts(
    caller: Reader,
    context: Ctx,
    request: Request,
    response: Response,
    state: Annotated[list[str] | None, Query(description="States, comma-separated.")] = None,
    severity: Annotated[Severity | None, Query()] = None,
    holding: Annotated[Ref | None, Query()] = None,
    parcel: Annotated[Ref | None, Query()] = None,
    since: Annotated[QueryInstant | None, Query(description="Opened at or after.")] = None,
    index: Annotated[str | None, Query(description="The measure with the largest score.")] = None,
    cause: Annotated[str | None, Query(description="Kind of the likely cause.")] = None,
    limit: Limit = 100,
    cursor: Cursor = None,
) -> AlertsOut:
    """List alerts, the last opened first."""
    with context.sessions.reading() as session:
        rows = list_alerts(
            session,
            holdings=caller.holdings,
            states=_states(state),
            severity=severity,
            holding=holding,
            parcel=parcel,
            since=since,
            measure=index,
            cause=cause,
            after=_after(cursor),
            limit=limit + 1,
        )
        page = [AlertOut(**document_of(row)) for row in rows[:limit]]
    if len(rows) > limit:
        link_next(request, response, written(rows[limit - 1].opened_at), rows[limit - 1].id)
    return AlertsOut(alerts=page)


def _states(values: list[str] | None) -> list[str] | None:
    if values is None:
        return None
    named = split(values)
    if not set(named) <= set(States):
        raise RejectedInput.parameter("state", f"States are {', '.join(States)}.")
    return named


def _after(cursor: str | None) -> tuple[datetime, str] | None:
    place = place_in(cursor, str, str)
    if place is None:
        return None
    try:
        return instant_from(place[0]), place[1]
    except ValueError as error:
        raise foreign_cursor() from error


@router.get("/{alert_id}", response_model=AlertWithHistory)
def get_one_alert(alert_id: str, caller: Reader, context: Ctx) -> Response:
    """Answer an alert with its history; its entity tag is for `If-Match`."""
    with context.sessions.reading() as session:
        row = get_alert(session, alert_id, holdings=caller.holdings)
        changes = [_change_out(change) for change in history_of(session, alert_id)]
        told = AlertWithHistory(**document_of(row), history=changes)
        return json_answer(told, ETag=_tag(row))


def _change_out(change: AlertChange) -> ChangeOut:
    return ChangeOut(
        kind=change.kind,
        look_at=change.look_at,
        recorded_at=change.recorded_at,
        who=change.who,
        verdict=change.verdict,
        note=change.note,
        what=change.what,
    )


def _tag(row: AlertRow) -> str:
    return f'"{row.id}-{row.revision}"'


@router.post("/{alert_id}/acknowledge", response_model=AlertOut)
def acknowledge_alert(
    alert_id: str,
    caller: Triager,
    context: Ctx,
    once: OnceOnly,
    remark: Remark | None = None,
    if_match: IfMatch = None,
) -> Response:
    """Say that somebody is looking into it."""
    note = remark.note if remark else None
    return _act(alert_id, ActionKind.ACKNOWLEDGE, caller, context, once, if_match, note=note)


@router.post("/{alert_id}/close", response_model=AlertOut)
def close_alert(
    alert_id: str,
    closing: Closing,
    caller: Triager,
    context: Ctx,
    once: OnceOnly,
    if_match: IfMatch = None,
) -> Response:
    """Close an alert with a verdict; the parcel stays quiet until it has returned."""
    return _act(
        alert_id,
        ActionKind.CLOSE,
        caller,
        context,
        once,
        if_match,
        note=closing.note,
        verdict=closing.verdict,
    )


@router.post("/{alert_id}/reopen", response_model=AlertOut)
def reopen_alert(
    alert_id: str,
    caller: Triager,
    context: Ctx,
    once: OnceOnly,
    remark: Remark | None = None,
    if_match: IfMatch = None,
) -> Response:
    """Take a closing back."""
    note = remark.note if remark else None
    return _act(alert_id, ActionKind.REOPEN, caller, context, once, if_match, note=note)


def _act(
    alert_id: str,
    kind: ActionKind,
    caller: Caller,
    context: Context,
    once: Once,
    if_match: str | None,
    *,
    note: str | None,
    verdict: str | None = None,
) -> Response:
    """Do what a person says, unless somebody else has changed the alert since."""
    at = now()
    fingerprint = f"{alert_id}\n{kind}\n{verdict}\n{note}"
    with context.sessions.writing() as session:
        if (first := once.replay(session, caller, fingerprint)) is not None:
            return first
        serialise(session, "judging")
        row = get_alert(session, alert_id, holdings=caller.holdings)
        session.refresh(row, with_for_update={"of": AlertRow})
        _check_match(row, if_match)
        happened = act_on(session, row, kind, who=caller.label, verdict=verdict, note=note, at=at)
        want_judging_of(session, row)
        promises = announce_alert(session, context.settings, happened, at=at)
        made = json_answer(AlertOut(**document_of(row)), ETag=_tag(row))
        answer = once.keep(session, caller, fingerprint, made)
    context.promise_deliveries(promises)
    context.promise_judging()
    return answer


def _check_match(row: AlertRow, if_match: str | None) -> None:
    if if_match is None:
        raise Conflict(
            "precondition-required",
            "Send `If-Match` with the alert's entity tag, as its GET answers it, so that two "
            "people do not overwrite each other.",
        )
    if if_match.strip() != "*" and _tag(row) not in [tag.strip() for tag in if_match.split(",")]:
        raise Conflict(
            "precondition-failed",
            "The alert has changed since you looked at it. Get it again, then decide.",
        )
