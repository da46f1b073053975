"""A season of an axis folded by each rule, with all that is known beside its looks."""

from collections.abc import Collection, Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from datetime import datetime

import numpy as np
from sqlalchemy.orm import Session

from service.alerts.actions import Action
from service.alerts.alert import Alert
from service.alerts.diary import DiaryEntry
from service.alerts.explained import Explained
from service.alerts.notices import Notice
from service.alerts.rules import Rule
from service.assess import Prepared, State, Step, fold, in_order
from service.seasons.judgement import Judgements, OnePass
from service.store.columns import microseconds
from service.store.diary import entries_of
from service.store.folds import is_worth_keeping
from service.store.holdings import holdings_of
from service.store.judged_looks import JUDGED, JudgedPass
from service.store.judging import Axis
from service.store.looks import PASS_GAP
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
class Start:
    """Where the fold of a season begins.

    Attributes
    ----------
    states
        Rule → its state; a new rule has none.
    after
        Behind which instant looks are judged; None is the start of the season.
    pass_at, number
        Of the pass before: when it began, and the how-manieth of the season it was.
    """

    states: Mapping[str, State]
    after: datetime | None = None
    pass_at: datetime | None = None
    number: int = 0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Remembered:
    """The states of all rules after a pass, when no look before `seen_until` is to come."""

    seen_until: datetime
    pass_at: datetime
    number: int
    states: dict[str, State]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Folded:
    """What folding a season gave.

    Attributes
    ----------
    passes
        What is thought of the looks, pass by pass.
    alerts, explained
        By the alert's id, of all rules that are not switched off; alerts as they ended, those
        that were open or closed where the fold began among them.
    notices
        By id, as they ended.
    states
        Rule → what its fold remembers at the end.
    remembered
        Passes from which the season may be judged on.
    newest
        Number of the season's last pass.
    """

    passes: Sequence[JudgedPass]
    alerts: Mapping[str, Alert]
    explained: Mapping[str, Explained]
    notices: Mapping[str, Notice]
    states: Mapping[str, State]
    remembered: Sequence[Remembered]
    newest: int


def fold_season(
    known: Known,
    start: Start,
    passes: Sequence[OnePass],
    actions: Sequence[Action],
    prepared: Prepared,
    *,
    axis: Axis,
    season: int,
) -> Folded:
    """Fold the passes of a season by each rule; judgements are let go of pass by pass."""
    ordered = in_order(passes)
    ids = {ref: parcel_id for parcel_id, ref in axis.refs.items()}
    remembered = _to_remember(ordered, start.number)
    judged: list[JudgedPass] = []
    by_rule: dict[str, _ByRule] = {}
    for rule in known.rules:
        found = by_rule[rule.id] = _ByRule.from_start(start, rule, remembered, region=axis.id)
        for step in fold(
            found.state,
            ordered,
            actions,
            baselines=prepared.baselines,
            rule=rule,
            tuned=prepared.tuned.get(rule.id),
            diary=known.diary,
            holdings=known.holdings,
        ):
            found.take(step)
            if len(by_rule) == 1 and step.judgements is not None:
                judged.append(_judged_pass(ordered[len(judged)], step.judgements, season, ids))
    for each in remembered.values():
        each.states.update({rule: found.kept[each.number] for rule, found in by_rule.items()})
    opening = [by_rule[rule] for rule in known.opening]
    return Folded(
        passes=judged,
        alerts={key: alert for found in opening for key, alert in found.all_alerts().items()},
        explained={key: each for found in opening for key, each in found.explained.items()},
        notices=by_rule[known.rules[0].id].notices,
        states={rule: found.state for rule, found in by_rule.items()},
        remembered=list(remembered.values()),
        newest=start.number + len(ordered),
    )


@dataclass(slots=True, kw_only=True)
class _ByRule:
    """What the fold by one rule finds, step by step; `wanted` are passes to remember."""

    state: State
    number: int
    wanted: Collection[int]
    alerts: dict[str, Alert]
    explained: dict[str, Explained] = field(default_factory=dict)
    notices: dict[str, Notice] = field(default_factory=dict)
    kept: dict[int, State] = field(default_factory=dict)

    @classmethod
    def from_start(
        cls, start: Start, rule: Rule, wanted: Collection[int], *, region: str
    ) -> "_ByRule":
        state = start.states.get(rule.id) or State.start(rule, region=region)
        # In the middle of a season any of these may be touched by what comes.
        held = () if start.after is None else (*state.watch.closed.values(), *_open(state))
        alerts = {alert.id: alert for alert in held}
        return cls(state=state, number=start.number, wanted=wanted, alerts=alerts)

    def take(self, step: Step) -> None:
        """Take up one step."""
        self.state = step.state
        self.alerts |= {change.alert.id: change.alert for change in step.changes}
        self.explained |= {each.alert_id: each for each in step.explained}
        self.notices |= {notice.id: notice for notice in step.notices}
        if step.judgements is not None:
            self.number += 1
            if self.number in self.wanted:
                self.kept[self.number] = step.state

    def all_alerts(self) -> dict[str, Alert]:
        """Return the alerts as they ended."""
        return self.alerts | {alert.id: alert for alert in _open(self.state)}


def _open(state: State) -> Iterable[Alert]:
    return state.watch.open.values()


def _to_remember(passes: Sequence[OnePass], before: int) -> dict[int, Remembered]:
    """Return the passes, in order, from which judging may go on later, by number.

    Looks of two platforms may interlock: nothing may be to come from before the end of the
    pass. A gap keeps the passes behind from hanging together with those before, whichever
    scenes are withdrawn.
    """
    newest = before + len(passes)
    found: dict[int, Remembered] = {}
    later: datetime | None = None
    for number, one in zip(range(newest, before, -1), reversed(passes), strict=True):
        end = max(one.looked_at)
        is_clear = later is None or end + PASS_GAP < later
        if is_clear and is_worth_keeping(number, newest=newest):
            found[number] = Remembered(
                seen_until=end, pass_at=one.acquired_at, number=number, states={}
            )
        begun = min(one.looked_at)
        later = begun if later is None else min(later, begun)
    return found


def _judged_pass(
    one: OnePass, judged: Judgements, season: int, ids: Mapping[str, int]
) -> JudgedPass:
    figures = np.stack([getattr(judged, name) for name in JUDGED], axis=-1, dtype=np.float32)
    instants = {at: microseconds(at) for at in set(one.looked_at)}
    size = len(one.parcels)
    return JudgedPass(
        baseline_season=season,
        parcel_ids=np.fromiter((ids[ref] for ref in one.parcels), np.int64, size),
        instants=np.fromiter((instants[at] for at in one.looked_at), np.int64, size),
        crops=one.grown,
        unjudged=[None if reason is None else reason.value for reason in judged.unjudged],
        score=np.where(np.isfinite(judged.score), judged.score, np.nan),
        p=judged.p,
        figures=figures.reshape(size, -1),
    )
