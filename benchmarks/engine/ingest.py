"""A whole ingest against decoding: from `running` to the commit, judging left out."""

import hashlib
import math
import shutil
import sqlite3
import statistics
from collections.abc import Callable, Mapping, Sequence
from dataclasses import asdict, dataclass
from datetime import UTC, datetime, timedelta
from pathlib import Path
from tempfile import TemporaryDirectory

import shapely

from benchmarks.engine.costs import Cost, cost_of, median_ratio, memory_watched
from benchmarks.engine.ours import case_of
from benchmarks.engine.results import Figure, Result
from benchmarks.engine.scenes import FULL_SIDE, SceneOptions, decode_all, parcels_on, scene_in
from service.app import open_resources
from service.clock import now
from service.jobs.measuring import measure_scene
from service.jobs.resources import Resources
from service.settings import Settings
from service.store.parcels import ParcelChange, upsert_parcels
from service.store.scenes import FileSent, SceneSent, keep_scene
from service.tiles.intake import footprint
from service.tiles.reading import SceneSource, measuring_grid
from service.zonal.boundary import Outline

_FIRST_SCENE = datetime(2026, 1, 1, 10, 0, tzinfo=UTC)
_EVERY = timedelta(days=5)


@dataclass(frozen=True, slots=True, kw_only=True)
class IngestOptions:
    """What to run.

    Attributes
    ----------
    cache
        Folder of invented scenes.
    full
        A full tile with ten and a hundred thousand parcels; else a fifth of its side.
    compress
        How the scene's files are compressed.
    """

    cache: Path
    full: bool = False
    compress: str = "deflate"

    @property
    def side(self) -> int:
        """Rows and columns of the scene."""
        return FULL_SIDE if self.full else 2_048

    @property
    def parcels(self) -> int:
        """How many parcels; as dense on the small scene as ten thousand on the full one."""
        return round(10_000 * (self.side / FULL_SIDE) ** 2)

    @property
    def turns(self) -> int:
        """How many scenes, after the first."""
        return 5 if self.full else 3

    def limit(self, figure: float) -> float | None:
        """Return a limit that was set for the full size, None at any other."""
        return figure if self.full else None


@dataclass(frozen=True, slots=True, kw_only=True)
class _Taken:
    """What some scenes took: in all, for decoding alone, for writing; and on the disk."""

    ingest: Sequence[Cost]
    decoding: Sequence[Cost]
    writing: Sequence[float]
    bytes_per_figure: float
    memory_above_idle: int

    @property
    def ratio(self) -> float:
        return median_ratio(self.ingest, self.decoding)


def run(options: IngestOptions, tell: Callable[[str], None]) -> Result:
    """Run the benchmark; `tell` takes what begins."""
    tell("making the scene")
    scene = SceneOptions(side=options.side, compress=options.compress)
    source = scene_in(options.cache / "scenes", scene)
    few, many = options.parcels, options.parcels * 10
    tell(f"measuring scenes with {few:,} parcels")
    spread = _ingested(options, source, few)
    tell("measuring scenes with the same parcels in a quarter of the blocks")
    clustered = _ingested(options, source, few, share=0.25)
    tell(f"measuring scenes with {many:,} parcels")
    crowd = _ingested(options, source, many)
    limit = options.limit
    figures = [
        Figure(
            name=f"whole ingest, {few:,} parcels, SQLite", unit="D", value=spread.ratio,
            must=limit(1.75), aim=limit(1.4),
            costs={"D": spread.decoding, "ingest": spread.ingest},
        ),
        Figure(
            name="the same parcels in a quarter of the blocks", unit="D", value=clustered.ratio,
            must=limit(0.8), aim=limit(0.6),
        ),
        Figure(
            name=f"whole ingest, {many:,} parcels", unit="D", value=crowd.ratio,
            must=limit(5.5), aim=limit(3.5), costs={"ingest": crowd.ingest},
        ),
        Figure(
            name="growth of writing, parcels times ten", unit="(exponent)",
            value=math.log10(statistics.median(crowd.writing) / statistics.median(spread.writing)),
            must=limit(1.05), aim=limit(1.0),
        ),
        Figure(
            name="bytes on disk per figure", unit="bytes", value=crowd.bytes_per_figure,
            must=limit(6), aim=limit(5),
        ),
        *(
            Figure(
                name=f"memory above idle, {count:,} parcels", unit="GB", must=limit(must),
                aim=limit(aim), value=taken.memory_above_idle / 1e9,
            )
            for count, taken, must, aim in ((few, spread, 0.8, 0.4), (many, crowd, 2.5, 0.8))
        ),
    ]  # fmt: skip
    told = {**asdict(options), "side": options.side, "parcels": few, "cache": None}
    return Result(benchmark="ingest", options=told, figures=figures)


