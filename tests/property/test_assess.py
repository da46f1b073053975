"""Properties of judging: order, repetition, missing measures, lasting offsets."""

from dataclasses import replace
from functools import cache

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from service.alerts.rules import RULES, Rule
from service.assess import Beside, State, Step, fold, judge
from service.seasons.baseline import Baselines
from service.seasons.fitting import fit_baselines
from service.seasons.history import History
from service.seasons.judgement import Judgements, OnePass
from service.seasons.offsets import SHRINKAGE
from tests.scored_looks import is_same
from tests.simulated_seasons import MEASURES, Simulated, simulate

RULE = RULES["default"]


@cache
def season() -> tuple[Simulated, Baselines]:
    """Return a small season, and the baselines before it."""
    simulated = simulate(7, per_crop=6, seasons=3, every_days=8)
    return simulated, fit_baselines(simulated.history)


def folded(passes: list[OnePass], baselines: Baselines, state: State | None = None) -> list[Step]:
    return list(fold(state or State.start(RULE), passes, baselines=baselines, rule=RULE))


def judged(one: OnePass, baselines: Baselines, rule: Rule) -> Judgements:
    found = judge(State.start(rule), one, baselines, Beside.of(rule)).judgements
    assert found is not None
    return found


def in_order(one: OnePass, order: np.ndarray) -> OnePass:
    return replace(
        one,
        parcels=[one.parcels[at] for at in order],
        crops=[one.crops[at] for at in order],
        scenes=[one.scenes[at] for at in order],
        looked_at=[one.looked_at[at] for at in order],
        values=one.values[order],
        valid_share=one.valid_share[order],
        water=one.water[order],
    )


@settings(max_examples=8)
@given(seed=st.integers(0, 10_000))
def test_neither_the_order_of_passes_nor_of_parcels_matters(seed: int) -> None:
    simulated, baselines = season()
    rng = np.random.default_rng(seed)
    mixed = [in_order(one, rng.permutation(len(one.parcels))) for one in simulated.passes]
    rng.shuffle(mixed)
    expected, found = folded(simulated.passes, baselines), folded(mixed, baselines)
    assert is_same(found[-1].state.to_arrays(), expected[-1].state.to_arrays())
    assert [step.changes for step in found] == [step.changes for step in expected]


@settings(max_examples=8)
@given(share=st.floats(0, 1))
def test_going_on_from_a_kept_state_is_going_on(share: float) -> None:
    simulated, baselines = season()
    cut = int(share * (len(simulated.passes) - 1)) + 1
    first = folded(simulated.passes[:cut], baselines)
    kept = State.from_arrays(first[-1].state.to_arrays())
    rest = folded(simulated.passes[cut:], baselines, kept)
    whole = folded(simulated.passes, baselines)
    assert [step.changes for step in [*first, *rest]] == [step.changes for step in whole]
    assert is_same([*first, *rest][-1].state.to_arrays(), whole[-1].state.to_arrays())


@settings(max_examples=20)
@given(
    at=st.integers(0, 40),
    unknown=st.sets(st.sampled_from(["ndvi", "ndmi", "nbr", "ndwi"]), min_size=1, max_size=3),
)
def test_an_unknown_measure_is_as_if_it_were_not_watched(at: int, unknown: set[str]) -> None:
    simulated, baselines = season()
    one = simulated.passes[at % len(simulated.passes)]
    values = one.values.copy()
    for measure in unknown:
        values[:, MEASURES.index(measure)] = np.nan
    fewer = replace(
        RULE, measures=tuple(each for each in RULE.measures if each.index not in unknown)
    )
    without = judged(replace(one, values=values), baselines, RULE)
    narrow = judged(one, baselines, fewer)
    np.testing.assert_array_equal(without.score, narrow.score)
    assert set(without.missing) == unknown


def flat_past(step: float) -> History:
    """Three seasons in which eleven parcels lie apart by fixed steps, `z` above all others."""
    names = [*"abcdefghij", "z"]
    days, seasons = range(0, 360, 5), (2021, 2022, 2023)
    rng = np.random.default_rng(1)
    rows = [(season, day, name) for season in seasons for day in days for name in names]
    noise = rng.normal(0, 0.02, len(rows))
    level = {name: 0.02 * at for at, name in enumerate(names)} | {"z": 0.21 + step}
    values = [0.4 + level[name] + noise[at] for at, (_, _, name) in enumerate(rows)]
    return History.of_rows(
        parcels=[name for _, _, name in rows],
        crops=["barley"] * len(rows),
        seasons=[season for season, _, _ in rows],
        days=[day for _, day, _ in rows],
        passes=[1000 * season + day for season, day, _ in rows],
        measures=["ndvi"],
        values=np.array(values)[:, None],
    )


@settings(max_examples=20)
@given(step=st.floats(0.0, 0.05), day=st.integers(40, 320))
def test_a_lasting_offset_of_a_parcel_changes_its_departure_by_the_shrinkage_alone(
    step: float, day: int
) -> None:
    # It is above the others with and without the step, so the cohort's medians stay, and
    # near enough not to be winsorised.
    departures = []
    for each in (0.0, step):
        baselines = fit_baselines(flat_past(each))
        names = [*"abcdefghij", "z"]
        values = [0.4 + 0.02 * at for at in range(10)] + [0.6 + each]
        found = baselines.own.offsets_on(day, baselines.own.codes(["z"], ["barley"]))[1][0, 0]
        one = OnePass(
            acquired_at=season()[0].passes[0].acquired_at,
            season=2024,
            day=day,
            parcels=names,
            crops=["barley"] * 11,
            scenes=["s"] * 11,
            looked_at=[season()[0].passes[0].acquired_at] * 11,
            measures=["ndvi"],
            values=np.array(values)[:, None],
            valid_share=np.ones(11),
            water=np.zeros(11),
        )
        judgements = judged(one, baselines, RULE)
        departures.append(judgements.shortfall[10, 0])
    left = step * SHRINKAGE / (found + SHRINKAGE)
    # Residuals are kept in float32.
    assert abs((departures[1] - departures[0]) - left) <= 1e-6
