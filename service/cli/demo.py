"""`furrowlight demo`: the whole job once, on an invented season, over HTTP.

It starts the real service in a child process, registers and posts as any client would,
receives the alerts, and holds them against what was put into the season.
"""

import json
import os
import signal
import sys
import tempfile
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Annotated, Any, Final

import httpx
import typer
from rich.console import Console
from rich.progress import Progress

from service.cli.children import output_of, running_service
from service.cli.client import call, connect
from service.cli.demo_receiver import Event, Receiver, receiving
from service.cli.demo_report import SCENE_HEADS, event_line, report, scene_line, summary
from service.cli.demo_truth import Befallen, ToldAlert, faults_of, told_alerts
from service.errors import RejectedInput, Unavailable
from service.webhooks.events import EventName

SCENE_SECONDS: Final = 50
DELIVERY_SECONDS: Final = 20.0
POLL_SECONDS: Final = 0.1
EXIT_WAITED: Final = 6
EXIT_WRONG: Final = 70
SCOPES: Final = "read,ingest,triage,manage"
EVENTS: Final = (
    EventName.ALERT_OPENED,
    EventName.ALERT_CHANGED,
    EventName.ALERT_CLOSED,
    EventName.SCENE_DONE,
    EventName.SCENE_FAILED,
)
SETTINGS: Final = {
    # A demo needs a few megabytes and must run on a disk that is too full for a deployment.
    "FURROWLIGHT_DISK_RESERVE_BYTES": str(32 * 1024**2),
    "FURROWLIGHT_QUEUE_POLLING_SECONDS": "0.05",
    "FURROWLIGHT_WEBHOOK_NETWORKS": "127.0.0.0/8",
}
_CSV: Final = {"Content-Type": "text/csv"}
_JSON: Final = {"Content-Type": "application/json"}
_GEOJSON: Final = {"Content-Type": "application/geo+json"}


@dataclass(frozen=True, slots=True, kw_only=True)
class Telling:
    """How the demo speaks while it works: lines for good, and what it is at.

    `begin` takes what begins, and the share of the work (0-1) that is done by then.
    """

    say: Callable[[str], None]
    begin: Callable[[str, float], None]


@dataclass(frozen=True, slots=True, kw_only=True)
class Outcome:
    """What came of the season: the alerts that were told, and in what they are wrong."""

    befallen: Sequence[Befallen]
    alerts: Sequence[ToldAlert]
    faults: Sequence[str]


def demo(
    *,
    keep: Annotated[bool, typer.Option("--keep", help="Go on serving until Ctrl-C.")] = False,
    data: Annotated[
        Path | None,
        typer.Option("--data", help="New data folder to keep; without it a temporary one."),
    ] = None,
    seed: Annotated[
        int | None,
        typer.Option("--seed", min=0, help="Another season: weather, clouds, what befalls whom."),
    ] = None,
) -> None:
    """Run an invented season through the service: alerts, and the truth beside them."""
    # A polite end from outside must end the child too, as Ctrl-C does.
    signal.signal(signal.SIGTERM, signal.default_int_handler)
    if data is not None and data.is_dir() and any(data.iterdir()):
        raise RejectedInput("not-empty", "The data folder holds something; name a new one.")
    typer.echo(
        "Furrowlight demo: a season of Quillmere Growers, who are invented like their land\n"
    )
    with ExitStack() as stack:
        scratch = Path(stack.enter_context(tempfile.TemporaryDirectory(prefix="furrowlight-")))
        sample, folder = scratch / "sample", data or scratch / "data"
        url, receiver = stack.enter_context(receiving())
        with progress_shown() as telling:
            telling.begin("inventing the season", 0.0)
            make_sample(sample, seed=seed)
            telling.begin("starting the service", 0.15)
            service = stack.enter_context(
                running_service(folder, log=scratch / "service.log", settings=SETTINGS)
            )
            telling.say(f"The service answers at {service.address}.")
            key = make_key(folder)
            client = stack.enter_context(connect(service.address, key=key))
            outcome = run_season(client, sample, receiver, url, telling)
        typer.echo("\n" + told(outcome, sample, receiver))
        check(outcome)
        say_what_next(outcome, service.address, key, keep_in=scratch if keep else None)
        while keep and service.process.poll() is None:
            say_events(receiver.news(seconds=1.0), typer.echo)
        if keep:
            service.wait()


