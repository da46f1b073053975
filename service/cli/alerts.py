"""Alerts at a terminal: what the duty analyst lists, reads and closes."""

import json
from typing import Annotated, Any

import typer
from rich.box import SIMPLE
from rich.console import Console
from rich.markup import escape
from rich.table import Column, Table

from service.cli.client import call, connect_from_environment

app = typer.Typer(no_args_is_help=True, help="List, read and close alerts of a running service.")
_Json = Annotated[bool, typer.Option("--json", help="One JSON object a line on stdout.")]


@app.command("list")
def list_all(
    *,
    state: Annotated[
        str, typer.Option(help="Comma-separated: open,acknowledged,closed,retracted.")
    ] = "open,acknowledged",
    holding: Annotated[str | None, typer.Option(help="One holding only.")] = None,
    parcel: Annotated[str | None, typer.Option(help="One parcel only.")] = None,
    as_json: _Json = False,
) -> None:
    """List alerts, the last opened first: a table on a terminal, else tab-separated lines."""
    asked = {"state": state, "holding": holding, "parcel": parcel, "limit": 1000}
    params = {name: value for name, value in asked.items() if value is not None}
    with connect_from_environment() as client:
        alerts = call(client, "GET", "/v1/alerts", params=params)["alerts"]
    if as_json:
        for alert in alerts:
            typer.echo(json.dumps(alert, ensure_ascii=False))
        return
    console = Console()
    if not console.is_terminal:
        for alert in alerts:
            typer.echo("\t".join(_row(alert)))
        return
    console.print(_table_of(alerts) if alerts else "No alerts.")


def _table_of(alerts: list[dict[str, Any]]) -> Table:
    """Return the same for people: two lines a cell, so that it fits a narrow terminal."""
    # An id is needed whole, to show or close its alert.
    table = Table(
        Column("id", no_wrap=True),
        Column("parcel, crop", overflow="fold"),
        Column("severity, cause", no_wrap=True),
        box=SIMPLE,
        pad_edge=False,
    )
    for alert in alerts:
        alert_id, parcel, crop, opened, severity, cause, figures, state = map(escape, _row(alert))
        table.add_row(
            f"{alert_id}\n{opened}, {state}",
            f"{parcel}\n{crop}",
            f"{severity}, {cause}\n{figures}",
        )
    return table


def _row(alert: dict[str, Any]) -> list[str]:
    figures = f"{alert['index']} {alert['observed']:.2f}, expected {alert['expected']:.2f}"
    return [
        alert["id"],
        alert["parcel"],
        alert["crop"],
        alert["opened_at"][:10],
        alert["severity"],
        alert["cause"]["kind"],
        figures,
        alert["state"],
    ]


@app.command()
def show(
    alert_id: Annotated[str, typer.Argument(help="The alert's id.")], *, as_json: _Json = False
) -> None:
    """Show an alert with its evidence and history."""
    with connect_from_environment() as client:
        alert = call(client, "GET", f"/v1/alerts/{alert_id}")
    if as_json:
        typer.echo(json.dumps(alert, ensure_ascii=False))
        return
    typer.echo(_told(alert))


def _told(alert: dict[str, Any]) -> str:
    others = ", ".join(alert["cause"]["others"]) or "none"
    lines = [
        f"{alert['parcel']} ({alert['crop']}, holding {alert['holding'] or 'none'})",
        f"  {alert['state']}, severity {alert['severity']}, opened {alert['opened_at']}, "
        f"departing since {alert['first_departure_at']}, last look {alert['last_observed_at']}",
        f"  {alert['index']} {alert['observed']:.3f}, expected {alert['expected']:.3f}, "
        f"{abs(alert['departure']):.1f} spreads {alert['direction']}; score {alert['score']:.1f} "
        f"over {alert['looks']} looks, basis {alert['basis']}, {_odds(alert['chance'])}",
        f"  likely cause: {alert['cause']['kind']}, because {alert['cause']['because']}",
        f"  next candidates: {others}",
        f"  scenes: {', '.join(alert['scenes'])}",
        *(f"  diary: {entry}" for entry in alert["diary"]),
        *(_change(change) for change in alert["history"]),
        f"  {alert['caution']}",
    ]
    return "\n".join(lines)


def _odds(chance: float | None) -> str:
    return "odds unknown" if chance is None else f"odds of a false alert {chance:.2f}"


def _change(change: dict[str, Any]) -> str:
    who = f" by {change['who']}" if change["who"] else ""
    verdict = f", verdict {change['verdict']}" if change["verdict"] else ""
    note = f": {change['note']}" if change["note"] else ""
    return f"  {change['recorded_at']} {change['kind']}{_what(change['what'])}{who}{verdict}{note}"


def _what(what: dict[str, Any]) -> str:
    """Return what changed, from what to what, and why where that is said."""
    moved = [
        f"{name} from {value[0]} to {value[1]}" if isinstance(value, list) else str(value)
        for name, value in what.items()
    ]
    return f" ({'; '.join(moved)})" if moved else ""


@app.command()
def close(
    alert_id: Annotated[str, typer.Argument(help="The alert's id.")],
    verdict: Annotated[str, typer.Option(help="confirmed, expected, false_alarm or bad_data.")],
    note: Annotated[str | None, typer.Option(help="What you found.")] = None,
) -> None:
    """Close an alert with a verdict; its parcel stays quiet until it has returned."""
    body = {"verdict": verdict} | ({"note": note} if note else {})
    with connect_from_environment() as client:
        seen = call(client, "GET", f"/v1/alerts/{alert_id}")
        tag = f'"{seen["id"]}-{seen["revision"]}"'
        closed = call(
            client,
            "POST",
            f"/v1/alerts/{alert_id}/close",
            json=body,
            headers={"If-Match": tag},
        )
    typer.echo(f"{closed['parcel']}: {closed['state']} as {closed['verdict']}.", err=True)
