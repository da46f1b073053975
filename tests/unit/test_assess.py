"""Judging whole seasons: events found, few others accused, and what is refused."""

from collections import Counter
from collections.abc import Sequence
from dataclasses import replace
from datetime import UTC, datetime, timedelta

import numpy as np
import pytest

from service.alerts.actions import Action, ActionKind
from service.alerts.alert import Alert, ChangeKind
from service.alerts.rules import RULES
from service.assess import BASELINE_MEASURES, Beside, State, Step, alerts_after, fold, judge
from service.seasons.baseline import Baselines
from service.seasons.fitting import fit_baselines
from service.seasons.history import History
from service.seasons.judgement import Judgements, OnePass, Unjudged
from tests.scored_looks import is_same
from tests.simulated_seasons import MEASURES, Simulated, simulate

RULE = RULES["default"]
SEEDS = (1, 2, 3, 4)


@pytest.fixture(scope="module")
def simulated() -> Simulated:
    return simulate(1)


@pytest.fixture(scope="module")
def baselines(simulated: Simulated) -> Baselines:
    return fit_baselines(simulated.history)


def folded(
    passes: Sequence[OnePass], baselines: Baselines, actions: Sequence[Action] = ()
) -> list[Step]:
    return list(fold(State.start(RULE), passes, actions, baselines=baselines, rule=RULE))


def judgements_of(one: OnePass, baselines: Baselines) -> Judgements:
    found = judge(State.start(RULE), one, baselines, Beside.of(RULE)).judgements
    assert found is not None
    return found


def season_start(simulated: Simulated) -> datetime:
    return simulated.passes[0].acquired_at - timedelta(days=simulated.passes[0].day)


def test_events_are_found_with_their_cause_and_few_others_accused() -> None:
    found: Counter[str] = Counter()
    accused, weeks = 0, 0.0
    for seed in SEEDS:
        simulated = simulate(seed)
        steps = folded(simulated.passes, fit_baselines(simulated.history))
        opened = [c.alert for s in steps for c in s.changes if c.kind is ChangeKind.OPENED]
        true = set()
        for event in simulated.events:
            onset = season_start(simulated) + timedelta(days=event.day)
            hits = [a for a in opened if a.parcel == event.parcel and a.opened_at >= onset]
            true |= {alert.id for alert in hits}
            found[event.kind] += bool(hits) and hits[0].cause.kind == event.kind
        accused += sum(alert.id not in true for alert in opened)
        weeks += simulated.parcel_weeks
    assert found == dict.fromkeys(("flood", "burn", "removal", "moisture_stress"), len(SEEDS))
    assert 1000 * accused / weeks <= 1.25


def test_the_measures_of_the_simulation_are_those_that_judging_needs() -> None:
    assert set(MEASURES) == set(BASELINE_MEASURES)


def test_an_alert_holds_figures_that_agree(simulated: Simulated, baselines: Baselines) -> None:
    alerts = alerts_after(folded(simulated.passes, baselines)).values()
    assert alerts
    for alert in alerts:
        assert alert.observed - alert.expected == pytest.approx(alert.shortfall)
        assert alert.departures[alert.index] == alert.departure
        assert abs(alert.departure) >= alert.score - 1e-9
        assert alert.severity == RULE.severities.of(alert.score)
        assert alert.first_departure_at <= alert.opened_at <= alert.last_observed_at
        assert alert.looks == len(alert.scenes)
        assert alert.baseline == baselines.version


def test_passes_are_judged_in_order_of_acquisition_however_they_arrive(
    simulated: Simulated, baselines: Baselines
) -> None:
    in_order = folded(simulated.passes, baselines)
    shuffled = list(simulated.passes)
    np.random.default_rng(1).shuffle(shuffled)
    assert alerts_after(folded(shuffled, baselines)) == alerts_after(in_order)


def test_a_state_kept_midway_goes_on_to_the_same_end(
    simulated: Simulated, baselines: Baselines
) -> None:
    whole = folded(simulated.passes, baselines)
    half = len(simulated.passes) * 3 // 4
    kept = State.from_arrays(whole[half - 1].state.to_arrays())
    rest = list(fold(kept, simulated.passes[half:], baselines=baselines, rule=RULE))
    assert is_same(rest[-1].state.to_arrays(), whole[-1].state.to_arrays())
    assert [step.changes for step in rest] == [step.changes for step in whole[half:]]


def last_open(steps: Sequence[Step]) -> Alert:
    """Return an alert whose parcel departed for at least five looks."""
    return next(alert for alert in alerts_after(steps).values() if alert.looks >= 5)


