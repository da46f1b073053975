"""The diary at a terminal: what is known to have happened on a parcel."""

from typing import Annotated, Any
from urllib.parse import quote

import typer

from service.cli.client import call, connect_from_environment

app = typer.Typer(no_args_is_help=True, help="Write down what explains a change of a parcel.")
_Parcel = Annotated[str, typer.Argument(help="The parcel's ref.")]


def _address(parcel: str) -> str:
    return f"/v1/parcels/{quote(parcel, safe='')}/diary"


@app.command()
def add(
    parcel: _Parcel,
    kind: Annotated[
        str,
        typer.Option(
            help="sowing, harvest, mowing, grazing, irrigation, ploughing, burning or other."
        ),
    ],
    on: Annotated[str, typer.Option(help="The day, YYYY-MM-DD.")],
    until: Annotated[str | None, typer.Option(help="The last day, if it took several.")] = None,
    note: Annotated[str | None, typer.Option(help="What was done.")] = None,
) -> None:
    """Write an entry; its id is all that is printed on stdout."""
    asked = {"kind": kind, "on": on, "until": until, "note": note}
    sent = {name: value for name, value in asked.items() if value is not None}
    with connect_from_environment() as client:
        made = call(client, "POST", _address(parcel), json=sent)
    typer.echo(made["id"])


@app.command("list")
def list_all(parcel: _Parcel) -> None:
    """List a parcel's entries, and the departures that something explains."""
    with connect_from_environment() as client:
        told = call(client, "GET", _address(parcel), params={"limit": 1000})
    for entry in told["diary"]:
        typer.echo("\t".join(_row(entry)))
    for each in told["explained"]:
        when = each["departed_at"][:10]
        typer.echo(f"{when}: {each['cause']}, explained by {each['because']}", err=True)


def _row(entry: dict[str, Any]) -> list[str]:
    note = (entry["note"] or "").replace("\n", " ").replace("\t", " ")
    return [entry["id"], entry["kind"], entry["on"], entry["until"], entry["who"], note]


@app.command()
def remove(parcel: _Parcel, entry: Annotated[str, typer.Argument(help="The entry's id.")]) -> None:
    """Strike an entry out."""
    with connect_from_environment() as client:
        gone = call(client, "DELETE", f"{_address(parcel)}/{quote(entry, safe='')}")
    typer.echo(f"{parcel}: {gone['kind']} {gone['on']} struck out.", err=True)
