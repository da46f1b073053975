"""Rules as they stand: built in, changed by an operator, or of an operator's own."""

import hashlib
import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any, Final

from sqlalchemy import select
from sqlalchemy.orm import Session

from service.alerts.rules import RULES, Direction, Rule, Watched
from service.errors import NotFound
from service.store.alert_tables import RuleRow

DEFAULT: Final = "default"
_SETS = ("crops", "holdings", "months")
_PLAIN = (
    "title",
    "threshold",
    "single_look_threshold",
    "looks_needed",
    "looks_window",
    "min_valid",
    "enabled",
)


@dataclass(frozen=True, slots=True, kw_only=True)
class StandingRule:
    """A rule with how often it was put, and by whom last; a built-in one as shipped has 0."""

    rule: Rule
    revision: int
    who: str | None
    changed_at: datetime | None

    @property
    def is_built_in(self) -> bool:
        """Whether it is there without anybody putting it."""
        return self.rule.id in RULES


def definition_of(rule: Rule) -> dict[str, Any]:
    """Return a rule as plain members, fit for JSON, that `rule_from` reads."""
    limits = {name: getattr(rule, name) for name in _SETS}
    return {
        **{name: getattr(rule, name) for name in _PLAIN},
        "measures": [
            {"index": each.index, "direction": each.direction.value} for each in rule.measures
        ],
        **{name: None if held is None else sorted(held) for name, held in limits.items()},
    }


def rule_from(rule_id: str, definition: Mapping[str, Any]) -> Rule:
    """Return the rule that `definition_of` wrote."""
    limits: dict[str, Any] = {
        name: None if definition[name] is None else frozenset(definition[name]) for name in _SETS
    }
    return Rule(
        id=rule_id,
        measures=tuple(
            Watched(index=each["index"], direction=Direction(each["direction"]))
            for each in definition["measures"]
        ),
        **{name: definition[name] for name in _PLAIN},
        **limits,
    )


def standing_rules(session: Session) -> list[StandingRule]:
    """Return all rules, the built-in ones first."""
    rows = {row.id: row for row in session.scalars(select(RuleRow).order_by(RuleRow.id))}
    built_in = [
        _standing(rows.pop(rule_id)) if rule_id in rows else _as_shipped(rule)
        for rule_id, rule in RULES.items()
    ]
    return [*built_in, *(_standing(row) for row in rows.values())]


def _standing(row: RuleRow) -> StandingRule:
    return StandingRule(
        rule=rule_from(row.id, row.definition),
        revision=row.revision,
        who=row.who,
        changed_at=row.changed_at,
    )


def _as_shipped(rule: Rule) -> StandingRule:
    return StandingRule(rule=rule, revision=0, who=None, changed_at=None)


def find_rule(session: Session, rule_id: str) -> StandingRule | None:
    """Return a rule as it stands, None if there is none."""
    row = session.get(RuleRow, rule_id)
    if row is not None:
        return _standing(row)
    return _as_shipped(RULES[rule_id]) if rule_id in RULES else None


def get_rule(session: Session, rule_id: str) -> StandingRule:
    """Return a rule as it stands.

    Raises
    ------
    NotFound
        There is none.
    """
    found = find_rule(session, rule_id)
    if found is None:
        raise NotFound("rule-not-found", "There is no rule with this id.")
    return found


def put_rule(session: Session, rule: Rule, *, who: str, at: datetime) -> StandingRule:
    """Make a rule stand as it was put."""
    row = session.get(RuleRow, rule.id)
    if row is None:
        row = RuleRow(id=rule.id, definition={}, revision=0, who=who, changed_at=at)
        session.add(row)
    row.definition = definition_of(rule)
    row.revision += 1
    row.who, row.changed_at = who, at
    session.flush()
    return _standing(row)


def judged_rules(session: Session) -> list[Rule]:
    """Return the rules that are judged by, the default one first.

    That one is always among them, switched off or not, since what is told of a look is by it.
    """
    rules = [standing.rule for standing in standing_rules(session)]
    return [rule for rule in rules if rule.enabled or rule.id == DEFAULT]


def digest_of(rules: Sequence[Rule]) -> str:
    """Return a hash of what rules say."""
    told = [(rule.id, definition_of(rule)) for rule in rules]
    return hashlib.sha256(json.dumps(told, sort_keys=True).encode()).hexdigest()