def test_an_alert_that_a_person_closed_does_not_come_back_at_the_next_look(
    simulated: Simulated, baselines: Baselines
) -> None:
    alert = last_open(folded(simulated.passes, baselines))
    closing = Action(
        kind=ActionKind.CLOSE,
        parcel=alert.parcel,
        rule=RULE.id,
        at=alert.opened_at,
        verdict="expected",
    )
    steps = folded(simulated.passes, baselines, [closing])
    told = [c for s in steps for c in s.changes if c.alert.parcel == alert.parcel]
    told = [change for change in told if change.alert.opened_at >= alert.opened_at]
    assert [change.kind for change in told[:2]] == [ChangeKind.OPENED, ChangeKind.CLOSED]
    closed = told[1].alert
    assert (closed.id, closed.closed_at, closed.verdict) == (alert.id, alert.opened_at, "expected")
    assert len(told) == 2


def test_an_action_behind_the_last_pass_is_a_step_of_its_own(
    simulated: Simulated, baselines: Baselines
) -> None:
    passes = simulated.passes
    seen = Action(
        kind=ActionKind.ACKNOWLEDGE, parcel="nobody", rule=RULE.id, at=passes[-1].acquired_at
    )
    other = replace(seen, rule="another")
    assert len(folded(passes, baselines, [seen])) == len(passes) + 1
    assert folded(passes, baselines, [seen])[-1].judgements is None
    assert len(folded(passes, baselines, [other])) == len(passes)


def test_a_look_without_a_crop_is_not_judged(simulated: Simulated, baselines: Baselines) -> None:
    one = simulated.passes[30]
    unlabelled = replace(one, crops=[None, *one.crops[1:]])
    found = judgements_of(unlabelled, baselines)
    assert found.unjudged[0] is Unjudged.NO_CROP
    assert np.isnan(found.score[0])
    assert np.isnan(found.expected[0]).all()


def test_a_pass_with_too_little_of_a_parcel_is_no_look(
    simulated: Simulated, baselines: Baselines
) -> None:
    one = simulated.passes[30]
    share = np.ones(len(one.parcels))
    share[0], share[1], share[2] = 0.59, 0.60, np.nan
    found = judgements_of(replace(one, valid_share=share), baselines)
    assert found.unjudged[0] is Unjudged.NOT_A_LOOK
    assert found.unjudged[1] is not Unjudged.NOT_A_LOOK
    assert found.unjudged[2] is Unjudged.NOT_A_LOOK


@pytest.mark.parametrize(("parcels", "reason"), [(7, Unjudged.TOO_FEW), (8, None)])
def test_a_new_crop_is_judged_in_its_cohort(parcels: int, reason: Unjudged | None) -> None:
    simulated = simulate(1, per_crop=parcels, crops=("barley", "beet"), with_events=False)
    nothing = fit_baselines(History.empty(MEASURES))
    one = next(each for each in simulated.passes if len(each.parcels) == 2 * parcels)
    found = judgements_of(one, nothing)
    assert found.is_new_crop.all()
    clear = ~found.is_suspect
    assert {found.unjudged[look] for look in np.flatnonzero(clear)} == {reason}
    assert {found.basis(look, "ndvi").value for look in range(len(one.parcels))} == {"cohort"}


def test_without_any_history_an_event_is_still_found() -> None:
    simulated = simulate(2)
    steps = folded(simulated.passes, fit_baselines(History.empty(MEASURES)))
    kinds = {event.kind: event.parcel for event in simulated.events}
    found = {(a.parcel, a.cause.kind) for a in alerts_after(steps).values() if a.is_new_crop}
    assert (kinds["burn"], "burn") in found
    assert (kinds["flood"], "flood") in found


def test_a_hazy_look_is_shown_and_not_judged(simulated: Simulated, baselines: Baselines) -> None:
    one = simulated.passes[30]
    values = one.values.copy()
    values[0, MEASURES.index("blue")] += 0.05
    found = judgements_of(replace(one, values=values), baselines)
    assert found.unjudged[0] is Unjudged.SUSPECT
    assert found.is_suspect[0]
    assert np.isfinite(found.expected[0]).all()
    assert np.isfinite(found.departure[0, 0])


def test_what_a_sensor_lacks_is_said(simulated: Simulated, baselines: Baselines) -> None:
    one = simulated.passes[30]
    kept = [at for at, name in enumerate(MEASURES) if name not in {"ndmi", "swir16"}]
    lacking = replace(one, measures=[MEASURES[at] for at in kept], values=one.values[:, kept])
    assert judgements_of(one, baselines).missing == ()
    assert judgements_of(lacking, baselines).missing == ("ndmi",)


def test_a_look_without_a_watched_measure_says_so(
    simulated: Simulated, baselines: Baselines
) -> None:
    one = simulated.passes[30]
    found = judgements_of(replace(one, values=np.full_like(one.values, np.nan)), baselines)
    assert set(found.unjudged) == {Unjudged.NO_MEASURE}


