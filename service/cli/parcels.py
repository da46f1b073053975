"""Parcels from a terminal: a file of outlines, sent to a running service."""

import json
import time
from pathlib import Path
from typing import Annotated, Any, Final

import httpx
import typer

from service.cli.client import call, connect_from_environment, error_of
from service.cli.progress import News
from service.errors import Conflict, FurrowlightError, NotFound, RejectedInput

app = typer.Typer(no_args_is_help=True, help="Send parcels to a running service.")
EXIT_REFUSED: Final = 3
EXIT_WAIT: Final = 6
_UPLOAD_SECONDS: Final = 600.0
_POLL_SECONDS: Final = 5


@app.callback()
def _group() -> None:
    """Send parcels to a running service."""


@app.command("import")
def import_file(
    file: Annotated[
        Path,
        typer.Argument(
            exists=True,
            dir_okay=False,
            readable=True,
            help="GeoPackage, zipped Shapefile or GeoJSON.",
        ),
    ],
    *,
    ref_field: Annotated[str, typer.Option(help="Field of the file that holds the ref.")],
    name_field: Annotated[str | None, typer.Option(help="Field that holds the name.")] = None,
    holding_field: Annotated[str | None, typer.Option(help="Field that holds the holding.")] = None,
    crop_field: Annotated[
        str | None, typer.Option(help="Field that holds the crop of the present season.")
    ] = None,
    dry_run: Annotated[bool, typer.Option(help="Say what would happen; keep nothing.")] = False,
    lenient: Annotated[
        bool, typer.Option(help="Keep the good parcels and list the others.")
    ] = False,
    repair: Annotated[bool, typer.Option(help="Mend rings that cross themselves.")] = False,
    timeout: Annotated[
        int, typer.Option(min=1, help="How many seconds to wait for a large file's import.")
    ] = 3_600,
    as_json: Annotated[
        bool, typer.Option("--json", help="The outcome as one JSON object on stdout.")
    ] = False,
) -> None:
    """Insert or update parcels by ref, from a file in its own coordinate reference system.

    A file that was sent already changes nothing, so that this is safe to run again.
    """
    asked = {
        "ref_field": ref_field,
        "name_field": name_field,
        "holding_field": holding_field,
        "crop_field": crop_field,
    }
    fields = {name: field for name, field in asked.items() if field is not None}
    fields["dry_run"] = "true" if dry_run else "false"
    try:
        with connect_from_environment() as client:
            told = _sent(client, file, fields, lenient=lenient, repair=repair)
            outcome = told if "created" in told else _finished(client, told, timeout)
    except (RejectedInput, Conflict, NotFound) as error:
        _tell_refused(error, as_json=as_json)
        raise
    _tell(outcome, as_json=as_json)
    if outcome["rejected"]:
        raise typer.Exit(EXIT_REFUSED)


def _sent(
    client: httpx.Client, file: Path, fields: dict[str, str], *, lenient: bool, repair: bool
) -> dict[str, Any]:
    with file.open("rb") as content:
        return call(
            client,
            "POST",
            "/v1/parcels/import",
            data=fields,
            # Under a name of our own: the service goes by content, and names may tell of people.
            files={"file": ("parcels", content, "application/octet-stream")},
            params={"repair": "true"} if repair else {},
            headers={"Prefer": "handling=lenient"} if lenient else {},
            timeout=_UPLOAD_SECONDS,
        )


def _finished(client: httpx.Client, job: dict[str, Any], timeout: int) -> dict[str, Any]:
    """Wait for a job, showing how far it is; return what became of the parcels."""
    until = time.monotonic() + timeout
    with News("importing") as news:
        while job["state"] in ("queued", "running"):
            left = until - time.monotonic()
            if left <= 0:
                typer.echo(
                    f"furrowlight: {job['id']} is still {job['state']}; it goes on without this "
                    "command.",
                    err=True,
                )
                raise typer.Exit(EXIT_WAIT)
            wait = max(1, min(_POLL_SECONDS, int(left)))
            job = call(client, "GET", f"/v1/jobs/{job['id']}", headers={"Prefer": f"wait={wait}"})
            news.tell(job["progress"])
    if job["state"] == "failed":
        raise _failure_of(job["failure"])
    result: dict[str, Any] = job["result"]
    return result


def _failure_of(problem: dict[str, Any]) -> Exception:
    """Return the error that a job's problem document stands for."""
    if problem["status"] >= httpx.codes.INTERNAL_SERVER_ERROR:
        return RuntimeError(problem["detail"])
    kind = Conflict if problem["status"] == httpx.codes.CONFLICT else RejectedInput
    return error_of(problem, kind, otherwise="The service refused the file.")


def _tell(outcome: dict[str, Any], *, as_json: bool) -> None:
    if as_json:
        typer.echo(json.dumps(outcome, ensure_ascii=False))
    for kind in ("warnings", "errors"):
        for entry in outcome[kind]:
            typer.echo(f"{entry['pointer']}: {entry['detail']}", err=True)
    unlisted = outcome["rejected"] and len(outcome["errors"]) == _LISTED
    counts = ", ".join(
        f"{outcome[name]:,} {name}" for name in ("created", "updated", "unchanged", "rejected")
    )
    more = f" Of the faults the first {_LISTED} are listed." if unlisted else ""
    kept = "Nothing was kept; this would be: " if outcome["dry_run"] else ""
    typer.echo(f"{kept}{counts}.{more}", err=True)


_LISTED: Final = 100


def _tell_refused(error: FurrowlightError, *, as_json: bool) -> None:
    """List what is wrong; the sentence about all of it follows on the last line."""
    faults = [fault.as_dict() for fault in error.faults]
    if as_json:
        told = {"code": error.code, "detail": error.detail, "errors": faults}
        typer.echo(json.dumps(told, ensure_ascii=False))
    if len(faults) > 1:
        for fault in faults:
            typer.echo(f"{fault.get('pointer', '')}: {fault['detail']}", err=True)
