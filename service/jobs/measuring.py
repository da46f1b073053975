"""Measuring one scene: pixels in, observations out, nothing half-way."""

import time
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sqlalchemy.orm import Session

from service import __version__
from service.clock import now
from service.errors import RejectedInput
from service.jobs.resources import Resources
from service.jobs.sources import scene_source
from service.jobs.warming import warm_up
from service.observe import Observed, may_count, observe
from service.spectral.gathered import QUALITY, SATURATION, Gathered
from service.spectral.indices import INDICES, Index
from service.spectral.quality import QualityLayer
from service.spectral.quality_bits import SaturationLayer
from service.spectral.roles import BandRole
from service.spectral.sensors import Sensor
from service.store.judging import want_judging_of_scenes
from service.store.looks import observations_of_scene
from service.store.observations import (
    Measured,
    count_writes,
    has_write,
    parcels_to_measure,
    record,
)
from service.store.reports import SceneFigures, figures_of, out_of_range, scene_counts
from service.store.scenes import SceneState, lock_scene, retire_figures
from service.store.sensors import sensor_of_scene
from service.store.tables import Scene
from service.tiles.reading import SceneSource, grids_of, read_strips
from service.zonal.coverage import MIN_COVERAGE
from service.zonal.grid import Grid

WATCHED: tuple[Index, ...] = tuple(index for index in INDICES.values() if index.watched)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Task:
    """What there is to measure, read in one short session."""

    source: SceneSource
    parcels: list[tuple[int, int, bytes]]
    quality: QualityLayer | None
    saturation: SaturationLayer | None
    rule: str
    must_keep: frozenset[int]
    profile: dict[str, Any] | None


def measure_scene(work: Resources, scene_id: int, generation: int) -> bool:
    """Measure a scene and record its observations in one transaction.

    Returns False if the scene was changed, superseded or withdrawn since the work was
    promised: nothing is recorded then. Doing it again after it succeeded changes nothing.

    Raises
    ------
    RejectedInput
        The pixels can't be read, or are not what the metadata says.
    """
    scene = _begin(work, scene_id, generation)
    if scene is None:
        return False
    warm_up()
    started = time.monotonic()
    task = _task(work, scene)
    if task is None:
        return True
    measured, observed, seconds = _measured(work, task)
    with work.sessions.writing() as session:
        row = lock_scene(session, scene_id)
        if row.generation != generation:
            return False
        if not has_write(session, row, generation):
            record(session, row, measured, at=now())
            replaced = _supersede(session, row)
            want_judging_of_scenes(session, [row, *replaced], work.settings.season_starts)
        seconds["total"] = round(time.monotonic() - started, 3)
        held = _figures_held(session, scene_id, measured)
        row.report = _report(task, held, observed, seconds)
        row.progress = 0.9
    return True


def _supersede(session: Session, row: Scene) -> list[Scene]:
    """End the life of the scene that this one replaces, in the step that brings its figures."""
    if row.supersedes_id is None:
        return []
    replaced = lock_scene(session, row.supersedes_id)
    if replaced.state not in (SceneState.SUPERSEDED, SceneState.WITHDRAWN):
        retire_figures(session, replaced, SceneState.SUPERSEDED, at=now())
    return [replaced]


def _begin(work: Resources, scene_id: int, generation: int) -> Scene | None:
    """Say that the work is being done; return the scene unless it is another's by now."""
    with work.sessions.writing() as session:
        row = lock_scene(session, scene_id)
        if row.generation != generation or row.state not in (
            SceneState.QUEUED,
            SceneState.RUNNING,
        ):
            return None
        row.state = SceneState.RUNNING
        row.progress = max(row.progress, 0.1)
        row.changed_at = now()
        session.flush()
        _ = row.files, row.grid
        session.expunge_all()
        return row


def _task(work: Resources, scene: Scene) -> _Task | None:
    """Return what is to be measured, or None if this generation has its observations."""
    with work.sessions.reading() as session:
        if has_write(session, scene, scene.generation):
            return None
        sensor = sensor_of_scene(session, scene.sensor, scene.details)
        parcels = parcels_to_measure(session, scene)
        kept = frozenset(row.parcel_id for row in observations_of_scene(session, scene.id))
    has_quality = scene.details.get(QUALITY) != "none" and sensor.quality is not None
    files = {file.part: work.archive.path_of(file.digest) for file in scene.files}
    buffer = work.settings.cloud_buffer_cells if has_quality else 0
    source = scene_source(sensor, scene.details, files, cloud_buffer_cells=buffer)
    return _Task(
        source=source,
        parcels=parcels,
        quality=sensor.quality if has_quality else None,
        saturation=sensor.saturation if source.saturation is not None else None,
        rule=sensor.quality_rule if has_quality else "none",
        must_keep=kept,
        profile=_profile(sensor),
    )