def test_two_clear_parcels_of_a_crop_vouch_for_no_single_look(
    simulated: Simulated, baselines: Baselines
) -> None:
    one = simulated.passes[30]
    first = [at for at, crop in enumerate(one.crops) if crop == "barley"]
    found = judgements_of(some_of(one, first[:2]), baselines)
    assert found.is_weak.all()
    assert not judgements_of(some_of(one, first[:6]), baselines).is_weak.any()


def by_hand(low: float, *, parcels: int, looks: int) -> list[OnePass]:
    """Return passes in which all parcels are at 0.5, but the first one for some looks lower."""
    at = datetime(2024, 5, 1, 10, 30, tzinfo=UTC)
    return [
        OnePass(
            acquired_at=at + timedelta(days=look),
            season=2024,
            day=200 + look,
            parcels=[f"P{row}" for row in range(parcels)],
            crops=["oats"] * parcels,
            scenes=[f"scene-{look}"] * parcels,
            looked_at=[at + timedelta(days=look)] * parcels,
            measures=["ndvi"],
            values=np.array([[0.5 - low]] + [[0.5]] * (parcels - 1)),
            valid_share=np.ones(parcels),
            water=np.full(parcels, np.nan),
        )
        for look in range(looks)
    ]


@pytest.mark.parametrize(
    ("score", "looks", "alerts"),
    [(3.2, 4, 0), (3.4, 1, 0), (3.4, 2, 1), (9.5, 1, 0), (9.7, 1, 1)],
)
def test_a_crop_without_history_must_depart_further(score: float, looks: int, alerts: int) -> None:
    # S = 0.03 while the median stands still.
    nothing = fit_baselines(History.empty(["ndvi"]))
    steps = folded(by_hand(0.03 * score, parcels=8, looks=looks), nothing)
    assert steps[0].judgements is not None
    assert steps[0].judgements.score[0] == pytest.approx(score)
    found = alerts_after(steps)
    assert len(found) == alerts
    assert all(alert.is_new_crop and alert.basis == "cohort" for alert in found.values())


def oats_at_a_half() -> Baselines:
    """Return baselines of two parcels of oats that were always at 0.5: S is at its floor."""
    rows = [(parcel, day) for parcel in ("P0", "P1") for day in range(150, 260, 2)]
    return fit_baselines(
        History.of_rows(
            parcels=[parcel for parcel, _ in rows],
            crops=["oats"] * len(rows),
            seasons=[2023] * len(rows),
            days=[day for _, day in rows],
            passes=[day for _, day in rows],
            measures=["ndvi"],
            values=np.full((len(rows), 1), 0.5),
        )
    )


@pytest.mark.parametrize(("parcels", "alerts"), [(2, 0), (3, 1)])
def test_one_look_far_out_opens_an_alert_only_beside_three_clear_parcels(
    parcels: int, alerts: int
) -> None:
    steps = folded(by_hand(0.4, parcels=parcels, looks=1), oats_at_a_half())
    assert steps[0].judgements is not None
    assert steps[0].judgements.score[0] > RULE.thresholds.single_look
    assert len(alerts_after(steps)) == alerts


def some_of(one: OnePass, rows: Sequence[int]) -> OnePass:
    """Return some looks of a pass, in another order."""
    chosen = np.array(rows)
    return replace(
        one,
        parcels=[one.parcels[at] for at in rows],
        crops=[one.crops[at] for at in rows],
        scenes=[one.scenes[at] for at in rows],
        looked_at=[one.looked_at[at] for at in rows],
        values=one.values[chosen],
        valid_share=one.valid_share[chosen],
        water=one.water[chosen],
    )


def test_a_pass_without_looks_changes_nothing(simulated: Simulated, baselines: Baselines) -> None:
    empty = some_of(simulated.passes[30], np.zeros(0, dtype=np.int64))
    step = judge(State.start(RULE), empty, baselines, Beside.of(RULE))
    assert step.judgements is not None
    assert (step.judgements.score.size, step.changes, step.state.watch.places) == (0, [], {})


def test_a_state_is_not_continued_with_other_baselines(
    simulated: Simulated, baselines: Baselines
) -> None:
    state = folded(simulated.passes[:3], baselines)[-1].state
    other = fit_baselines(History.empty(MEASURES))
    with pytest.raises(ValueError, match="from its start"):
        judge(state, simulated.passes[3], other, Beside.of(RULE))
    next_season = replace(simulated.passes[3], season=simulated.passes[3].season + 1)
    after = judge(state, next_season, other, Beside.of(RULE)).state
    assert after.baseline == other.version
