"""Rules, and every entry among them."""

import pytest

from service.alerts.rules import RULES, Direction, Rule, Severities

BETTER_HIGH = {"ndvi", "ndmi", "nbr", "nir"}


@pytest.mark.parametrize("rule", RULES.values(), ids=RULES)
def test_every_rule_can_open_and_close(rule: Rule) -> None:
    assert RULES[rule.id] is rule
    assert rule.measures
    assert 1 <= rule.looks_needed <= rule.looks_window
    for thresholds in (rule.thresholds, rule.new_crop, rule.low_power):
        assert rule.close_below < thresholds.cause < thresholds.look < thresholds.single_look


@pytest.mark.parametrize("rule", RULES.values(), ids=RULES)
def test_every_rule_watches_the_worse_side(rule: Rule) -> None:
    for watched in rule.measures:
        is_below = watched.direction is Direction.BELOW
        assert is_below == (watched.index in BETTER_HIGH)
        assert rule.signs[watched.index] == (-1.0 if is_below else 1.0)


@pytest.mark.parametrize(
    ("score", "severity"), [(4.49, "low"), (4.5, "medium"), (8.99, "medium"), (9.0, "high")]
)
def test_severity_goes_by_score(score: float, severity: str) -> None:
    assert Severities().of(score) == severity


def test_the_bounds_of_severity_can_be_set() -> None:
    assert Severities(medium=2.0, high=3.0).of(3.5) == "high"
