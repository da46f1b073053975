"""Rules as sent and answered."""

from collections.abc import Sequence
from dataclasses import replace
from typing import Annotated, Any, Final, Literal, TypeVar

from pydantic import BaseModel, Field, FiniteFloat

from service.alerts.rules import RULES, SINGLE_LOOK_FACTOR, Direction, Rule, Watched
from service.api.wire import InstantOut, LongText, Ref, Sent, Text, joined
from service.assess import BASELINE_MEASURES
from service.errors import Fault, RejectedInput
from service.store.rules import StandingRule

Item = TypeVar("Item")
AUTO: Final = "auto"
_LARGEST = 100.0


class WatchedSent(Sent):
    """A measure that a rule watches, and the side on which it is worse than expected."""

    index: Annotated[str, Field(max_length=40)]
    direction: Direction


class RuleSent(Sent):
    """A rule as it is put: what is left out has its default."""

    title: LongText | None = None
    measures: Annotated[list[WatchedSent], Field(min_length=1, max_length=20)]
    threshold: Literal["auto"] | Annotated[FiniteFloat, Field(strict=True, ge=1, le=_LARGEST)] = (
        AUTO
    )
    single_look_threshold: (
        Annotated[FiniteFloat, Field(strict=True, ge=1, le=SINGLE_LOOK_FACTOR * _LARGEST)] | None
    ) = None
    looks_needed: Annotated[int, Field(strict=True, ge=1, le=10)] = 2
    looks_window: Annotated[int, Field(strict=True, ge=1, le=10)] = 3
    min_valid: Annotated[FiniteFloat, Field(strict=True, ge=0.1, le=1)] = 0.6
    crops: Annotated[list[Text], Field(min_length=1, max_length=1000)] | None = None
    holdings: Annotated[list[Ref], Field(min_length=1, max_length=1000)] | None = None
    months: (
        Annotated[
            list[Annotated[int, Field(strict=True, ge=1, le=12)]],
            Field(min_length=1, max_length=12),
        ]
        | None
    ) = None
    enabled: bool = True


class WatchedOut(BaseModel):
    """A measure that a rule watches."""

    index: str
    direction: str


class TuningOut(BaseModel):
    """What replaying finished seasons says of a rule, for the parcels of one season start.

    `replayed_rate` is in false alarms per 1,000 parcel-weeks at the threshold; it and the
    threshold are null where there is too little past: the default threshold is used then.
    """

    season_start: str
    from_on: str
    until_on: str
    threshold: float | None
    replayed_rate: float | None
    parcel_weeks: float
    seasons: int


class RuleOut(BaseModel):
    """A rule as it stands; `tuning` tells how it does on the past."""

    id: str
    title: str
    built_in: bool
    measures: list[WatchedOut]
    threshold: float | Literal["auto"]
    single_look_threshold: float | None
    looks_needed: int
    looks_window: int
    min_valid: float
    crops: list[str] | None
    holdings: list[str] | None
    months: list[int] | None
    enabled: bool
    tuning: list[TuningOut]
    revision: int
    changed_by: str | None
    changed_at: InstantOut | None


def rule_out(standing: StandingRule, tuning: Sequence[dict[str, Any]]) -> RuleOut:
    """Return a rule as answered."""
    rule = standing.rule
    return RuleOut(
        id=rule.id,
        title=rule.title,
        built_in=standing.is_built_in,
        measures=[
            WatchedOut(index=each.index, direction=each.direction.value) for each in rule.measures
        ],
        threshold=AUTO if rule.threshold is None else rule.threshold,
        single_look_threshold=rule.single_look_threshold,
        looks_needed=rule.looks_needed,
        looks_window=rule.looks_window,
        min_valid=rule.min_valid,
        crops=_listed(rule.crops),
        holdings=_listed(rule.holdings),
        months=_listed(rule.months),
        enabled=rule.enabled,
        tuning=[TuningOut(**each) for each in tuning],
        revision=standing.revision,
        changed_by=standing.who,
        changed_at=standing.changed_at,
    )


def _listed(held: frozenset[Any] | None) -> list[Any] | None:
    return None if held is None else sorted(held)


def rule_of(rule_id: str, sent: RuleSent, pointer: str = "") -> Rule:
    """Return the rule that was sent.

    Raises
    ------
    RejectedInput
        Its members don't fit each other, with a fault at each.
    """
    faults = [*_measure_faults(sent, pointer), *_threshold_faults(sent, pointer)]
    if faults:
        raise RejectedInput("invalid-input", faults[0].detail, faults)
    shipped = RULES.get(rule_id)
    rule = Rule(
        id=rule_id,
        title=sent.title or (shipped.title if shipped else rule_id),
        measures=tuple(
            Watched(index=each.index, direction=each.direction) for each in sent.measures
        ),
        threshold=None if sent.threshold == AUTO else float(sent.threshold),
        single_look_threshold=sent.single_look_threshold,
        looks_needed=sent.looks_needed,
        looks_window=sent.looks_window,
        min_valid=sent.min_valid,
        crops=_set_of(sent.crops),
        holdings=_set_of(sent.holdings),
        months=_set_of(sent.months),
        enabled=sent.enabled,
    )
    return replace(rule, severities=shipped.severities) if shipped else rule


def _set_of(values: Sequence[Item] | None) -> frozenset[Item] | None:
    return None if values is None else frozenset(values)


def _measure_faults(sent: RuleSent, pointer: str) -> list[Fault]:
    faults, seen = [], set()
    for at, watched in enumerate(sent.measures):
        place = f"{pointer}/measures/{at}/index"
        if watched.index not in BASELINE_MEASURES:
            detail = f"This measure has no baseline. There are {joined(BASELINE_MEASURES)}."
            faults.append(Fault(pointer=place, detail=detail))
        elif watched.index in seen:
            detail = "This measure is watched twice; a rule has one worse side of each."
            faults.append(Fault(pointer=place, detail=detail))
        seen.add(watched.index)
    return faults


def _threshold_faults(sent: RuleSent, pointer: str) -> list[Fault]:
    faults = []
    single = sent.single_look_threshold
    if single is not None and sent.threshold != AUTO and single < float(sent.threshold):
        detail = "One look alone must depart at least as far as one of several: raise this."
        faults.append(Fault(pointer=f"{pointer}/single_look_threshold", detail=detail))
    if sent.looks_needed > sent.looks_window:
        detail = "No more looks can depart than the window holds: raise looks_window."
        faults.append(Fault(pointer=f"{pointer}/looks_needed", detail=detail))
    return faults
