"""`furrowlight bench validation`: how often the service is right, on invented histories.

The histories, the truth and the rival methods come from the benchmarks beside the service;
the service itself is asked through its API alone.
"""

import json
import signal
import sys
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import datetime
from enum import StrEnum
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, Final

import httpx
import numpy as np
import typer
from rich.console import Console
from rich.progress import Progress

from service.cli.bench.asking import Answered, Sent, ask, p_values
from service.cli.bench.home import benchmark
from service.cli.bench.report import Compared, document_of, tables_of
from service.cli.bench.serving import own_service
from service.errors import RejectedInput

if TYPE_CHECKING:
    from benchmarks.histories.making import History
    from benchmarks.scoring import Tally

TUNING_SEEDS: Final = "101-102"
REPORT_SEEDS: Final = "1-6"
SMALL_PARCELS: Final = 120
FULL_PARCELS: Final = 400
PLAIN_WIDTH: Final = 120


class Region(StrEnum):
    """The regions that can be asked for: what happens in them, or how large they are."""

    ORDINARY = "ordinary"
    DROUGHT = "drought"
    PARCELS_40 = "parcels-40"
    PARCELS_90 = "parcels-90"
    NO_HISTORY = "no-history"


_SIZES: Final = {Region.PARCELS_40: 40, Region.PARCELS_90: 90}


@dataclass(frozen=True, slots=True, kw_only=True)
class Asked:
    """What is to be run."""

    seeds: Sequence[int]
    parcels: int
    regions: Sequence[Region]


def validation(
    *,
    seeds: Annotated[
        str | None,
        typer.Option(help="Such as 1-6 or 101,105. 101-120 are for tuning, 1-6 for reports."),
    ] = None,
    parcels: Annotated[int | None, typer.Option(min=20, max=2000)] = None,
    scenario: Annotated[
        list[Region] | None, typer.Option(help="May be given more than once.")
    ] = None,
    full: Annotated[
        bool, typer.Option("--full", help="All scenarios, seeds 1-6, 400 parcels: hours.")
    ] = False,
    report: Annotated[
        Path | None, typer.Option("--json", help="Write the figures to this new file too.")
    ] = None,
) -> None:
    """Measure false alarms, missed events, certainty and causes against two plain methods."""
    # A polite end from outside must end the children too, as Ctrl-C does.
    signal.signal(signal.SIGTERM, signal.default_int_handler)
    if report is not None and report.exists():
        raise RejectedInput("exists", "The file for the figures exists; name a new one.")
    asked = Asked(
        seeds=numbers_in(seeds or (REPORT_SEEDS if full else TUNING_SEEDS)),
        parcels=parcels or (FULL_PARCELS if full else SMALL_PARCELS),
        regions=scenario or (list(Region) if full else [Region.ORDINARY]),
    )
    compared = [compare(region, asked) for region in asked.regions]
    console = Console(width=None if sys.stdout.isatty() else PLAIN_WIDTH)
    for table in tables_of(compared):
        console.print(table)
    if report is not None:
        told = {"seeds": list(asked.seeds), "scenarios": [document_of(each) for each in compared]}
        report.write_text(json.dumps(told, indent=2) + "\n", "utf-8")


def numbers_in(text: str) -> list[int]:
    """Return the numbers of a list such as ``1-3,8``.

    Raises
    ------
    RejectedInput
        It is no such list.
    """
    found: list[int] = []
    for part in text.split(","):
        first, dash, last = part.strip().partition("-")
        if not first.isdecimal() or (dash and not last.isdecimal()):
            raise RejectedInput("bad-seeds", "Seeds are numbers and spans, such as 1-6 or 3,8.")
        found += range(int(first), int(last if dash else first) + 1)
    if not found:
        raise RejectedInput("bad-seeds", "A span of seeds must not end before it begins.")
    return found


