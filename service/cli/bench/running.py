"""What the benchmarks of speed have in common: their folder, their answer, their exit."""

import json
import logging
from contextlib import ExitStack
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Annotated, Any

import typer

from service.jobs.warming import keep_compiled_in, warm_up

Cache = Annotated[
    Path | None,
    typer.Option("--cache", help="Folder of invented scenes to keep; without it a temporary one."),
]
Full = Annotated[bool, typer.Option("--full", help="At full size: takes half an hour.")]
Json = Annotated[Path | None, typer.Option("--json", help="File for the whole result.")]


def cache_folder(stack: ExitStack, cache: Path | None) -> Path:
    """Return the folder of invented scenes, and compile what is to be measured."""
    logging.getLogger("rasterio").setLevel(logging.ERROR)
    folder = cache or Path(stack.enter_context(TemporaryDirectory(prefix="furrowlight-bench-")))
    folder.mkdir(parents=True, exist_ok=True)
    keep_compiled_in(folder / "compiled")
    warm_up()
    return folder


def answer(result: Any, json_path: Path | None) -> None:
    """Print a result; exit with 1 if a figure is not what it must be."""
    typer.echo(result.table())
    if json_path is not None:
        json_path.write_text(json.dumps(result.document(), indent=1), encoding="utf-8")
    if not result.is_good:
        raise typer.Exit(1)
