"""Judging with what is known beside the looks: tuning, rules' limits, diary, regions, no label."""

from collections.abc import Sequence
from dataclasses import replace
from datetime import date, timedelta
from functools import cache

import numpy as np
import pytest

from service.alerts.alert import Alert, ChangeKind
from service.alerts.diary import DiaryEntry, DiaryKind
from service.alerts.notices import NoticeState
from service.alerts.rules import RULES, Rule
from service.assess import Prepared, State, Step, alerts_after, fold, prepare
from service.seasons.departure import WORSE
from service.seasons.judgement import OnePass, Unjudged
from tests.scored_looks import is_same
from tests.simulated_seasons import MEASURES, Simulated, simulate

RULE = RULES["default"]


@cache
def made(seed: int = 1) -> tuple[Simulated, Prepared]:
    simulated = simulate(seed)
    return simulated, prepare(simulated.history, [RULE])


def folded(
    passes: Sequence[OnePass],
    prepared: Prepared,
    rule: Rule = RULE,
    *,
    diary: Sequence[DiaryEntry] = (),
    holdings: dict[str, str | None] | None = None,
) -> list[Step]:
    return list(
        fold(
            State.start(rule),
            passes,
            baselines=prepared.baselines,
            rule=rule,
            tuned=prepared.tuned.get(rule.id),
            diary=diary,
            holdings=holdings or {},
        )
    )


def opened(steps: Sequence[Step]) -> list[Alert]:
    return [c.alert for step in steps for c in step.changes if c.kind is ChangeKind.OPENED]


def test_the_measures_that_rank_looks_are_those_of_the_default_rule() -> None:
    assert dict(WORSE) == dict(RULE.signs)


def test_seasons_without_events_have_as_many_small_p_values_as_they_should() -> None:
    found = []
    for seed in (3, 4, 5, 6):
        simulated = simulate(seed, per_crop=12, seasons=5, with_events=False)
        steps = folded(simulated.passes, prepare(simulated.history, [RULE]))
        found += [step.judgements.p for step in steps if step.judgements is not None]
    p = np.concatenate(found)
    p = p[np.isfinite(p)]
    assert p.size > 5_000
    # A nominal 1 %, with what its sampling error and the new season's own weather allow.
    assert 0.005 <= np.mean(p <= 0.01) <= 0.02


def test_a_rule_is_judged_by_the_threshold_that_the_past_gives() -> None:
    simulated, prepared = made()
    tuned = prepared.tuned["default"]
    assert tuned.threshold is not None
    assert tuned.seasons == (2021, 2022, 2023)
    fixed = replace(RULE, threshold=tuned.threshold)
    auto = folded(simulated.passes, prepared)
    by_hand = folded(simulated.passes, prepared, fixed)
    assert [a.id for a in opened(auto)] == [a.id for a in opened(by_hand)]
    for alert in opened(auto):
        assert alert.chance is not None
        assert 0.0 < alert.chance < 1.0
        assert alert.strength >= tuned.threshold


def test_an_event_has_a_small_p_value_and_a_small_chance_of_being_false() -> None:
    simulated, prepared = made()
    parcel = next(event.parcel for event in simulated.events if event.kind == "burn")
    alert = next(a for a in opened(folded(simulated.passes, prepared)) if a.parcel == parcel)
    assert alert.p is not None
    assert alert.p < 0.001
    assert alert.chance is not None
    assert alert.chance < 0.2


def test_what_is_prepared_is_kept_in_arrays_and_read_again() -> None:
    simulated, prepared = made()
    read = Prepared.from_arrays(prepared.to_arrays())
    assert read.baselines.version == prepared.baselines.version
    kept, again = (folded(simulated.passes, each) for each in (prepared, read))
    assert [step.changes for step in again] == [step.changes for step in kept]
    assert is_same(again[-1].state.to_arrays(), kept[-1].state.to_arrays())


def test_a_rule_opens_alerts_of_its_crops_holdings_and_months_alone() -> None:
    simulated, prepared = made()
    everywhere = {alert.id: alert for alert in opened(folded(simulated.passes, prepared))}
    crop = next(iter(everywhere.values())).crop
    holdings: dict[str, str | None] = {
        parcel: "north" if parcel < "m" else "south" for parcel in simulated.history.parcels
    }
    months = {alert.opened_at.month for alert in everywhere.values()}
    some = frozenset(sorted(months)[:1])
    for limited, is_meant in (
        (replace(RULE, crops=frozenset({crop})), lambda alert: alert.crop == crop),
        (replace(RULE, holdings=frozenset({"south"})), lambda alert: alert.parcel >= "m"),
    ):
        found = opened(folded(simulated.passes, prepared, limited, holdings=holdings))
        wanted = [alert.id for alert in everywhere.values() if is_meant(alert)]
        assert 0 < len(wanted) < len(everywhere)
        assert [alert.id for alert in found] == wanted
    by_month = opened(folded(simulated.passes, prepared, replace(RULE, months=some)))
    assert by_month
    assert {alert.opened_at.month for alert in by_month} == some