def compare(region: Region, asked: Asked) -> Compared:
    """Score the service and its rivals on one kind of region, all seeds together."""
    rivals = benchmark("rivals")
    histories = [history_of(region, seed, asked.parcels) for seed in asked.seeds]
    own = [
        judged_by_service(history, told=f"{region}, seed {history.seed}") for history in histories
    ]
    threshold, by_z_score = rivals.calibrated(histories)
    return Compared(
        region=region.value,
        parcels=len(histories[0].refs),
        seeds=list(asked.seeds),
        own=own,
        z_score=by_z_score,
        z_threshold=threshold,
        fixed=rivals.with_threshold(histories),
        fixed_threshold=rivals.DROP,
    )


def history_of(region: Region, seed: int, parcels: int) -> "History":
    """Return the history of a region."""
    making = benchmark("histories.making")
    is_sized = region in _SIZES
    scenario = making.Scenario("ordinary" if is_sized else region.value)
    history: History = making.make(
        seed, parcels=_SIZES[region] if is_sized else parcels, scenario=scenario
    )
    return history


def judged_by_service(history: "History", *, told: str) -> "Tally":
    """Send a history to a service of its own, pass by pass, and score what it says."""
    bodies, scoring = benchmark("histories.bodies"), benchmark("scoring")
    judged = np.flatnonzero(history.is_judged)
    sent = Sent(
        outlines=bodies.outlines_body(history),
        seasons=bodies.seasons_body(history),
        past=bodies.figures_of(history, np.flatnonzero(~history.is_judged)),
        passes=bodies.pass_bodies(history, judged),
    )
    started = time.monotonic()
    with own_service() as client, progress_shown(told) as tell:
        passes = np.unique(history.look_pass[judged]).size
        answered = ask(client, sent, tell, passes=passes)
        truth = scoring.Truth.of(history)
        stated = p_of_looks(client, history)
    typer.echo(
        f"{told}: {len(answered.alerts)} alerts; past imported in {answered.import_seconds:.0f} s, "
        f"season judged in {answered.judging_seconds:.0f} s, {time.monotonic() - started:.0f} s "
        "in all.",
        err=True,
    )
    tally: Tally = scoring.score(
        truth, alarms_of(history, answered), p_values=stated, notices=notices_of(history, answered)
    )
    return tally


def alarms_of(history: "History", answered: Answered) -> list[Any]:
    """Return the alerts as they stood when they opened, for scoring."""
    scoring = benchmark("scoring")
    places = {ref: place for place, ref in enumerate(history.refs)}
    return [
        scoring.Alarm(
            parcel=places[alert["parcel"]],
            day=history.day_of(instant(alert["opened_at"])),
            cause=alert["cause"]["kind"],
            chance=alert.get("chance"),
        )
        for alert in answered.alerts
    ]


def notices_of(history: "History", answered: Answered) -> list[int] | None:
    """Return the days on which regional notices opened, None where there are none to ask for."""
    if answered.notices is None:
        return None
    return [history.day_of(instant(notice["opened_at"])) for notice in answered.notices]


def p_of_looks(client: httpx.Client, history: "History") -> Any:
    """Return the p-value of every judged look, NaN where it has none; None if none is stated."""
    looks = np.flatnonzero(history.is_judged & history.is_look)
    since = history.passes[int(history.look_pass[history.is_judged][0])].at.isoformat()
    stated = np.full(looks.size, np.nan)
    for parcel, ref in enumerate(history.refs):
        found = p_values(client, ref, since.replace("+00:00", "Z"))
        if found is None:
            return None
        mine = np.flatnonzero(history.look_parcel[looks] == parcel)
        known = {instant(at): p for at, p in found.items()}
        for place in mine.tolist():
            at = history.passes[int(history.look_pass[looks[place]])].at
            stated[place] = known.get(at, np.nan)
    return stated


def instant(text: str) -> datetime:
    """Return an instant of the API."""
    return datetime.fromisoformat(text)


@contextmanager
def progress_shown(told: str) -> Iterator[Callable[[float], None]]:
    """Yield how to tell the share done: a bar on a terminal, nothing elsewhere."""
    console = Console(stderr=True)
    if not console.is_terminal:
        yield lambda _share: None
        return
    with Progress(console=console, transient=True) as progress:
        task = progress.add_task(told, total=1.0)
        yield lambda share: progress.update(task, completed=share)
