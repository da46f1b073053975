"""Progress on stderr: a bar on a terminal, else a line now and then."""

import time
from typing import Final

import typer
from rich.console import Console
from rich.progress import Progress

_LINE_SECONDS: Final = 10.0


class News:
    """Shows how far a piece of work is, for as long as it is entered.

    Parameters
    ----------
    label
        What is going on, such as ``importing``.
    """

    def __init__(self, label: str) -> None:
        console = Console(stderr=True)
        self._label = label
        self._bar = Progress(console=console, transient=True) if console.is_terminal else None
        self._task = self._bar.add_task(label, total=1.0) if self._bar else None
        self._told_at = time.monotonic()

    def __enter__(self) -> "News":
        if self._bar is not None:
            self._bar.start()
        return self

    def __exit__(self, *_: object) -> None:
        if self._bar is not None:
            self._bar.stop()

    def tell(self, progress: float) -> None:
        """Show how far the work is, from 0 to 1."""
        if self._bar is not None and self._task is not None:
            self._bar.update(self._task, completed=progress)
        elif time.monotonic() - self._told_at >= _LINE_SECONDS:
            typer.echo(f"{self._label}: {progress:.0%}", err=True)
            self._told_at = time.monotonic()
