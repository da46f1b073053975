"""Rehearsal: what a rule would have raised over past data, without raising it."""

import hashlib
import json
from datetime import datetime
from typing import Annotated, Any

from fastapi import Request, Response
from pydantic import BaseModel, Field, WithJsonSchema
from starlette.concurrency import run_in_threadpool

from service.alerts.rules import Rule
from service.api.batches import model_of
from service.api.context import Caller, Context, Ctx, Steward
from service.api.jobs import JobOut, address_of, job_out
from service.api.once import Once, OnceOnly, json_answer
from service.api.preferences import Wait, is_finished, preferences_of
from service.api.routes import contract_router
from service.api.rule_wire import RuleSent, rule_of
from service.api.wire import InstantOut, QueryInstant, Sent
from service.clock import now
from service.errors import RejectedInput
from service.jobs.rehearsal_job import AT_ONCE, KIND, looks_to_read, rehearsal
from service.store.jobs import JobSent, get_job, promise_job
from service.store.rules import definition_of, find_rule

router = contract_router("/rules", "alerts")
_UNNAMED = "rehearsal"


_EITHER = WithJsonSchema({"oneOf": [{"type": "string"}, {"$ref": "#/components/schemas/RuleSent"}]})


class RehearsalSent(Sent):
    """A rule, by its id or as it would be put, and the interval of looks that open alarms."""

    rule: Annotated[Any, _EITHER]
    since: Annotated[QueryInstant, Field(alias="from")]
    until: Annotated[QueryInstant, Field(alias="to")]


class RehearsedOut(BaseModel):
    """What the rule would have raised.

    `alarms` lists the first thousand; `verdicts` are those that people gave on alerts of the
    same parcel at the time, since then and of whatever rule. `parcel_weeks` were watched in
    the interval. `held_back` counts what diary or notices explain.
    """

    model_config = {"populate_by_name": True}

    since: Annotated[InstantOut, Field(alias="from")]
    until: Annotated[InstantOut, Field(alias="to")]
    alarms_total: int
    held_back: int
    parcel_weeks: float
    alarms_per_1000_parcel_weeks: float | None
    verdicts: dict[str, int]
    seasons: list[dict[str, Any]]
    by_crop_and_month: list[dict[str, Any]]
    alarms: list[dict[str, Any]]
    caution: str


@router.post(
    "/rehearse",
    response_model=RehearsedOut,
    responses={202: {"model": JobOut, "description": "A job: the rehearsal is a long one."}},
)
async def post_rehearsal(
    sent: RehearsalSent,
    request: Request,
    caller: Steward,
    context: Ctx,
    once: OnceOnly,
    wait: Wait,
) -> Response:
    """Say what a rule would have raised over past looks, by the code that judges.

    At once if there is little to read, else as a job; as a job as well with
    `Prefer: respond-async`. With `Prefer: wait` the answer is held until the job is done.
    """
    caller.must_see_all("a rehearsal")
    rule = await run_in_threadpool(_rule, sent, context)
    is_async = "respond-async" in preferences_of(request)
    answer = await run_in_threadpool(_begin, sent, rule, caller, context, once, is_async=is_async)
    if isinstance(answer, Response):
        return answer
    if wait and await is_finished(context, answer.id, wait):
        answer = await run_in_threadpool(_finished, answer.id, context)
    done = answer.state == "done"
    return json_answer(answer, 200 if done else 202, Location=address_of(answer.id))


def _rule(sent: RehearsalSent, context: Context) -> Rule:
    if sent.since >= sent.until:
        raise RejectedInput.at("/to", "`to` must be later than `from`; it is not included.")
    if not isinstance(sent.rule, str):
        return rule_of(_UNNAMED, model_of(RuleSent, sent.rule, "/rule"), "/rule")
    with context.sessions.reading() as session:
        standing = find_rule(session, sent.rule)
    if standing is None:
        raise RejectedInput.at(
            "/rule", "There is no rule with this id. Name one, or send one as it would be put."
        )
    return standing.rule


def _begin(
    sent: RehearsalSent,
    rule: Rule,
    caller: Caller,
    context: Context,
    once: Once,
    *,
    is_async: bool,
) -> Response | JobOut:
    """Rehearse at once, or promise a job."""
    fingerprint = sent.model_dump_json()
    with context.sessions.reading() as session:
        is_long = looks_to_read(session, sent.until) > AT_ONCE
    if not (is_long or is_async):
        # It changes nothing, so doing it again is as good as the first answer.
        return json_answer(rehearsal(context.work, rule, sent.since, sent.until))
    with context.sessions.writing() as session:
        if (first := once.replay(session, caller, fingerprint)) is not None:
            return first
        job = promise_job(session, _job(sent, rule, caller), at=now())
        made = job_out(job)
        once.keep(
            session, caller, fingerprint, json_answer(made, 202, Location=address_of(made.id))
        )
    context.promise_rehearsal(made.id)
    return made


def _job(sent: RehearsalSent, rule: Rule, caller: Caller) -> JobSent:
    asked = {
        "id": rule.id,
        "rule": definition_of(rule),
        "from": _told(sent.since),
        "to": _told(sent.until),
    }
    return JobSent(
        kind=KIND,
        api_key_id=caller.key_id,
        holdings=caller.holdings,
        asked=asked,
        digest="",
        fingerprint=hashlib.sha256(f"{KIND}\n{json.dumps(asked)}".encode()).hexdigest(),
    )


def _told(instant: datetime) -> str:
    return instant.isoformat()


def _finished(job_id: str, context: Context) -> JobOut:
    with context.sessions.reading() as session:
        return job_out(get_job(session, job_id))
