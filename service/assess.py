"""From series, baselines and a rule to judgements and alerts.

Judging is a fold over the passes of one season axis in order of acquisition: `judge` takes
the state, one pass, the baselines and a rule, and gives the next state, a judgement of every
look, and what happened to alerts. The state is all that is remembered; nothing is changed in
place, so that a fold may start again from any state that was kept.
"""

from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from service.alerts.actions import Action, act
from service.alerts.alert import Alert, Change
from service.alerts.instants import microseconds
from service.alerts.looks import DepartedLook
from service.alerts.persistence import Scored, watch_pass
from service.alerts.rules import Rule
from service.alerts.watch import Watch
from service.seasons.baseline import Baselines
from service.seasons.cohort import Carried
from service.seasons.judgement import Judgements, OnePass, judge_looks

Figures = NDArray[np.float64]

BASELINE_MEASURES: Final = (
    "ndvi",
    "ndmi",
    "nbr",
    "ndwi",
    "blue",
    "green",
    "red",
    "nir",
    "swir16",
    "swir22",
)
"""What the default rule, its screen for haze and its causes need of a look."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class State:
    """All that judging remembers between passes.

    Attributes
    ----------
    season
        Crop year of the last pass, None before the first.
    baseline
        Version of the baselines it was judged by.
    carried
        Crop → what its cohort hands on.
    watch
        The rule's memory of each parcel.
    """

    season: int | None
    baseline: str | None
    carried: Mapping[str, Carried]
    watch: Watch

    @classmethod
    def start(cls, rule: Rule) -> "State":
        """Return the state before the first pass."""
        return cls(season=None, baseline=None, carried={}, watch=Watch.nothing(rule))

    def to_dict(self) -> dict[str, Any]:
        """Return plain members, fit for JSON, that `from_dict` reads."""
        return {
            "season": self.season,
            "baseline": self.baseline,
            "carried": {
                crop: {
                    "level": _plain(each.level),
                    "median": _plain(each.median),
                    "day": each.day,
                }
                for crop, each in sorted(self.carried.items())
            },
            "watch": self.watch.to_dict(),
        }

    @classmethod
    def from_dict(cls, members: Mapping[str, Any], rule: Rule) -> "State":
        """Return the state that `to_dict` wrote for the same rule."""
        return cls(
            season=members["season"],
            baseline=members["baseline"],
            carried={
                crop: Carried(
                    # None becomes NaN.
                    level=np.array(each["level"], dtype=np.float64),
                    median=np.array(each["median"], dtype=np.float64),
                    day=each["day"],
                )
                for crop, each in members["carried"].items()
            },
            watch=Watch.from_dict(members["watch"], rule),
        )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Step:
    """One step of a fold; `judgements` is None where only persons acted."""

    state: State
    judgements: Judgements | None
    changes: Sequence[Change]


def fold(
    state: State,
    passes: Iterable[OnePass],
    actions: Iterable[Action] = (),
    *,
    baselines: Baselines,
    rule: Rule,
) -> Iterator[Step]:
    """Judge passes of one season in order of acquisition, persons' actions among them.

    Parameters
    ----------
    passes
        In any order.
    actions
        In the order in which they were done. An action takes effect behind the looks that
        the person had seen; those for another rule are left out.

    Yields
    ------
    Step
        One for each pass, with the actions before it, and one for actions behind the last.
    """
    waiting = [action for action in actions if action.rule == rule.id]
    waiting.sort(key=lambda action: action.at)
    for one in in_order(passes):
        due = [action for action in waiting if action.at < one.acquired_at]
        waiting = waiting[len(due) :]
        state, acted = _after(state, due, rule)
        state, judgements, changes = judge(state, one, baselines, rule)
        yield Step(state=state, judgements=judgements, changes=[*acted, *changes])
    if waiting:
        state, acted = _after(state, waiting, rule)
        yield Step(state=state, judgements=None, changes=acted)


def in_order(passes: Iterable[OnePass]) -> list[OnePass]:
    """Return passes in the order in which they are judged."""
    return sorted(passes, key=lambda one: (one.acquired_at, min(one.scenes, default="")))


def alerts_after(steps: Sequence[Step]) -> dict[str, Alert]:
    """Return every alert that the steps of a fold touched or left open, as it ended, by id."""
    found = {change.alert.id: change.alert for step in steps for change in step.changes}
    still_open = steps[-1].state.watch.open.values() if steps else ()
    return found | {alert.id: alert for alert in still_open}


def judge(
    state: State, one: OnePass, baselines: Baselines, rule: Rule
) -> tuple[State, Judgements, list[Change]]:
    """Judge one pass.

    Parameters
    ----------
    state
        After the pass before.
    one
        Acquired after all passes that the state has seen.
    baselines
        Of the season axis, fitted from seasons before that of the pass.
    rule
        The one whose state it is.

    Returns
    -------
    tuple
        The next state; a judgement of every look; what happened to alerts, by parcel.

    Raises
    ------
    ValueError
        When the state was folded with other baselines in the same season.
    """
    state = _in_season(state, one, baselines, rule)
    judgements, carried = judge_looks(
        baselines,
        one,
        signs=rule.signs,
        min_valid=rule.min_valid,
        clear_cohort=rule.clear_cohort,
        carried=state.carried,
    )
    watch, changes = watch_pass(state.watch, _scored(one, judgements, rule), rule)
    return replace(state, carried=carried, watch=watch), judgements, changes


def _after(state: State, actions: Iterable[Action], rule: Rule) -> tuple[State, list[Change]]:
    watch, changes = state.watch, []
    for action in actions:
        watch, acted = act(watch, action, rule)
        changes += acted
    return replace(state, watch=watch), changes


def _in_season(state: State, one: OnePass, baselines: Baselines, rule: Rule) -> State:
    """Return the state as the season of the pass begins, or goes on."""
    if state.season == one.season:
        if state.baseline != baselines.version:
            raise ValueError("the baselines changed: fold the season again from its start")
        return state
    watch = state.watch.in_new_season(rule)
    return State(season=one.season, baseline=baselines.version, carried={}, watch=watch)


def _scored(one: OnePass, judgements: Judgements, rule: Rule) -> Scored:
    judged = np.flatnonzero(np.isfinite(judgements.score))
    is_new = judgements.is_new_crop[judged]
    single = np.where(is_new, rule.new_crop.single_look, rule.thresholds.single_look)
    shortfalls = np.full((judged.size, len(rule.measures)), np.nan)
    for at, watched in enumerate(rule.measures):
        if watched.index in judgements.measures:
            column = judgements.measures.index(watched.index)
            shortfalls[:, at] = judgements.shortfall[judged, column]

    def describe(at: int) -> DepartedLook:
        return _departed(one, judgements, int(judged[at]), rule)

    return Scored(
        opening=one.acquired_at,
        parcels=[one.parcels[int(look)] for look in judged],
        at=np.fromiter((microseconds(one.looked_at[int(look)]) for look in judged), np.int64),
        score=judgements.score[judged],
        threshold=np.where(is_new, rule.new_crop.look, rule.thresholds.look),
        single_look=np.where(judgements.is_weak[judged], np.inf, single),
        cause_from=np.where(is_new, rule.new_crop.cause, rule.thresholds.cause),
        shortfalls=shortfalls,
        describe=describe,
    )


def _departed(one: OnePass, judgements: Judgements, look: int, rule: Rule) -> DepartedLook:
    measures = judgements.measures
    index = measures[int(judgements.leading[look])]
    is_new = bool(judgements.is_new_crop[look])
    score = float(judgements.score[look])
    departures = _known(measures, judgements.departure[look])
    water = float(one.water[look])
    return DepartedLook(
        at=microseconds(one.looked_at[look]),
        scene=one.scenes[look],
        crop=one.crops[look] or "",
        score=score,
        departs=score >= (rule.new_crop if is_new else rule.thresholds).look,
        index=index,
        observed=_known(measures, judgements.observed[look]),
        expected=_known(measures, judgements.expected[look]),
        shortfall=_known(measures, judgements.shortfall[look]),
        departures={name: z for name, z in departures.items() if name in rule.signs},
        water=None if np.isnan(water) else water,
        basis=judgements.basis(look, index).value,
        is_new_crop=is_new,
        is_weak=bool(judgements.is_weak[look]),
        baseline=judgements.baseline,
    )


def _known(measures: Sequence[str], figures: Figures) -> dict[str, float]:
    """Return the known figures by measure."""
    pairs = zip(measures, figures.tolist(), strict=True)
    return {measure: figure for measure, figure in pairs if np.isfinite(figure)}


def _plain(figures: Figures) -> list[float | None]:
    return [None if np.isnan(figure) else figure for figure in figures.tolist()]
