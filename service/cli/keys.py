"""Keys from the operator's terminal, also beside a running service."""

from pathlib import Path
from typing import Annotated

import typer
from rich.console import Console
from rich.table import Column, Table
from rich.text import Text

from service.api.wire import written
from service.app import open_resources
from service.cli.serve import settings_for
from service.clock import now
from service.errors import RejectedInput
from service.jobs.resources import Resources
from service.store.keys import Scope, add_key, list_keys, revoke_key

app = typer.Typer(no_args_is_help=True, help="Make, list and revoke API keys.")
_Data = Annotated[Path | None, typer.Option("--data", help="Data folder of the service.")]


def _resources(data: Path | None) -> Resources:
    return open_resources(settings_for(data))


def _names(text: str) -> list[str]:
    return [name.strip() for name in text.split(",") if name.strip()]


@app.command()
def create(
    label: Annotated[str, typer.Option(help="What the key is for.")],
    scopes: Annotated[str, typer.Option(help="Comma-separated: read,ingest,triage,manage,admin.")],
    data: _Data = None,
    holdings: Annotated[
        str, typer.Option(help="Comma-separated holdings that the key is limited to.")
    ] = "",
) -> None:
    """Make a key; its secret alone is printed on stdout, this once."""
    named = _names(scopes)
    unknown = sorted(set(named) - set(Scope))
    if unknown or not named:
        raise RejectedInput("invalid-input", f"Scopes are {', '.join(Scope)}.")
    with _resources(data).sessions.writing() as session:
        _, secret = add_key(
            session,
            label=label,
            scopes=named,
            holdings=_names(holdings) or None,
            expires_at=None,
            created_at=now(),
        )
    typer.echo(secret)


@app.command("list")
def list_all(data: _Data = None) -> None:
    """List keys without their secrets: a table on a terminal, else tab-separated lines."""
    with _resources(data).sessions.reading() as session:
        rows = [
            (
                row.public_id,
                row.label,
                ",".join(row.scopes),
                ",".join(row.holdings) if row.holdings is not None else "all",
                written(row.created_at),
                written(row.revoked_at) if row.revoked_at else "",
            )
            for row in list_keys(session, holdings=None, after_id=0)
        ]
    console = Console()
    if not console.is_terminal:
        for cells in rows:
            typer.echo("\t".join(cells))
        return
    # An id is needed whole, to revoke its key.
    table = Table(Column("id", no_wrap=True), "label", "scopes", "holdings", "created", "revoked")
    for cells in rows:
        table.add_row(*(Text(cell, overflow="fold") for cell in cells))
    console.print(table)


@app.command()
def revoke(
    key_id: Annotated[str, typer.Argument(help="The key's id, from the list.")], data: _Data = None
) -> None:
    """Revoke a key at once."""
    with _resources(data).sessions.writing() as session:
        row = revoke_key(session, key_id, holdings=None, at=now())
        typer.echo(f"{row.public_id} ({row.label}) is revoked.", err=True)
