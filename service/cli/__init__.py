"""The command line: one module per group of commands, and what their failures exit with."""

import logging
import sys
from collections.abc import Iterator, Mapping
from importlib import import_module
from typing import Any, Final

import typer
from typer.core import TyperGroup

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

COMMANDS: Final = ("demo", "serve", "push", "keys", "alerts", "diary", "rules", "parcels", "bench")
"""A command is a function, and a group of them an ``app``, in the module of its name."""


class _Commands(Mapping[str, Any]):
    """Commands by name, imported when they are asked for.

    Most commands are clients, and the libraries of the service take seconds to import.
    """

    def __getitem__(self, name: str) -> Any:
        if name not in COMMANDS:
            raise KeyError(name)
        module = import_module(f"{__name__}.{name}")
        outer = typer.Typer(add_completion=False, rich_markup_mode=None)
        outer.callback()(lambda: None)
        if hasattr(module, "app"):
            outer.add_typer(module.app, name=name)
        else:
            outer.command(name)(getattr(module, name))
        return typer.main.get_group(outer).commands[name]

    def __iter__(self) -> Iterator[str]:
        return iter(COMMANDS)

    def __len__(self) -> int:
        return len(COMMANDS)


class _Group(TyperGroup):
    """The top of the command line."""

    def __init__(self, **settings: Any) -> None:
        super().__init__(**settings | {"commands": _Commands()})


app = typer.Typer(
    cls=_Group,
    name="furrowlight",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)


@app.callback()
def _top() -> None:
    """Vegetation and water indices of field parcels from satellite scenes."""


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
