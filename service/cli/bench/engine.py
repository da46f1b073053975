"""`furrowlight bench engine`: measuring against decoding and against general libraries."""

from contextlib import ExitStack
from typing import Annotated

import typer

from service.cli.bench.home import benchmark
from service.cli.bench.running import Cache, Full, Json, answer, cache_folder


def engine(
    *,
    full: Full = False,
    cache: Cache = None,
    json_path: Json = None,
    libraries: Annotated[
        bool, typer.Option("--libraries/--no-libraries", help="Compare with general libraries.")
    ] = True,
    compress: Annotated[
        str, typer.Option("--compress", help="deflate, zstd, lzw or none.")
    ] = "deflate",
) -> None:
    """Measure parcels in a scene, against the cost of decoding its bands once (D)."""
    module = benchmark("engine.engine")
    with ExitStack() as stack:
        options = module.EngineOptions(
            cache=cache_folder(stack, cache), full=full, libraries=libraries, compress=compress
        )
        answer(module.run(options, lambda step: typer.echo(f"{step} …", err=True)), json_path)
