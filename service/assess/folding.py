"""The fold: passes in order of acquisition, persons' actions among them."""

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import replace
from math import nan

from service.alerts.actions import Action, act
from service.alerts.alert import Alert, Change
from service.alerts.diary import DiaryEntry
from service.alerts.explained import Known
from service.alerts.notices import DRYNESS, CropShift, Notice, season_over, watch_region
from service.alerts.notices import MEASURE as SHIFT_MEASURE
from service.alerts.persistence import watch_pass
from service.alerts.rules import Rule
from service.alerts.tuning import Tuned
from service.assess.scored import COVER, column_of, scored_looks
from service.assess.state import NO_HOLDINGS, Beside, Holdings, State, Step
from service.seasons.baseline import Baselines
from service.seasons.history import HAZE
from service.seasons.judgement import Judgements, OnePass, judge_looks
from service.seasons.medians import Figures


def fold(
    state: State,
    passes: Iterable[OnePass],
    actions: Iterable[Action] = (),
    *,
    baselines: Baselines,
    rule: Rule,
    tuned: Tuned | None = None,
    diary: Iterable[DiaryEntry] = (),
    holdings: Holdings = NO_HOLDINGS,
) -> Iterator[Step]:
    """Judge passes of one season in order of acquisition, persons' actions among them.

    Parameters
    ----------
    passes
        In any order.
    actions
        In the order in which they were done. An action takes effect behind the looks that
        the person had seen; those for another rule are left out.
    rule
        The one whose state it is.
    tuned
        What replaying the past says of it: its threshold unless an operator set one, and the
        odds of its alerts.
    diary
        What people know to have happened.
    holdings
        Parcel → its holding, for a rule that is limited to some.

    Yields
    ------
    Step
        One for each pass, with the actions before it, and one for actions behind the last.
    """
    beside = Beside.of(rule, tuned, diary, holdings)
    waiting = [action for action in actions if action.rule == rule.id]
    waiting.sort(key=lambda action: action.at)
    for one in in_order(passes):
        due = [action for action in waiting if action.at < one.acquired_at]
        waiting = waiting[len(due) :]
        state, acted = _after(state, due, beside.rule)
        step = judge(state, one, baselines, beside)
        state = step.state
        yield replace(step, changes=[*acted, *step.changes])
    if waiting:
        state, acted = _after(state, waiting, beside.rule)
        yield Step(state=state, judgements=None, changes=acted)


def in_order(passes: Iterable[OnePass]) -> list[OnePass]:
    """Return passes in the order in which they are judged."""
    return sorted(passes, key=lambda one: (one.acquired_at, min(one.scenes, default="")))


def alerts_after(steps: Sequence[Step]) -> dict[str, Alert]:
    """Return every alert that the steps of a fold touched or left open, as it ended, by id."""
    found = {change.alert.id: change.alert for step in steps for change in step.changes}
    still_open = steps[-1].state.watch.open.values() if steps else ()
    return found | {alert.id: alert for alert in still_open}


def judge(state: State, one: OnePass, baselines: Baselines, beside: Beside) -> Step:
    """Judge one pass.

    Parameters
    ----------
    state
        After the pass before.
    one
        Acquired after all passes that the state has seen.
    baselines
        Of the season axis, fitted from seasons before that of the pass.
    beside
        The rule whose state it is, and what is known beside the looks.

    Raises
    ------
    ValueError
        When the state was folded with other baselines in the same season.
    """
    rule = beside.rule
    state, over = _in_season(state, one, baselines, rule)
    judgements, carried = judge_looks(
        baselines,
        one,
        signs=rule.signs,
        min_valid=rule.min_valid,
        clear_cohort=rule.clear_cohort,
        carried=state.carried,
    )
    region, told = watch_region(state.region, _shifts(judgements), at=one.acquired_at)
    known = Known(diary=beside.diary, region=region, odds=beside.odds)
    watched = watch_pass(state.watch, scored_looks(one, judgements, beside), rule, known)
    return Step(
        state=replace(state, carried=carried, region=region, watch=watched.watch),
        judgements=judgements,
        changes=watched.changes,
        explained=watched.explained,
        notices=[*over, *told],
    )


def _after(state: State, actions: Iterable[Action], rule: Rule) -> tuple[State, list[Change]]:
    watch, changes = state.watch, []
    for action in actions:
        watch, acted = act(watch, action, rule)
        changes += acted
    return replace(state, watch=watch), changes


def _in_season(
    state: State, one: OnePass, baselines: Baselines, rule: Rule
) -> tuple[State, list[Notice]]:
    """Return the state as the season of the pass begins or goes on, and notices that this ends."""
    if state.season == one.season:
        if state.baseline != baselines.version:
            raise ValueError("the baselines changed: fold the season again from its start")
        return state, []
    region, over = season_over(state.region, at=one.acquired_at)
    return State(
        season=one.season,
        baseline=baselines.version,
        carried={},
        region=region,
        watch=state.watch.in_new_season(rule),
    ), over


def _shifts(judgements: Judgements) -> list[CropShift]:
    """Return how far each crop with history is off its usual course."""
    places = {name: column_of(judgements, name) for name in (SHIFT_MEASURE, DRYNESS, HAZE, COVER)}

    def figure(figures: Figures, measure: str, *, otherwise: float) -> float:
        place = places[measure]
        return otherwise if place is None else float(figures[place])

    return [
        CropShift(
            crop=crop,
            looks=cohort.looks,
            moisture=figure(cohort.level, SHIFT_MEASURE, otherwise=nan),
            dryness=figure(cohort.level, DRYNESS, otherwise=nan),
            green=figure(cohort.usual, COVER, otherwise=nan),
            rising=figure(cohort.rising, COVER, otherwise=nan),
            haze=figure(cohort.level, HAZE, otherwise=0.0),
        )
        for crop, cohort in sorted(judgements.cohorts.items())
        if crop and not cohort.is_new
    ]
