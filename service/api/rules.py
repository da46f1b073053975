"""Rules: what makes an alert open, looked at and put."""

from typing import Annotated

from fastapi import Header, Path, Response
from pydantic import BaseModel

from service.api.context import Ctx, Reader, Steward
from service.api.once import json_answer
from service.api.routes import contract_router
from service.api.rule_wire import RuleOut, RuleSent, rule_of, rule_out
from service.api.wire import Ref
from service.clock import now
from service.errors import Conflict
from service.store.judging import want_judging_of_rules
from service.store.rules import StandingRule, find_rule, get_rule, put_rule, standing_rules
from service.store.sessions import serialise
from service.store.tuning import tuning_of

router = contract_router("/rules", "alerts")

IfMatch = Annotated[
    str | None,
    Header(description="The rule's entity tag, so that nobody is overwritten; none for a new one."),
]


class RulesOut(BaseModel):
    """All rules."""

    rules: list[RuleOut]


@router.get("")
def get_rules(caller: Reader, context: Ctx) -> RulesOut:
    """List the rules, the built-in ones first."""
    del caller
    with context.sessions.reading() as session:
        tuning = tuning_of(session)
        rules = standing_rules(session)
    return RulesOut(rules=[rule_out(each, tuning.get(each.rule.id, [])) for each in rules])


@router.get("/{rule_id}", response_model=RuleOut)
def get_one_rule(rule_id: str, caller: Reader, context: Ctx) -> Response:
    """Answer a rule with its tuned threshold, and what replaying the past says of it."""
    del caller
    with context.sessions.reading() as session:
        standing = get_rule(session, rule_id)
        told = rule_out(standing, tuning_of(session).get(rule_id, []))
    return json_answer(told, ETag=_tag(standing))


def _tag(standing: StandingRule) -> str:
    return f'"{standing.rule.id}-{standing.revision}"'


@router.put("/{rule_id}", response_model=RuleOut)
def put_one_rule(
    rule_id: Annotated[Ref, Path()],
    sent: RuleSent,
    caller: Steward,
    context: Ctx,
    if_match: IfMatch = None,
) -> Response:
    """Put a rule. The season that is running is judged anew by it, from its start.

    Alerts of the season that it no longer opens become `retracted`; finished seasons stay as
    they were judged, unless something else makes them be judged anew.
    """
    caller.must_see_all("a rule")
    rule = rule_of(rule_id, sent)
    with context.sessions.writing() as session:
        serialise(session, "judging")
        before = find_rule(session, rule_id)
        _check_match(before, if_match)
        if before is not None and before.rule == rule:
            standing = before
        else:
            standing = put_rule(session, rule, who=caller.label, at=now())
            want_judging_of_rules(session)
        told = rule_out(standing, tuning_of(session).get(rule_id, []))
    context.promise_judging()
    return json_answer(told, 200 if before else 201, ETag=_tag(standing))


def _check_match(before: StandingRule | None, if_match: str | None) -> None:
    if before is not None and if_match is None:
        raise Conflict(
            "precondition-required",
            "Send `If-Match` with the rule's entity tag, as its GET answers it, so that two "
            "people do not overwrite each other.",
        )
    tags = [] if if_match is None else [tag.strip() for tag in if_match.split(",")]
    if tags and (before is None or (_tag(before) not in tags and tags != ["*"])):
        raise Conflict(
            "precondition-failed",
            "The rule is not what it was when you looked at it. Get it again, then decide.",
        )
