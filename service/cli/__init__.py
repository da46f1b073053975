"""The command line: one module per group of commands, and what their failures exit with."""

import logging
import sys
from collections.abc import Mapping
from typing import Final

import typer

from service.cli import alerts, bench, demo, keys, parcels, serve
from service.errors import (
    Conflict,
    FurrowlightError,
    NotAllowed,
    NotFound,
    RejectedInput,
    Unavailable,
)

EXIT_CODES: Final[Mapping[type[FurrowlightError], int]] = {
    RejectedInput: 3,
    NotFound: 3,
    Conflict: 3,
    Unavailable: 4,
    NotAllowed: 5,
}
"""What each kind of error exits with. Typer itself gives 2 for usage and 130 for an interrupt."""

EXIT_BUG: Final = 70

app = typer.Typer(
    name="furrowlight",
    help="Vegetation and water indices of field parcels from satellite scenes.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)
app.command("demo")(demo.demo)
app.command("serve")(serve.serve)
app.add_typer(keys.app, name="keys")
app.add_typer(alerts.app, name="alerts")
app.add_typer(parcels.app, name="parcels")
app.add_typer(bench.app, name="bench")


def main() -> None:
    """Run one command and exit with its code; a failure is one line for the person."""
    try:
        app(prog_name="furrowlight")
    except FurrowlightError as error:
        typer.echo(f"furrowlight: {error.detail}", err=True)
        sys.exit(EXIT_CODES.get(type(error), EXIT_BUG))
    except Exception:
        logging.getLogger(__name__).exception("command_failed")
        typer.echo("furrowlight: this is a fault of the program; its trace is above.", err=True)
        sys.exit(EXIT_BUG)
