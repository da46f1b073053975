"""`furrowlight demo`: the whole job once, on an invented scene, over HTTP.

It starts the real service in a child process, sends parcels and a scene as any client
would, and holds the figures against what was put into the scene.
"""

import json
import signal
import tempfile
import time
from collections.abc import Callable, Iterator, Mapping
from contextlib import ExitStack, contextmanager
from pathlib import Path
from typing import Annotated, Any, Final
from urllib.parse import quote

import httpx
import typer
from rich.console import Console
from rich.progress import Progress

from service.cli.children import output_of, running_service
from service.cli.client import call, connect
from service.cli.demo_figures import LOSSES, SHOWN, Row, faults_of, table_of
from service.errors import RejectedInput, Unavailable

WAIT_SECONDS: Final = 120.0
POLL_SECONDS: Final = 0.2
EXIT_WAITED: Final = 6
EXIT_WRONG_FIGURES: Final = 70
SCOPES: Final = "read,ingest,triage,manage"
# A demo needs a few megabytes and must run on a disk that is too full for a deployment.
SETTINGS: Final = {"FURROWLIGHT_DISK_RESERVE_BYTES": str(32 * 1024**2)}
CAUTION: Final = (
    "Caution: screening figures, here of an invented scene. With real scenes too, check on\n"
    "the ground before acting."
)


def demo(
    *,
    keep: Annotated[bool, typer.Option("--keep", help="Go on serving until Ctrl-C.")] = False,
    data: Annotated[
        Path | None, typer.Option("--data", help="Data folder; without it a temporary one.")
    ] = None,
    seed: Annotated[
        int | None, typer.Option("--seed", min=0, help="Other noise in the invented scene.")
    ] = None,
) -> None:
    """Serve, post one invented scene over HTTP and print the parcels' indices."""
    # A polite end from outside must end the child too, as Ctrl-C does.
    signal.signal(signal.SIGTERM, signal.default_int_handler)
    typer.echo("Furrowlight demo: an invented scene over the parcels of Quillmere Growers\n")
    with ExitStack() as stack:
        scratch = Path(stack.enter_context(tempfile.TemporaryDirectory(prefix="furrowlight-")))
        sample, folder = scratch / "sample", data or scratch / "data"
        make_sample(sample, seed=seed)
        service = stack.enter_context(
            running_service(folder, log=scratch / "service.log", settings=SETTINGS)
        )
        typer.echo(f"The service answers at {service.address}.")
        key = make_key(folder)
        client = stack.enter_context(connect(service.address, key=key))
        send_parcels(client, sample)
        scene = send_scene(client, sample)
        scene = wait_for(client, scene["ref"])
        say_report(scene)
        rows = rows_of(client, scene, sample)
        typer.echo(f"\n{table_of(rows)}\n\n{CAUTION}\n")
        faults = faults_of(rows, json.loads((sample / "truth.json").read_text("utf-8"))["parcels"])
        if faults:
            typer.echo("\n".join(["The figures are wrong:", *faults]), err=True)
            raise typer.Exit(EXIT_WRONG_FIGURES)
        say_what_next(service.address, key, data=data, keep=keep)
        if keep:
            service.wait()


def make_sample(folder: Path, *, seed: int | None) -> None:
    """Write the invented scene, by its generator in the installed package or the checkout."""
    here = Path(__file__).parent
    homes = (here / "sample_tiles", here.parents[1] / "sample_tiles")
    scripts = [home / "generate.py" for home in homes if (home / "generate.py").is_file()]
    if not scripts:
        raise Unavailable("no-sample", "This installation lacks the demo's scene; install it anew.")
    seeding = [] if seed is None else ["--seed", str(seed)]
    output_of([str(scripts[0]), str(folder), *seeding], settings={})


def make_key(data: Path) -> str:
    """Return the secret of a new key, made beside the running server."""
    creating = ["-m", "service.cli", "keys", "create", "--data", str(data)]
    return output_of([*creating, "--label", "demo", "--scopes", SCOPES], settings=SETTINGS).strip()


def send_parcels(client: httpx.Client, sample: Path) -> None:
    """Send the parcels and say what became of them."""
    parcels = (sample / "parcels.geojson").read_bytes()
    answer = call(
        client,
        "PUT",
        "/v1/parcels",
        content=parcels,
        headers={"Content-Type": "application/geo+json"},
    )
    counts = (f"{answer[name]} {name}" for name in ("created", "updated", "unchanged"))
    typer.echo(f"Parcels sent: {', '.join(counts)}.")


def send_scene(client: httpx.Client, sample: Path) -> dict[str, Any]:
    """Send the scene, one file per band role, and return what the service says of it."""
    with ExitStack() as stack:
        files: list[tuple[str, Any]] = [
            ("scene", (None, (sample / "scene.json").read_bytes(), "application/json"))
        ]
        for path in sorted(sample.glob("*.tif")):
            file = stack.enter_context(path.open("rb"))
            files.append((path.stem, (path.name, file, "image/tiff")))
        scene = call(client, "POST", "/v1/scenes", files=files)
    typer.echo(f"Scene {scene['ref']} sent in {len(files)} parts.")
    return scene


