"""Rules at a terminal: how they do on the past, and what another one would have raised."""

import json
from pathlib import Path
from typing import Annotated, Any

import typer

from service.cli.client import call, connect_from_environment
from service.errors import RejectedInput

app = typer.Typer(no_args_is_help=True, help="Look at rules, and rehearse them on the past.")


@app.command("list")
def list_all() -> None:
    """List rules with their thresholds and how they do on finished seasons."""
    with connect_from_environment() as client:
        rules = call(client, "GET", "/v1/rules")["rules"]
    for rule in rules:
        state = "on" if rule["enabled"] else "off"
        typer.echo(f"{rule['id']}\t{state}\t{rule['threshold']}\t{_past(rule['tuning'])}")


def _past(tuning: list[dict[str, Any]]) -> str:
    told = [
        f"{each['season_start']}: {each['threshold']:g} gives {each['replayed_rate']:.2f} a "
        f"1,000 parcel-weeks over {each['seasons']} seasons"
        for each in tuning
        if each["threshold"] is not None
    ]
    return "; ".join(told) or "too little past"


@app.command()
def rehearse(
    rule: Annotated[str, typer.Argument(help="A rule's id, or a JSON file with one as it is put.")],
    begin: Annotated[str, typer.Option("--from", help="First day, YYYY-MM-DD.")],
    end: Annotated[str, typer.Option("--to", help="The day behind the last one.")],
) -> None:
    """Say what a rule would have raised: alarms by crop and month, tab-separated."""
    sent = {"rule": _rule(rule), "from": begin, "to": end}
    with connect_from_environment() as client:
        told = call(client, "POST", "/v1/rules/rehearse", json=sent, headers={"Prefer": "wait=60"})
        while told.get("state") in ("queued", "running"):
            address = f"/v1/jobs/{told['id']}"
            told = call(client, "GET", address, headers={"Prefer": "wait=60"})
    if told.get("state") == "failed":
        raise RejectedInput("invalid-input", told["failure"]["detail"])
    found = told.get("result") or told
    for row in found["by_crop_and_month"]:
        said = ", ".join(f"{count} {name}" for name, count in row["verdicts"].items() if count)
        typer.echo(f"{row['crop'] or ''}\t{row['month']}\t{row['alarms']}\t{said}")
    rate = found["alarms_per_1000_parcel_weeks"]
    shown = "nothing was watched" if rate is None else f"{rate:.2f} a 1,000 parcel-weeks"
    typer.echo(
        f"{found['alarms_total']} alarms, {shown}, {found['held_back']} held back.", err=True
    )


def _rule(named: str) -> object:
    """Return a rule's id, or the rule that a file holds."""
    path = Path(named)
    if path.suffix != ".json":
        return named
    try:
        return json.loads(path.read_text("utf-8"))
    except (OSError, ValueError) as error:
        raise RejectedInput("malformed-json", "The file can't be read as JSON.") from error
