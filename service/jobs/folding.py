"""A season of an axis folded by each rule, with all that is known beside its looks."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from sqlalchemy.orm import Session

from service.alerts.actions import Action
from service.alerts.alert import Alert
from service.alerts.diary import DiaryEntry
from service.alerts.explained import Explained
from service.alerts.notices import Notice
from service.alerts.rules import Rule
from service.assess import Prepared, State, Step, alerts_after, fold, in_order
from service.seasons.judgement import Judgements, OnePass
from service.store.diary import entries_of
from service.store.holdings import holdings_of
from service.store.judging import Axis
from service.store.rules import digest_of, judged_rules


@dataclass(frozen=True, slots=True, kw_only=True)
class Known:
    """What is known of the parcels of an axis beside their looks.

    Attributes
    ----------
    rules
        The default one first: what is told of a look, and of the region, is by it.
    diary
        What people wrote down.
    holdings
        Parcel → its holding.
    """

    rules: Sequence[Rule]
    diary: Sequence[DiaryEntry]
    holdings: Mapping[str, str | None]

    @property
    def opening(self) -> list[str]:
        """The rules whose alerts are kept: all that are not switched off."""
        return [rule.id for rule in self.rules if rule.enabled]


def known_of(session: Session, axis: Axis) -> Known:
    """Return what is known of the parcels of an axis beside their looks."""
    return Known(
        rules=judged_rules(session),
        diary=entries_of(session, axis.refs),
        holdings=holdings_of(session, axis.refs),
    )


def rests_on(known: Known) -> list[object]:
    """Return what the tuning of rules rests on beside looks and labels."""
    is_limited = any(rule.holdings is not None for rule in known.rules)
    return [digest_of(known.rules), sorted(known.holdings.items()) if is_limited else []]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Folded:
    """What folding a season gave.

    Attributes
    ----------
    judged
        The passes in order, and what is thought of their looks.
    alerts, explained
        By the alert's id, of all rules that are not switched off.
    notices
        By id, as they ended.
    states
        Rule → what its fold remembers at the end.
    """

    judged: Sequence[tuple[OnePass, Judgements]]
    alerts: Mapping[str, Alert]
    explained: Mapping[str, Explained]
    notices: Mapping[str, Notice]
    states: Mapping[str, State]


def fold_season(
    known: Known,
    before: Mapping[str, State],
    passes: Sequence[OnePass],
    actions: Sequence[Action],
    prepared: Prepared,
    *,
    region: str,
) -> Folded:
    """Fold the passes of a season by each rule.

    Parameters
    ----------
    before
        Rule → its state before the first of the passes; a new rule has none.
    region
        Part of the identity of notices.
    """
    steps: dict[str, list[Step]] = {}
    states = {
        rule.id: before.get(rule.id) or State.start(rule, region=region) for rule in known.rules
    }
    for rule in known.rules:
        steps[rule.id] = list(
            fold(
                states[rule.id],
                passes,
                actions,
                baselines=prepared.baselines,
                rule=rule,
                tuned=prepared.tuned.get(rule.id),
                diary=known.diary,
                holdings=known.holdings,
            )
        )
    first = steps[known.rules[0].id]
    judgements = [step.judgements for step in first if step.judgements is not None]
    opening = [steps[rule] for rule in known.opening]
    return Folded(
        judged=list(zip(in_order(passes), judgements, strict=True)),
        alerts={key: alert for each in opening for key, alert in alerts_after(each).items()},
        explained={
            held.alert_id: held for each in opening for step in each for held in step.explained
        },
        notices={notice.id: notice for step in first for notice in step.notices},
        states=states | {rule: each[-1].state for rule, each in steps.items() if each},
    )