@contextmanager
def progress_shown() -> Iterator[Telling]:
    """Yield how to tell: under the lines a bar on a terminal, elsewhere the lines alone."""
    console = Console()
    if not console.is_terminal:
        yield Telling(say=typer.echo, begin=lambda _step, _share: None)
        return
    with Progress(console=console, transient=True) as progress:
        task = progress.add_task("", total=1.0)

        def begin(step: str, share: float) -> None:
            progress.update(task, description=step, completed=share)

        def say(line: str) -> None:
            console.print(line, markup=False, highlight=False, soft_wrap=True)

        yield Telling(say=say, begin=begin)


def make_sample(folder: Path, *, seed: int | None) -> None:
    """Write the invented season, by its generator in the installed package or the checkout."""
    here = Path(__file__).parent
    homes = (here / "sample_tiles", here.parents[1] / "sample_tiles")
    scripts = [home / "season.py" for home in homes if (home / "season.py").is_file()]
    if not scripts:
        raise Unavailable("no-sample", "This installation lacks the demo's land; install it anew.")
    seeding = [] if seed is None else ["--seed", str(seed)]
    output_of([str(scripts[0]), str(folder), *seeding], settings={})


def make_key(data: Path) -> str:
    """Return the secret of a new key, made beside the running server."""
    creating = ["-m", "service.cli", "keys", "create", "--data", str(data)]
    return output_of([*creating, "--label", "demo", "--scopes", SCOPES], settings=SETTINGS).strip()


def run_season(
    client: httpx.Client, sample: Path, receiver: Receiver, url: str, telling: Telling
) -> Outcome:
    """Register, import, post scene by scene, and return what came of it."""
    telling.begin("registering parcels and their crops", 0.3)
    register(client, sample, telling)
    telling.begin("importing the past seasons", 0.32)
    history = (sample / "history.csv").read_bytes()
    kept = call(client, "POST", "/v1/observations", content=history, headers=_CSV)
    telling.say(f"{kept['created']:,} figures of past seasons imported.")
    hook = call(client, "POST", "/v1/webhooks", json={"url": url, "events": EVENTS})
    receiver.trust(hook["secret"])
    telling.say(f"A receiver at {url} will be told of alerts and scenes.\n\n{SCENE_HEADS}")
    untold: list[str] = []
    folders = sorted((sample / "scenes").iterdir())
    for number, folder in enumerate(folders, start=1):
        telling.begin(
            f"scene {number} of {len(folders)}", 0.45 + 0.53 * (number - 1) / len(folders)
        )
        scene = post_scene(client, folder)
        telling.say(scene_line(scene))
        if not receiver.waits_for(EventName.SCENE_DONE, scene["ref"], seconds=DELIVERY_SECONDS):
            untold = [f"{scene['ref']}: the receiver was not told that it is done."]
            break
        say_events(receiver.news(), telling.say)
    telling.begin("waiting for the last messages", 0.98)
    wait_for_deliveries(client, hook["id"])
    say_events(receiver.news(), telling.say)
    outcome = outcome_of(client, sample, receiver)
    return replace(outcome, faults=[*untold, *outcome.faults])


def register(client: httpx.Client, sample: Path, telling: Telling) -> None:
    """Register the parcels with their holdings, and what grew on them season by season."""
    outlines = (sample / "parcels.geojson").read_bytes()
    parcels = call(client, "PUT", "/v1/parcels", content=outlines, headers=_GEOJSON)
    crops = (sample / "seasons.json").read_bytes()
    seasons = call(client, "POST", "/v1/seasons", content=crops, headers=_JSON)
    telling.say(f"{parcels['created']} parcels and {seasons['created']} crop seasons registered.")


