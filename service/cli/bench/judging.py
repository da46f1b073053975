"""`furrowlight bench judging`: what judging costs, beside measuring in the same run.

All figures that matter are ratios within one run, so that another machine gives about the
same. The tile of a scene holds nothing but its parcels: decoding a whole product would make
measuring dearer, and the ratios smaller.
"""

import json
import math
import resource
import shutil
import sys
import tempfile
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import asdict, dataclass
from pathlib import Path
from statistics import median
from typing import TYPE_CHECKING, Annotated, Any, Final

import httpx
import typer
from rich.box import SIMPLE
from rich.console import Console
from rich.table import Table

from service.assess import prepare
from service.cli.bench.filling import add_pass, fill, resources_on
from service.cli.bench.home import benchmark
from service.cli.bench.serving import CALL_SECONDS, SCOPES, SETTINGS
from service.cli.children import output_of, running_service
from service.cli.client import call, connect
from service.errors import RejectedInput, Unavailable
from service.jobs.assess import judge_wanted
from service.jobs.folding import known_of
from service.jobs.resources import Resources
from service.jobs.season_looks import past_of
from service.logs import set_up_logs
from service.store.judging import axes, packed

if TYPE_CHECKING:
    from benchmarks.wide_land import WideLand

SMALL: Final = (600, 2, 12)
FULL: Final = (10_000, 4, 40)
"""Parcels, finished seasons, passes a season."""
_SMALL_SEASON, _FULL_SEASON = 100, 400
_SCENES: Final = 3
_GROWN: Final = 4
_IMPORTED: Final = 20_000
_WAIT: Final = "wait=600"
_PLAIN_WIDTH: Final = 110


@dataclass(frozen=True, slots=True, kw_only=True)
class Spent:
    """Seconds on the clock and of the processor."""

    wall: float
    cpu: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Judged:
    """What judging took on one size of land, within this process."""

    parcels: int
    seasons: int
    scene: Spent
    rebuild: Spent
    from_nothing: Spent


@dataclass(frozen=True, slots=True, kw_only=True)
class Served:
    """What a service took for scenes of that land; seconds on the clock, memory in MiB."""

    measuring: float
    judging: float
    import_rows: float
    peak_mib: float | None


def judging(
    *,
    parcels: Annotated[int | None, typer.Option(min=100, max=20_000)] = None,
    seasons: Annotated[int | None, typer.Option(min=2, max=6)] = None,
    passes: Annotated[int | None, typer.Option(min=6, max=60, help="In each season.")] = None,
    full: Annotated[
        bool, typer.Option("--full", help="10,000 parcels, 4 seasons of 40 passes: half an hour.")
    ] = False,
    cache: Annotated[
        Path | None, typer.Option(help="A folder in which filled stores are kept for next time.")
    ] = None,
    report: Annotated[
        Path | None, typer.Option("--json", help="Write the figures to this new file too.")
    ] = None,
) -> None:
    """Measure what judging a scene, baselines and imports cost, beside measuring a scene."""
    if report is not None and report.exists():
        raise RejectedInput("exists", "The file for the figures exists; name a new one.")
    set_up_logs("WARNING")
    usual = FULL if full else SMALL
    size = (parcels or usual[0], seasons or usual[1], passes or usual[2])
    with _folder(cache) as stores:
        figures = figures_of(stores, size, of_season=_FULL_SEASON if full else _SMALL_SEASON)
    Console(width=None if sys.stdout.isatty() else _PLAIN_WIDTH).print(_table(figures))
    if report is not None:
        report.write_text(json.dumps(figures, indent=2) + "\n", "utf-8")


@contextmanager
def _folder(cache: Path | None) -> Iterator[Path]:
    if cache is not None:
        cache.mkdir(parents=True, exist_ok=True)
        yield cache
        return
    with tempfile.TemporaryDirectory(prefix="furrowlight-") as scratch:
        yield Path(scratch)