def _profile(sensor: Sensor) -> dict[str, Any] | None:
    """Name the version of a profile that is not built in, for the recipe."""
    return {"sensor": sensor.id, "version": sensor.version} if sensor.version else None


def _measured(work: Resources, task: _Task) -> tuple[Measured, Observed, dict[str, float]]:
    """Measure without any session open."""
    started = time.monotonic()
    grids = grids_of(task.source)
    plan = work.plans.plan_for(grids, [wkb for _, _, wkb in task.parcels])
    zoned = time.monotonic()
    quality = task.quality
    strips = read_strips(
        task.source,
        plan,
        may_count=may_count(quality, WATCHED, task.rule) if quality is not None else None,
    )
    observed = observe(
        _checked(strips, task),
        plan,
        roles=tuple(BandRole(band.role) for band in task.source.bands),
        indices=WATCHED,
        quality=quality,
        rule=task.rule,
    )
    read = time.monotonic()
    # A parcel is in the footprint if it owns a cell there; one whose outline moved away
    # since keeps a row that says so.
    owns = plan.own_cells()
    keep = np.array(
        [has or p in task.must_keep for has, (p, _, _) in zip(owns, task.parcels, strict=True)],
        dtype=bool,
    )
    return (
        _kept(task, observed, keep, grids.measuring),
        observed,
        {"zones": round(zoned - started, 3), "read_and_observe": round(read - zoned, 3)},
    )


def _kept(task: _Task, observed: Observed, keep: NDArray[np.bool_], grid: Grid) -> Measured:
    kept = [parcel for parcel, wanted in zip(task.parcels, keep, strict=True) if wanted]
    measured = [index for index in WATCHED if index.id in observed.measured]
    buffer = task.source.cloud_buffer
    return Measured(
        parcel_ids=[parcel_id for parcel_id, _, _ in kept],
        boundary_ids=[boundary_id for _, boundary_id, _ in kept],
        columns=observed.columns,
        figures=observed.figures[keep],
        recipe={
            "profile": task.profile,
            "rule": task.rule,
            "rules": dict(observed.rules),
            "quality": task.quality.id if task.quality else None,
            "saturation": task.saturation.id if task.saturation else None,
            "cloud_buffer_cells": buffer.cells if buffer else 0,
            "formulas": {index.id: index.version for index in measured},
            "min_coverage": MIN_COVERAGE,
            "coarser_bands": "nearest, at the centre of the finer cell",
            "cell_m2": grid.cell_area_m2,
            "harmonisation": None,
            "code": __version__,
        },
        scaling={
            str(band.role): {"scale": band.scaling.scale, "offset": band.scaling.offset}
            for band in task.source.bands
            if band.scaling is not None
        },
    )


def _checked(strips: Iterable[Gathered], task: _Task) -> Iterator[Gathered]:
    """Pass the strips on, as long as their layers have no number that they can't have."""
    for strip in strips:
        for part, layer, numbers in (
            (QUALITY, task.quality, strip.classes),
            (SATURATION, task.saturation, strip.bits),
        ):
            if layer is not None and numbers is not None and layer.unknown(numbers.numbers):
                raise RejectedInput.at(
                    f"/{part}",
                    f"The {part} layer holds values that {layer.id.upper()} can't have. Send the "
                    "product's own layer, not resampled or recoded.",
                    code="wrong-quality-layer",
                )
        yield strip


def _figures_held(session: Session, scene_id: int, measured: Measured) -> list[SceneFigures]:
    """Return the figures of all parcels in a scene: those just written, if there are no others."""
    if count_writes(session, scene_id) > 1:
        return figures_of(observations_of_scene(session, scene_id))
    rule = str(measured.recipe["rule"])
    return [SceneFigures(columns=measured.columns, rule=rule, figures=measured.figures)]


def _report(
    task: _Task, held: list[SceneFigures], observed: Observed, seconds: dict[str, float]
) -> dict[str, Any]:
    normalised = [i for i in observed.measured if INDICES[i].normalised]
    leaving = out_of_range(held, normalised)
    indices: dict[str, dict[str, Any]] = {
        index_id: {"state": "measured", "parcels_out_of_range": leaving.get(index_id, 0)}
        for index_id in observed.measured
    }
    for index_id in observed.measured:
        if INDICES[index_id].quality_rule is not None and task.quality is not None:
            # It is read by the scene's rule where the layer lacks the one that it asks for.
            indices[index_id]["rule"] = observed.rules.get(index_id, task.rule)
    for index_id, reason in observed.skipped.items():
        indices[index_id] = {"state": "skipped", "reason": reason}
    return {**scene_counts(held), "indices": indices, "seconds": seconds}