def wait_for(client: httpx.Client, ref: str) -> dict[str, Any]:
    """Ask for the scene until it is done; show how far it is."""
    end = time.monotonic() + WAIT_SECONDS
    with progress_shown() as show:
        while True:
            scene = call(client, "GET", f"/v1/scenes/{quote(ref, safe='')}")
            show(scene["state"], scene["progress"] or 0.0)
            if scene["state"] == "done":
                return scene
            if scene["state"] not in {"queued", "running"}:
                failure: Mapping[str, str] = scene["failure"] or {}
                detail = failure.get("detail", "no reason is given.")
                raise RejectedInput("scene-failed", f"The scene is {scene['state']}: {detail}")
            if time.monotonic() > end:
                typer.echo(f"The scene is not done after {WAIT_SECONDS:.0f} seconds.", err=True)
                raise typer.Exit(EXIT_WAITED)
            time.sleep(POLL_SECONDS)


@contextmanager
def progress_shown() -> Iterator[Callable[[str, float], None]]:
    """Yield what shows a state and a share: a bar on a terminal, a line per change elsewhere."""
    console = Console(stderr=True)
    if console.is_terminal:
        with Progress(console=console, transient=True) as progress:
            task = progress.add_task("queued", total=1.0)
            yield lambda state, share: progress.update(task, description=state, completed=share)
        return
    said: set[str] = set()

    def say(state: str, share: float) -> None:
        line = f"  {state}, {share:.0%}"
        if line not in said:
            typer.echo(line, err=True)
        said.add(line)

    yield say


def say_report(scene: Mapping[str, Any]) -> None:
    """Say how many parcels were measured and why the others were not."""
    unseen: Mapping[str, int] = scene["parcels_unseen"]
    reasons = ", ".join(f"{count} by {reason}" for reason, count in unseen.items())
    typer.echo(
        f"Scene done: {scene['parcels_in_footprint']} parcels in its footprint, "
        f"{scene['parcels_measured']} measured, {sum(unseen.values())} unseen"
        + (f" ({reasons})." if reasons else ".")
    )


def rows_of(client: httpx.Client, scene: Mapping[str, Any], sample: Path) -> list[Row]:
    """Ask for every sent parcel's figures in the scene."""
    path = f"/v1/scenes/{quote(scene['ref'], safe='')}/parcels"
    looks = call(client, "GET", path, params={"limit": 1000})["parcels"]
    shares: dict[str, Mapping[str, Any]] = {look["parcel"]: look for look in looks}
    sent = json.loads((sample / "parcels.geojson").read_text("utf-8"))["features"]
    properties = [feature["properties"] for feature in sent]
    return [
        row_of(client, scene["ref"], parcel, shares[parcel["ref"]])
        for parcel in properties
        if parcel["ref"] in shares
    ]


def row_of(
    client: httpx.Client, scene: str, parcel: Mapping[str, Any], look: Mapping[str, Any]
) -> Row:
    """Ask for one parcel's series and pick what this scene gave."""
    answer = call(
        client,
        "GET",
        f"/v1/parcels/{quote(parcel['ref'], safe='')}/series",
        params={"index": ",".join(SHOWN), "stat": "mean,pixels", "min_valid": 0},
    )
    columns: Mapping[str, Mapping[str, list[Any]]] = answer["indices"]

    def figure(index: str, stat: str) -> float | None:
        column = columns.get(index, {"scene": []})
        at = [place for place, ref in enumerate(column["scene"]) if ref == scene]
        return column[stat][at[-1]] if at else None

    return Row(
        ref=parcel["ref"],
        crop=parcel.get("crop") or "-",
        valid_share=look["valid_share"],
        pixels=figure(SHOWN[0], "pixels") or 0.0,
        lost={name: look[name] for name in LOSSES},
        means={index: figure(index, "mean") for index in SHOWN},
    )


def say_what_next(address: str, key: str, *, data: Path | None, keep: bool) -> None:
    """Say what a curious person can try now."""
    if keep:
        typer.echo(f"Serving until Ctrl-C. Try:\n  export URL={address} KEY={key}")
    elif data is None:
        typer.echo("To look around, run `furrowlight demo --keep`, which goes on serving. Then:")
    else:
        typer.echo(f"To look around, run `furrowlight serve --data {data}` with a key. Then:")
    for path in (
        "/v1/overview?index=ndvi",
        "/v1/parcels/QM-05/series?index=ndvi,ndmi&stat=mean,p10,p90,valid_share",
        "/v1/parcels/QM-05/series?index=ndwi&format=text/csv",
        "/v1/indices/ndmi",
    ):
        typer.echo(f'  curl -H "Authorization: Bearer $KEY" "$URL{path}"')