def _ingested(
    options: IngestOptions, source: SceneSource, parcels: int, *, share: float = 1.0
) -> _Taken:
    """Measure some scenes of a fresh deployment, taking turns with decoding alone."""
    with TemporaryDirectory(prefix="furrowlight-bench-", dir=options.cache) as folder:
        settings = Settings(data=Path(folder) / "data", disk_reserve_bytes=0)
        work = open_resources(settings)
        _put_parcels(work, options, source, parcels, share)
        files = _kept_files(work, source)
        # The first scene makes the plan; the second watches memory.
        _measure(work, source, files, 0)
        with memory_watched() as memory:
            _measure(work, source, files, 1)
        before = _database_bytes(settings.data)
        ingest, decoding, writing = [], [], []
        for turn in range(2, 2 + options.turns):
            decoding.append(cost_of(lambda: decode_all(source)))
            taken, seconds = _measure(work, source, files, turn)
            ingest.append(taken)
            writing.append(seconds)
        held = _database_bytes(settings.data) - before
        stored = options.turns * parcels * _columns(settings.data)
        work.sessions.engine.dispose()
        return _Taken(
            ingest=ingest,
            decoding=decoding,
            writing=writing,
            bytes_per_figure=held / stored,
            memory_above_idle=memory.above_idle,
        )


def _put_parcels(
    work: Resources, options: IngestOptions, source: SceneSource, parcels: int, share: float
) -> None:
    outlines = parcels_on(options.side, parcels, share=share)
    case = case_of(source, outlines, work.settings.data / "plans")
    changes = [
        ParcelChange(
            ref=f"P{place:06}",
            outline=Outline(geometry=shapely.from_wkb(wkb), area_ha=outline.area / 1e4),
            given={},
        )
        for place, (wkb, outline) in enumerate(zip(case.stored, outlines, strict=True))
    ]
    with work.sessions.writing() as session:
        upsert_parcels(session, changes, at=now())


def _kept_files(work: Resources, source: SceneSource) -> dict[str, str]:
    """Put the scene's files into the archive; return their digests by part."""
    digests = {}
    for layer in source.layers:
        with work.archive.incoming() as path:
            shutil.copyfile(layer.path, path)
            digest = hashlib.sha256(path.read_bytes()).hexdigest()
            work.archive.keep(path, digest)
        digests[str(layer.role)] = digest
    return digests


def _measure(
    work: Resources, source: SceneSource, files: Mapping[str, str], turn: int
) -> tuple[Cost, float]:
    """Measure one more scene; return its cost, and the seconds after the figures were known."""
    grid = measuring_grid(source)
    sent = SceneSent(
        ref=f"scene-{turn}",
        sensor="sentinel-2-l2a",
        platform="sentinel-2a",
        tile="33UVQ",
        acquired_at=_FIRST_SCENE + turn * _EVERY,
        processing_baseline="05.10",
        details={"processing_baseline": "05.10"},
        digest=hashlib.sha256(str(turn).encode()).hexdigest(),
        grid=grid,
        footprint=footprint(grid),
        files=[FileSent(part=part, digest=digest, size=1) for part, digest in files.items()],
        replace=False,
    )
    with work.sessions.writing() as session:
        row, _ = keep_scene(session, sent, at=now())
        scene_id, generation = row.id, row.generation
    cost = cost_of(lambda: measure_scene(work, scene_id, generation))
    with work.sessions.reading() as session:
        row, _ = keep_scene(session, sent, at=now())
        seconds = (row.report or {})["seconds"]
    return cost, max(cost.wall - sum(seconds[step] for step in ("zones", "read_and_observe")), 1e-3)


def _database_bytes(data: Path) -> int:
    """Return the size of the database with everything in it written through."""
    with sqlite3.connect(data / "app.sqlite") as database:
        database.execute("PRAGMA wal_checkpoint(TRUNCATE)")
        pages, free, size = (
            database.execute(f"PRAGMA {name}").fetchone()[0]
            for name in ("page_count", "freelist_count", "page_size")
        )
    database.close()
    return int((pages - free) * size)


def _columns(data: Path) -> int:
    with sqlite3.connect(data / "app.sqlite") as database:
        (length,) = database.execute("SELECT length(figures) FROM observation LIMIT 1").fetchone()
    database.close()
    return int(length) // 4