def post_scene(client: httpx.Client, folder: Path) -> dict[str, Any]:
    """Post a scene, one file per band role, and return it when it is measured and judged."""
    with ExitStack() as stack:
        files: list[tuple[str, Any]] = [
            ("scene", (None, (folder / "scene.json").read_bytes(), "application/json"))
        ]
        for path in sorted(folder.glob("*.tif")):
            file = stack.enter_context(path.open("rb"))
            files.append((path.stem, (path.name, file, "image/tiff")))
        waiting = {"Prefer": f"wait={SCENE_SECONDS}"}
        scene = call(client, "POST", "/v1/scenes", files=files, headers=waiting)
    if scene["state"] in {"queued", "running"}:
        typer.echo(f"A scene is not done after {SCENE_SECONDS} seconds.", err=True)
        raise typer.Exit(EXIT_WAITED)
    if scene["state"] != "done":
        detail = (scene["failure"] or {}).get("detail", "no reason is given.")
        raise RejectedInput("scene-failed", f"A scene is {scene['state']}: {detail}")
    return scene


def say_events(events: Sequence[Event], say: Callable[[str], None]) -> None:
    """Say what the receiver was told of alerts."""
    for line in filter(None, map(event_line, events)):
        say(line)


def wait_for_deliveries(client: httpx.Client, webhook: str) -> None:
    """Wait until no message to the receiver is on its way, for a while at most.

    What has not arrived by then is found missing when the alerts are compared.
    """
    end = time.monotonic() + DELIVERY_SECONDS
    path, params = f"/v1/webhooks/{webhook}/deliveries", {"limit": 1000}
    while time.monotonic() < end:
        deliveries = call(client, "GET", path, params=params)["deliveries"]
        if all(each["state"] != "waiting" for each in deliveries):
            return
        time.sleep(POLL_SECONDS)


def outcome_of(client: httpx.Client, sample: Path, receiver: Receiver) -> Outcome:
    """Hold what the receiver was told against the truth, and against the service's own list."""
    truth = json.loads((sample / "truth.json").read_text("utf-8"))
    befallen = [Befallen.from_truth(members) for members in truth["events"]]
    alerts = told_alerts(befallen, receiver.events)
    listed = call(client, "GET", "/v1/alerts", params={"limit": 1000})["alerts"]
    faults = faults_of(befallen, alerts, listed=listed, forged=receiver.forged)
    return Outcome(befallen=befallen, alerts=alerts, faults=faults)


def told(outcome: Outcome, sample: Path, receiver: Receiver) -> str:
    """Return the alerts beside the truth, and the outcome in one sentence."""
    features = json.loads((sample / "parcels.geojson").read_text("utf-8"))["features"]
    names = {each["properties"]["ref"]: each["properties"]["name"] for each in features}
    alerts = report(outcome.alerts, outcome.befallen, names=names)
    count = len(receiver.events)
    return f"{alerts}\n\n{summary(outcome.alerts, outcome.befallen, received=count)}\n"


def check(outcome: Outcome) -> None:
    """Exit with what went wrong, if anything did."""
    if outcome.faults:
        typer.echo("\n".join(["Something went wrong:", *outcome.faults]), err=True)
        raise typer.Exit(EXIT_WRONG)


def say_what_next(outcome: Outcome, address: str, key: str, *, keep_in: Path | None) -> None:
    """Say what a curious person can try now; `keep_in` is where to put the key if it serves on."""
    program = sys.argv[0] if Path(sys.argv[0]).name == "furrowlight" else "furrowlight"
    if keep_in is None:
        typer.echo(f"To look around: {program} demo --keep goes on serving and says what to try.")
        return
    key_file = keep_in / "key"
    with os.fdopen(os.open(key_file, os.O_WRONLY | os.O_CREAT, 0o600), "w") as file:
        file.write(f"{key}\n")
    alert = outcome.alerts[-1].opened
    typer.echo(
        "\n".join(
            [
                "Serving until Ctrl-C, and telling here what the receiver is told. Try elsewhere:",
                f"  export FURROWLIGHT_URL={address} FURROWLIGHT_KEY_FILE={key_file}",
                f"  export KEY={key}",
                f"  {program} alerts list",
                f"  {program} alerts show {alert['id']}",
                f"  {program} alerts close {alert['id']} --verdict confirmed",
                *(
                    f'  curl -H "Authorization: Bearer $KEY" "$FURROWLIGHT_URL{path}"'
                    for path in (
                        "/v1/overview?index=ndvi&at=2024-08-20&format=csv",
                        f"/v1/parcels/{alert['parcel']}/series?index={alert['index']}"
                        "&with=baseline,departure&from=2024-04-01",
                        f"/v1/parcels/{alert['parcel']}/baseline?index={alert['index']}",
                    )
                ),
            ]
        )
    )
