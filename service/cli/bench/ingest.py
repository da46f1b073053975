"""`furrowlight bench ingest`: whole ingests against decoding."""

from contextlib import ExitStack
from typing import Annotated

import typer

from service.cli.bench.home import benchmark
from service.cli.bench.running import Cache, Full, Json, answer, cache_folder


def ingest(
    *,
    full: Full = False,
    cache: Cache = None,
    json_path: Json = None,
    compress: Annotated[
        str, typer.Option("--compress", help="deflate, zstd, lzw or none.")
    ] = "deflate",
) -> None:
    """Ingest scenes into a new SQLite deployment, against the cost of decoding once (D)."""
    module = benchmark("engine.ingest")
    with ExitStack() as stack:
        options = module.IngestOptions(
            cache=cache_folder(stack, cache), full=full, compress=compress
        )
        answer(module.run(options, lambda step: typer.echo(f"{step} …", err=True)), json_path)
