"""What the demo prints for a duty analyst: scenes, alerts beside the truth, the caution."""

from collections.abc import Iterator, Mapping, Sequence
from itertools import pairwise
from textwrap import fill
from typing import Any, Final

from service.alerts.alert import CAUTION
from service.cli.demo_receiver import Event
from service.cli.demo_truth import Befallen, ToldAlert, missed

WIDTH: Final = 96
LABEL_WIDTH: Final = 11
SCENE_HEADS: Final = f"{'scene':<20}{'measured':>9}{'unseen':>8}  why unseen"
_NAMES: Final = {"ndvi": "NDVI", "ndmi": "NDMI", "nbr": "NBR", "ndwi": "NDWI"}

Document = Mapping[str, Any]


def scene_line(scene: Document) -> str:
    """Return one scene's line: parcels measured, unseen, and by what reason."""
    unseen: Mapping[str, int] = scene["parcels_unseen"]
    why = ", ".join(f"{reason} {count}" for reason, count in unseen.items())
    measured = scene["parcels_measured"]
    return f"{scene['ref']:<20}{measured:>9}{sum(unseen.values()):>8}  {why}".rstrip()


def event_line(event: Event) -> str | None:
    """Return one line on an event of an alert; None for the others."""
    if not event.name.startswith("alert."):
        return None
    alert = event.data
    told = f"{alert['cause']['kind']}, severity {alert['severity']}, {alert['state']}"
    return f"  > {event.name:<14} {alert['parcel']} ({alert['crop']}): {told}"


def report(
    alerts: Sequence[ToldAlert], befallen: Sequence[Befallen], *, names: Mapping[str, str]
) -> str:
    """Return every alert with the truth beside it, what was missed, and the caution.

    `names` are those of the parcels, by ref.
    """
    told = [_alert_text(alert, names) for alert in alerts]
    untold = [_missed_text(truth, names) for truth in missed(befallen, alerts)]
    return "\n\n".join([*told, *untold, fill(f"Caution: {CAUTION}", WIDTH)])


def summary(alerts: Sequence[ToldAlert], befallen: Sequence[Befallen], *, received: int) -> str:
    """Return the outcome in a few words."""
    right = sum(
        alert.is_first and alert.truth is not None and alert.truth.cause == _kind(alert.opened)
        for alert in alerts
    )
    accused = {alert.opened["parcel"] for alert in alerts if alert.truth is None}
    return fill(
        f"Of {len(befallen)} things that befell the land {right} were told with the right cause, "
        f"{len(missed(befallen, alerts))} missed; {len(accused)} other parcels were accused. "
        f"{received} signed messages arrived.",
        WIDTH,
    )


def _kind(alert: Document) -> str:
    return str(alert["cause"]["kind"])


def _alert_text(alert: ToldAlert, names: Mapping[str, str]) -> str:
    at = alert.opened
    others = ", ".join(at["cause"]["others"])
    head = (
        f"{at['parcel']} {names.get(at['parcel'], '')}, {at['crop']}, {at['holding']}: "
        f"severity {at['severity']}"
    )
    lines = [
        head,
        _row("opened", f"{at['opened_at'][:10]}, departing since {at['first_departure_at'][:10]}"),
        _row("measure", _measure(at)),
        _row("cause", f"{_kind(at)}: {at['cause']['because']}"),
        *([_row("or else", others)] if others else []),
        *(_row("later", change) for change in _changes(alert)),
        _row("truth", _truth(alert)),
    ]
    return "\n".join(lines)


def _row(label: str, text: str) -> str:
    indent = " " * (2 + LABEL_WIDTH)
    return fill(text, WIDTH, initial_indent=f"  {label:<{LABEL_WIDTH}}", subsequent_indent=indent)


def _measure(alert: Document) -> str:
    name = _NAMES.get(alert["index"], alert["index"])
    return (
        f"{name} {alert['observed']:.2f} observed, {alert['expected']:.2f} expected; "
        f"it departs by {abs(alert['departure']):.1f} spreads ({alert['direction']})"
    )


def _changes(alert: ToldAlert) -> Iterator[str]:
    """Yield what the receiver was told after the opening, a line per message."""
    for before, after in pairwise([alert.opened, *alert.later]):
        told = [
            *([f"cause revised to {_kind(after)}"] if _kind(before) != _kind(after) else []),
            *([f"severity {after['severity']}"] if before["severity"] != after["severity"] else []),
            *([after["state"]] if before["state"] != after["state"] else []),
        ]
        if told:
            yield f"{(after['closed_at'] or after['last_observed_at'])[:10]} {', '.join(told)}"


def _truth(alert: ToldAlert) -> str:
    truth = alert.truth
    if truth is None:
        return "WRONG: nothing had befallen this parcel"
    if not alert.is_first:
        verdict = "opened again"
    else:
        verdict = "right" if _kind(alert.opened) == truth.cause else "WRONG CAUSE"
    return f"{verdict}: {_befell(truth)}, first shown by {truth.first_scene}"


def _befell(truth: Befallen) -> str:
    return f"{truth.title} from {truth.started_on} ({truth.cause})"


def _missed_text(truth: Befallen, names: Mapping[str, str]) -> str:
    head = f"{truth.parcel} {names.get(truth.parcel, '')}: no alert"
    return "\n".join([head, _row("truth", f"MISSED: {_befell(truth)}")])