def test_a_rule_is_tuned_on_its_own_crops_months_and_holdings() -> None:
    simulated, prepared = made()
    south = {parcel: "south" for parcel in simulated.history.parcels if parcel >= "m"}
    rules = [
        replace(RULE, id="crops", crops=frozenset({"maize"})),
        replace(RULE, id="south", holdings=frozenset({"south"})),
        replace(RULE, id="spring", months=frozenset({4, 5})),
    ]
    tuned = prepare(simulated.history, rules, south).tuned
    whole = prepared.tuned["default"].parcel_weeks
    weeks = {name: each.parcel_weeks for name, each in tuned.items()}
    # A quarter of the parcels, too few for a threshold of their own; two months of twelve.
    assert weeks["crops"] == pytest.approx(whole / 4, rel=0.05)
    assert weeks["south"] == pytest.approx(whole / 4, rel=0.05)
    assert weeks["spring"] < 0.2 * whole


def test_the_diary_is_an_input_of_the_fold() -> None:
    simulated, prepared = made()
    event = next(each for each in simulated.events if each.kind == "removal")
    first = simulated.passes[0]
    cut_on = (first.acquired_at + timedelta(days=event.day - first.day)).date()
    entry = DiaryEntry(kind=DiaryKind.HARVEST, parcel=event.parcel, first=cut_on, last=cut_on)
    plain = folded(simulated.passes, prepared)
    explained = folded(simulated.passes, prepared, diary=[entry])
    held = [each for step in explained for each in step.explained]
    assert [(each.parcel, each.cause) for each in held] == [(event.parcel, "removal")]
    assert held[0].alert_id in {alert.id for alert in opened(plain)}
    others = [alert.id for alert in opened(plain) if alert.parcel != event.parcel]
    assert [a.id for a in opened(explained) if a.parcel != event.parcel] == others
    late = replace(entry, first=date(2030, 1, 1), last=date(2030, 1, 1))
    assert alerts_after(folded(simulated.passes, prepared, diary=[late])) == alerts_after(plain)


def dried(one: OnePass, since: int) -> OnePass:
    """Return a pass in which every parcel is drier from a day of season on."""
    if one.day < since:
        return one
    values = one.values.copy()
    nir, swir16 = values[:, MEASURES.index("nir")], values[:, MEASURES.index("swir16")] + 0.04
    values[:, MEASURES.index("swir16")] = swir16
    values[:, MEASURES.index("ndmi")] = (nir - swir16) / (nir + swir16)
    return replace(one, values=values)


def test_a_dry_spell_is_one_notice_and_no_flood_of_alerts() -> None:
    simulated = simulate(5, per_crop=16, with_events=False)
    prepared = prepare(simulated.history, [RULE])
    calm = folded(simulated.passes, prepared)
    dry = folded([dried(one, 240) for one in simulated.passes], prepared)
    assert [notice for step in calm for notice in step.notices] == []
    notices = [notice for step in dry for notice in step.notices]
    first = notices[0]
    assert (first.state, first.kind, first.measure) == (NoticeState.OPEN, "dry_spell", "ndmi")
    passes = {one.acquired_at: one.day for one in simulated.passes}
    assert 240 <= passes[first.opened_at] <= 270
    assert len(first.crops) >= 2
    # 64 parcels are drier; their crops are, too.
    assert len(opened(dry)) <= len(opened(calm)) + 4


def unlabelled(passes: Sequence[OnePass], parcel: str) -> list[OnePass]:
    """Return passes in which a parcel carries no crop."""
    return [
        replace(
            one,
            crops=[
                None if each == parcel else crop
                for each, crop in zip(one.parcels, one.crops, strict=True)
            ],
        )
        for one in passes
    ]


def test_a_parcel_without_a_label_is_compared_with_its_own_past() -> None:
    found = 0
    for seed in (1, 2, 3, 4):
        simulated = simulate(seed)
        event = next(each for each in simulated.events if each.kind == "flood")
        history = replace(simulated.history, without_label=frozenset({event.parcel}))
        prepared = prepare(history, [RULE])
        steps = folded(unlabelled(simulated.passes, event.parcel), prepared)
        alerts = [alert for alert in opened(steps) if alert.parcel == event.parcel]
        onset = simulated.passes[0].acquired_at + timedelta(
            days=event.day - simulated.passes[0].day
        )
        found += any(alert.opened_at >= onset for alert in alerts)
        for alert in alerts:
            assert (alert.low_power, alert.crop) == (True, "")
            assert (
                alert.score
                >= 2 * RULE.at(prepared.tuned["default"].threshold or 3.0).thresholds.look
            )
        assert not any(a.low_power for a in opened(steps) if a.parcel != event.parcel)
    assert found >= 3


def test_without_label_and_past_a_parcel_is_not_judged() -> None:
    simulated, prepared = made()
    parcel = simulated.passes[30].parcels[0]
    steps = folded(unlabelled([simulated.passes[30]], parcel), prepared)
    judgements = steps[0].judgements
    assert judgements is not None
    assert judgements.unjudged[0] is Unjudged.NO_CROP
    assert np.isnan(judgements.p[0])


def test_several_rules_are_folded_apart() -> None:
    simulated, _ = made()
    wet = replace(
        RULE, id="wet", measures=tuple(each for each in RULE.measures if each.index == "ndwi")
    )
    prepared = prepare(simulated.history, [RULE, wet])
    both = {rule.id: opened(folded(simulated.passes, prepared, rule)) for rule in (RULE, wet)}
    assert {alert.rule for alert in both["wet"]} == {"wet"}
    assert {alert.index for alert in both["wet"]} == {"ndwi"}
    alone = opened(folded(simulated.passes, made()[1]))
    assert [alert.id for alert in both["default"]] == [alert.id for alert in alone]
