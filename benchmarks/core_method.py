"""The service's own judging on invented histories, by its pure core and in this process.

For quick experiments: `furrowlight bench validation` asks the running service instead.
"""

from collections.abc import Mapping, Sequence
from datetime import datetime
from typing import Final

import numpy as np

from benchmarks.histories.crops import NAMES, Places
from benchmarks.histories.making import History as Invented
from benchmarks.histories.optics import MEASURES, Figures
from benchmarks.scoring import Alarm, Tally, Truth, score
from service.alerts.alert import ChangeKind
from service.alerts.rules import RULES, Rule
from service.assess import BASELINE_MEASURES, State, Step, fold
from service.seasons.baseline import Baselines, fit_baselines
from service.seasons.history import History
from service.seasons.judgement import OnePass

_COLUMNS: Final = [MEASURES.index(measure) for measure in BASELINE_MEASURES]


def scored(invented: Invented) -> Tally:
    """Judge a history's last season as the service does, and score it."""
    return score(Truth.of(invented), alarms_of(invented, judged(invented)))


def judged(invented: Invented, rule: Rule = RULES["default"]) -> list[Step]:
    """Return the steps of the fold over the judged season."""
    baselines = fitted(invented)
    return list(fold(State.start(rule), passes_of(invented), baselines=baselines, rule=rule))


def fitted(invented: Invented) -> Baselines:
    """Return baselines of the finished seasons."""
    looks = np.flatnonzero(~invented.is_judged & invented.is_look)
    crops = crops_of(invented, looks)
    history = History.of_rows(
        parcels=[invented.refs[parcel] for parcel in invented.look_parcel[looks]],
        crops=crops,
        seasons=[invented.seasons[season] for season in invented.look_season[looks]],
        days=days_of(invented, looks).tolist(),
        passes=invented.look_pass[looks].tolist(),
        measures=BASELINE_MEASURES,
        values=values_of(invented, looks),
    )
    return fit_baselines(history)


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
        )
        for step in steps
        for change in step.changes
        if change.kind is ChangeKind.OPENED
    ]


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


def kinds_named(tally: Tally) -> Mapping[str, int]:
    """Return how often each cause was named."""
    named: dict[str, int] = {}
    for (_, cause), times in tally.causes.items():
        named[cause] = named.get(cause, 0) + times
    return named
