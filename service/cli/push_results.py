"""What becomes of each product that is pushed, and how that is told."""

import json
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from enum import StrEnum
from typing import Any, Final

import typer

from service.errors import FurrowlightError
from service.products.product import Product


class Outcome(StrEnum):
    """What became of a product."""

    FOUND = "found"
    """Nothing was to be sent."""
    SENT = "sent"
    THERE = "already-there"
    INCOMPLETE = "incomplete"
    """Something is still to come; a watched folder is looked at again."""
    REFUSED = "refused"
    TIMED_OUT = "timed-out"
    UNAVAILABLE = "unavailable"
    NOT_ALLOWED = "not-allowed"
    FAULT = "fault"


# The first that occurs decides: the key stops everything; a fault is to be reported; what is
# unavailable is worth another run as it is; what is refused has to be mended.
EXITS: Final[Mapping[Outcome, int]] = {
    Outcome.NOT_ALLOWED: 5,
    Outcome.FAULT: 70,
    Outcome.UNAVAILABLE: 4,
    Outcome.REFUSED: 3,
    Outcome.TIMED_OUT: 6,
}
STOPPING: Final = (Outcome.NOT_ALLOWED, Outcome.UNAVAILABLE)
"""What is no fault of the product: the next one would fare alike."""
_REPORTED: Final = (
    "state",
    "parcels_in_footprint",
    "parcels_measured",
    "parcels_unseen",
    "alerts_opened",
)
_LISTED: Final = 20


@dataclass(frozen=True, slots=True, kw_only=True)
class Result:
    """What became of one product.

    Attributes
    ----------
    name
        The product's own name, as people know it.
    product
        What was found in it, None if it could not be read.
    detail
        Why, as a sentence; empty where there is nothing to say.
    faults
        The single things that the service found wrong.
    scene
        The scene as the service answered it last, None if it was not asked.
    """

    name: str
    outcome: Outcome
    product: Product[Any] | None = None
    detail: str = ""
    faults: Sequence[Mapping[str, str]] = ()
    scene: Mapping[str, Any] | None = None


def refused_by(
    error: FurrowlightError, outcome: Outcome, *, name: str, product: Product[Any] | None = None
) -> Result:
    """Return what an error says of a product."""
    faults = [fault.as_dict() for fault in error.faults]
    return Result(name=name, outcome=outcome, product=product, detail=error.detail, faults=faults)


def exit_code(results: Sequence[Result]) -> int:
    """Return what the command exits with: the code of the gravest outcome."""
    outcomes = {result.outcome for result in results}
    return next((code for outcome, code in EXITS.items() if outcome in outcomes), 0)


def printable(text: str) -> str:
    """Return a text that can't steer a terminal: names of downloaded files are not ours."""
    return "".join(letter if letter.isprintable() else "?" for letter in text)


def tell_found(name: str, product: Product[Any]) -> None:
    """Say on stderr what a product is, and which part is taken from what."""
    scene = product.scene
    told = [scene.get(member) for member in ("acquired_at", "platform", "tile")]
    baseline = scene.get("processing_baseline")
    told.append(f"baseline {baseline}" if baseline else None)
    _say(f"{name}: {product.kind}")
    _say(f"  {scene.get('ref')}: {', '.join(str(value) for value in told if value)}")
    ways = _grouped((found.by, f"{found.part} ← {found.source}") for found in product.found)
    for by, parts in ways.items():
        _say(f"  by {by}: {', '.join(parts)}")
    reasons = _grouped((reason, source) for source, reason in product.left_out.items())
    if reasons:
        left_out = (f"{', '.join(sources)} ({reason})" for reason, sources in reasons.items())
        _say(f"  left out: {'; '.join(left_out)}")


def _grouped(pairs: Iterable[tuple[str, str]]) -> dict[str, list[str]]:
    groups: dict[str, list[str]] = {}
    for group, member in pairs:
        groups.setdefault(group, []).append(member)
    return groups


def tell(result: Result, *, as_json: bool) -> None:
    """Say what became of a product: for people on stderr, with `as_json` a line on stdout."""
    if as_json:
        typer.echo(json.dumps(_as_dict(result), ensure_ascii=False))
    indent = "  " if result.product is not None else f"{result.name}: "
    state = f" ({result.scene['state']})" if result.scene else ""
    detail = f": {result.detail}" if result.detail else ""
    _say(f"{indent}{_words(result.outcome)}{state}{detail}")
    if len(result.faults) > 1:
        for fault in result.faults[:_LISTED]:
            _say(f"    {fault.get('pointer', '')}: {fault['detail']}")


def tell_report(result: Result) -> None:
    """Say what was measured of a scene that is done."""
    scene = result.scene
    if scene is None or scene.get("parcels_measured") is None:
        return
    unseen = scene["parcels_unseen"] or {}
    why = ", ".join(f"{count} {reason}" for reason, count in unseen.items() if count)
    _say(
        f"{scene['ref']}: {scene['state']}, {scene['parcels_measured']} parcels measured, "
        f"{sum(unseen.values())} unseen{f' ({why})' if why else ''}, "
        f"{scene['alerts_opened'] or 0} alerts opened"
    )


def tell_summary(results: Sequence[Result], *, untried: int = 0) -> None:
    """Say how many of each outcome there were, and list those that need somebody."""
    counts = Counter(result.outcome for result in results)
    told = [f"{count} {_words(outcome)}" for outcome, count in counts.items()]
    told += [f"{untried} not tried"] if untried else []
    _say(f"{', '.join(told) or 'nothing found'}.")
    for result in results:
        if result.outcome in EXITS and len(results) > 1:
            _say(f"  {result.name}: {_words(result.outcome)}: {result.detail}")


def _words(outcome: Outcome) -> str:
    return outcome.value.replace("-", " ")


def _say(line: str) -> None:
    typer.echo(printable(line), err=True)


def _as_dict(result: Result) -> dict[str, Any]:
    product, scene = result.product, result.scene
    return {
        "product": result.name,
        "outcome": result.outcome.value,
        "detail": result.detail or None,
        "errors": list(result.faults),
        "kind": product.kind if product else None,
        "scene": dict(product.scene) if product else None,
        "parts": {found.part: found.source for found in product.found} if product else None,
        "left_out": dict(product.left_out) if product else None,
        "report": {name: scene.get(name) for name in _REPORTED} if scene else None,
    }
