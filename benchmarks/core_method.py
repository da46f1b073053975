"""The service's own judging on invented histories, by its pure core and in this process.

For quick experiments: `furrowlight bench validation` asks the running service instead.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Final

import numpy as np

from benchmarks.histories.crops import Places
from benchmarks.histories.making import History as Invented
from benchmarks.histories.optics import MEASURES, Figures
from benchmarks.scoring import Alarm, Tally, Truth, score
from service.alerts.alert import ChangeKind
from service.alerts.rules import RULES, Rule
from service.assess import BASELINE_MEASURES, Prepared, State, Step, fold, prepare
from service.seasons.history import History
from service.seasons.judgement import OnePass

_COLUMNS: Final = [MEASURES.index(measure) for measure in BASELINE_MEASURES]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Judged:
    """What judging a history's last season rests on, and the steps of the fold."""

    prepared: Prepared
    steps: Sequence[Step]


def scored(invented: Invented) -> Tally:
    """Judge a history's last season as the service does, and score it."""
    judged = judge(invented)
    return score(
        Truth.of(invented),
        alarms_of(invented, judged.steps),
        p_values=p_of_looks(invented, judged.steps),
        notices=notices_of(invented, judged.steps),
    )


def judge(invented: Invented, rule: Rule = RULES["default"]) -> Judged:
    """Fit, tune and fold, as the service does for one season axis."""
    prepared = prepare(past_of(invented), [rule])
    steps = fold(
        State.start(rule),
        passes_of(invented),
        baselines=prepared.baselines,
        rule=rule,
        tuned=prepared.tuned[rule.id],
    )
    return Judged(prepared=prepared, steps=list(steps))


def past_of(invented: Invented) -> History:
    """Return the looks of the finished seasons."""
    looks = np.flatnonzero(~invented.is_judged & invented.is_look)
    return History.of_rows(
        parcels=[invented.refs[parcel] for parcel in invented.look_parcel[looks]],
        crops=crops_of(invented, looks),
        seasons=[invented.seasons[season] for season in invented.look_season[looks]],
        days=days_of(invented, looks).tolist(),
        passes=[int(invented.passes[one].at.timestamp()) for one in invented.look_pass[looks]],
        measures=BASELINE_MEASURES,
        values=values_of(invented, looks),
    )


def passes_of(invented: Invented) -> list[OnePass]:
    """Return the passes of the judged season."""
    looks = np.flatnonzero(invented.is_judged)
    ends = np.flatnonzero(np.diff(invented.look_pass[looks])) + 1
    return [_one_pass(invented, of_pass) for of_pass in np.split(looks, ends)]


def alarms_of(invented: Invented, steps: Sequence[Step]) -> list[Alarm]:
    """Return the alerts as they stood when they opened."""
    places = {ref: place for place, ref in enumerate(invented.refs)}
    return [
        Alarm(
            parcel=places[change.alert.parcel],
            day=invented.day_of(change.alert.opened_at),
            cause=change.alert.cause.kind,
            chance=change.alert.chance,
        )
        for step in steps
        for change in step.changes
        if change.kind is ChangeKind.OPENED
    ]


def p_of_looks(invented: Invented, steps: Sequence[Step]) -> Figures:
    """Return the p-value of every judged look, NaN where it has none."""
    stated = {
        (ref, step.judgements.acquired_at): float(p)
        for step in steps
        if step.judgements is not None
        for ref, p in zip(step.judgements.parcels, step.judgements.p, strict=True)
    }
    looks = np.flatnonzero(invented.is_judged & invented.is_look)
    names = [invented.refs[parcel] for parcel in invented.look_parcel[looks]]
    instants = [invented.passes[one].at for one in invented.look_pass[looks]]
    return np.array([stated[pair] for pair in zip(names, instants, strict=True)], dtype=np.float64)


def notices_of(invented: Invented, steps: Sequence[Step]) -> list[int]:
    """Return the days on which regional notices opened."""
    opened = {notice.id: notice.opened_at for step in steps for notice in step.notices}
    return [invented.day_of(at) for at in opened.values()]


def crops_of(invented: Invented, looks: Places) -> list[str]:
    """Return what stood on the parcels of looks, by the intervals that a client would send."""
    spans: dict[int, list[tuple[int, str]]] = {}
    for one in invented.crop_seasons:
        day = (one.from_on - invented.first_on).days
        spans.setdefault(one.parcel, []).append((day, one.crop))
    on = np.array([each.day for each in invented.passes])[invented.look_pass[looks]]
    return [
        _crop_on(spans[int(parcel)], int(day))
        for parcel, day in zip(invented.look_parcel[looks], on, strict=True)
    ]


def days_of(invented: Invented, looks: Places) -> Places:
    """Return the day of season of looks."""
    on = np.array([each.day for each in invented.passes])[invented.look_pass[looks]]
    days: Places = on - invented.season_starts[invented.look_season[looks]]
    return days


def values_of(invented: Invented, looks: Places) -> Figures:
    """Return the measures that judging needs."""
    values: Figures = invented.values[looks][:, _COLUMNS]
    return values


def _crop_on(spans: Sequence[tuple[int, str]], day: int) -> str:
    return [crop for first, crop in spans if first <= day][-1]


def _one_pass(invented: Invented, looks: Places) -> OnePass:
    at: datetime = invented.passes[int(invented.look_pass[looks[0]])].at
    return OnePass(
        acquired_at=at,
        season=invented.seasons[-1],
        day=int(days_of(invented, looks[:1])[0]),
        parcels=[invented.refs[parcel] for parcel in invented.look_parcel[looks]],
        crops=crops_of(invented, looks),
        scenes=["invented"] * looks.size,
        looked_at=[at] * looks.size,
        measures=BASELINE_MEASURES,
        values=values_of(invented, looks),
        valid_share=invented.valid_share[looks],
        water=np.full(looks.size, np.nan),
    )
