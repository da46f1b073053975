"""`furrowlight bench`: benchmarks that anyone can repeat, one module each.

A benchmark is one command of this group; `bench list` names whatever stands here.
"""

import typer

from service.cli.bench import engine, ingest, judging, validation

app = typer.Typer(no_args_is_help=True, help="Measure how right and how fast the service is.")


@app.command("list")
def list_all() -> None:
    """Name the benchmarks and what each measures."""
    for command in app.registered_commands:
        if command.callback is not None and command.name != "list":
            says = (command.callback.__doc__ or "").strip().splitlines()
            typer.echo("\t".join((command.name or command.callback.__name__, *says[:1])))


app.command("judging")(judging.judging)
app.command("validation")(validation.validation)
app.command("engine")(engine.engine)
app.command("ingest")(ingest.ingest)