def figures_of(stores: Path, size: tuple[int, int, int], *, of_season: int) -> dict[str, Any]:
    """Run all of it; return the figures, fit for JSON."""
    parcels, seasons, passes = size
    land = benchmark("wide_land").WideLand
    whole = land(parcels=parcels, passes=passes)
    part = land(parcels=parcels // _GROWN, passes=passes)
    judged = judged_here(stores, whole, seasons)
    fewer = judged_here(stores, part, seasons)
    shorter = judged_here(stores, part, max(1, seasons // 2))
    served = served_by_child(stores, whole, seasons)
    past = seasons * passes
    return {
        "parcels": parcels,
        "seasons": seasons,
        "passes": passes,
        "judging_to_measuring": served.judging / served.measuring,
        "rebuild_to_ingest": judged.rebuild.wall / (past * served.measuring),
        "import_rows_per_second": served.import_rows,
        "season": {"parcels": of_season, "seconds": season_here(of_season, size)},
        "growth": {
            "parcels": {
                name: _exponent(getattr(judged, name), getattr(fewer, name), _GROWN)
                for name in ("scene", "rebuild")
            },
            "seasons": {
                name: _exponent(
                    getattr(fewer, name),
                    getattr(shorter, name),
                    seasons / max(1, seasons // 2),
                )
                for name in ("scene", "rebuild")
            },
        },
        "served": asdict(served),
        "judged": [asdict(each) for each in (judged, fewer, shorter)],
        "peak_mib_here": resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024,
    }


def _exponent(large: Spent, small: Spent, factor: float) -> float:
    """Return p where cost grows as size to the power of p, by seconds of the processor."""
    return math.log(large.cpu / small.cpu) / math.log(factor)


def filled(stores: Path, land: "WideLand", seasons: int) -> Path:
    """Return a data folder filled with finished seasons and half a running one."""
    running = land.passes // 2
    kept = stores / f"judged-{land.parcels}-{seasons}-{land.passes}"
    if not kept.exists():
        growing = kept.with_suffix(".new")
        shutil.rmtree(growing, ignore_errors=True)
        work = resources_on(growing)
        fill(work, land, range(land.running - seasons, land.running))
        for number in range(running):
            add_pass(work, land, land.running, number)
        work.sessions.engine.dispose()
        growing.rename(kept)
    return kept


@contextmanager
def _copy(kept: Path) -> Iterator[Path]:
    with tempfile.TemporaryDirectory(prefix="furrowlight-") as scratch:
        yield Path(shutil.copytree(kept, Path(scratch) / "data"))


def judged_here(stores: Path, land: "WideLand", seasons: int) -> Judged:
    """Judge a filled land in this process: all of it, then scene by scene."""
    with _copy(filled(stores, land, seasons)) as data:
        work = resources_on(data)
        from_nothing = _spent(lambda: judge_wanted(work))
        scenes = []
        for number in range(land.passes // 2, land.passes // 2 + _SCENES):
            add_pass(work, land, land.running, number)
            scenes.append(_spent(lambda: judge_wanted(work)))
        rebuild = _spent(lambda: _rebuild(work, land.running))
        work.sessions.engine.dispose()
    return Judged(
        parcels=land.parcels,
        seasons=seasons,
        scene=Spent(
            wall=median(each.wall for each in scenes), cpu=median(each.cpu for each in scenes)
        ),
        rebuild=rebuild,
        from_nothing=from_nothing,
    )


def _rebuild(work: Resources, season: int) -> None:
    with work.sessions.reading() as session:
        (axis,) = axes(session, work.settings.season_starts)
        known = known_of(session, axis)
        packed(prepare(past_of(session, axis, season), known.rules, known.holdings))


def season_here(parcels: int, size: tuple[int, int, int]) -> float:
    """Return how many seconds judging a season took, scene by scene, the baselines with it."""
    _, seasons, passes = size
    land = benchmark("wide_land").WideLand(parcels=parcels, passes=passes)
    spent = 0.0
    with tempfile.TemporaryDirectory(prefix="furrowlight-") as scratch:
        work = resources_on(Path(scratch) / "data")
        fill(work, land, range(land.running - seasons, land.running))
        for number in range(passes):
            add_pass(work, land, land.running, number)
            spent += _spent(lambda: judge_wanted(work)).wall
        work.sessions.engine.dispose()
    return spent


def _spent(work: Callable[[], None]) -> Spent:
    wall, cpu = time.perf_counter(), time.process_time()
    work()
    return Spent(wall=time.perf_counter() - wall, cpu=time.process_time() - cpu)


def served_by_child(stores: Path, land: "WideLand", seasons: int) -> Served:
    """Post scenes of a filled land to a service of its own, and figures after them."""
    with _copy(filled(stores, land, seasons)) as data:
        log = data.parent / "service.log"
        with running_service(data, log=log, settings=SETTINGS) as service:
            creating = ["-m", "service.cli", "keys", "create", "--data", str(data)]
            secret = output_of(
                [*creating, "--label", "bench", "--scopes", SCOPES], settings=SETTINGS
            )
            with connect(service.address, key=secret.strip()) as client:
                client.timeout = httpx.Timeout(CALL_SECONDS)
                # The first one waits until all that was there before is judged.
                _, *rest = _reports(client, land, data.parent)
                rows = _import_rows(client, land)
                peak = _peak_mib(service.process.pid)
    return Served(
        measuring=median(each["total"] for each in rest),
        judging=median(each["judging"] for each in rest),
        import_rows=rows,
        peak_mib=peak,
    )


def _reports(
    client: httpx.Client, land: "WideLand", scratch: Path
) -> Iterator[Mapping[str, float]]:
    """Post scenes one by one; yield the seconds that their reports tell."""
    for number in range(land.passes // 2, land.passes // 2 + _SCENES + 1):
        folder = scratch / f"tile-{number}"
        folder.mkdir()
        at = land.acquired_at(land.running, number).isoformat().replace("+00:00", "Z")
        told = {
            "ref": f"posted-{number}",
            "sensor": "sentinel-2-l2a",
            "acquired_at": at,
            "processing_baseline": "05.10",
            "platform": "sentinel-2a",
            "tile": "wide",
        }
        parts: list[tuple[str, Any]] = [("scene", (None, json.dumps(told), "application/json"))]
        for part, path in land.write_tile(folder, land.running, number).items():
            parts.append((part, (path.name, path.read_bytes(), "image/tiff")))
        scene = call(client, "POST", "/v1/scenes", files=parts, headers={"Prefer": _WAIT})
        if scene["state"] != "done":
            raise Unavailable("not-done", "A scene of the benchmark was not done in time.")
        yield scene["seconds"]


def _import_rows(client: httpx.Client, land: "WideLand") -> float:
    """Return how many rows of past figures were imported a second."""
    season = land.running - 6
    at = land.acquired_at(season, 0).isoformat().replace("+00:00", "Z")
    rows = [
        f"{ref},{band},{at},{value:.5f},bench-{turn}\n"
        for turn in range(max(1, _IMPORTED // (6 * land.parcels)))
        for ref, spectrum in zip(land.refs, land.spectra(season, turn), strict=True)
        for band, value in zip(land.bands, spectrum.tolist(), strict=True)
    ][:_IMPORTED]
    body = ("parcel,index,observed_at,mean,sensor\n" + "".join(rows)).encode()
    started = time.perf_counter()
    call(client, "POST", "/v1/observations", content=body, headers={"Content-Type": "text/csv"})
    return len(rows) / (time.perf_counter() - started)


def _peak_mib(pid: int) -> float | None:
    """Return the largest memory that a process ever held, None where nobody counts it."""
    status = Path(f"/proc/{pid}/status")
    if not status.exists():
        return None
    lines = [line for line in status.read_text("ascii").splitlines() if line.startswith("VmHWM")]
    return int(lines[0].split()[1]) / 1024


def _table(figures: Mapping[str, Any]) -> Table:
    title = (
        f"{figures['parcels']:,} parcels, {figures['seasons']} finished seasons of "
        f"{figures['passes']} passes"
    )
    table = Table("figure", "must", "aim", "here", title=title, box=SIMPLE)
    season, growth, served = figures["season"], figures["growth"], figures["served"]
    rows: Sequence[tuple[str, str, str, str]] = (
        (
            "judging a scene / measuring it",
            "≤ 1",
            "≤ 0.5",
            f"{figures['judging_to_measuring']:.2f}",
        ),
        (
            "rebuilding all baselines / ingesting their scenes",
            "",
            "≤ 0.1",
            f"{figures['rebuild_to_ingest']:.3f}",
        ),
        ("rows imported a second", "≥ 20,000", "", f"{figures['import_rows_per_second']:,.0f}"),
        (
            f"a season of {season['parcels']} parcels, judged scene by scene",
            "≤ 60 s",
            "",
            f"{season['seconds']:.1f} s",
        ),
        ("judging a scene grows with parcels to the power of", "", "", _told(growth, "scene", 0)),
        ("rebuilding grows with parcels to the power of", "", "", _told(growth, "rebuild", 0)),
        ("judging a scene grows with seasons to the power of", "", "", _told(growth, "scene", 1)),
        ("rebuilding grows with seasons to the power of", "", "", _told(growth, "rebuild", 1)),
        ("peak memory of the service", "", "", _mib(served["peak_mib"])),
        ("measuring a scene, judging it", "", "", _seconds(served)),
        ("judging all that is there, baselines with it", "", "", _from_nothing(figures)),
    )
    for row in rows:
        table.add_row(*row)
    return table


def _from_nothing(figures: Mapping[str, Any]) -> str:
    spent = figures["judged"][0]["from_nothing"]
    return f"{spent['wall']:.1f} s, {spent['cpu']:.1f} s of the processor"


def _told(growth: Mapping[str, Mapping[str, float]], what: str, place: int) -> str:
    return f"{growth[('parcels', 'seasons')[place]][what]:.2f}"


def _mib(peak: float | None) -> str:
    return "not counted here" if peak is None else f"{peak:,.0f} MiB"


def _seconds(served: Mapping[str, Any]) -> str:
    return f"{served['measuring']:.2f} s, {served['judging']:.2f} s"
