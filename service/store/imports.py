"""Figures measured elsewhere: kept as scenes of kind `imported`."""

import hashlib
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from itertools import groupby
from typing import Final

import numpy as np
from sqlalchemy import select
from sqlalchemy.orm import Session

from service.store.looks import Observed, all_observations_of_scene
from service.store.observations import Measured, record
from service.store.scenes import SceneState
from service.store.sessions import serialise
from service.store.tables import Scene

RULE: Final = "import"
STATS: Final = ("mean", "sd", "min", "p10", "p50", "p90", "max", "pixels")

Shape = tuple[tuple[str, ...], ...]
"""The measures of a write, each with its statistics."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Figure:
    """One measure of one parcel at one instant, as sent.

    `stats` holds those that were given; `valid_share` None was not given and counts as 1.
    """

    parcel_id: int
    boundary_id: int
    measure: str
    observed_at: datetime
    sensor: str
    source: str
    harmonised: bool
    stats: Mapping[str, float]
    valid_share: float | None

    @property
    def scene_key(self) -> tuple[datetime, str, str]:
        """What makes figures one scene: instant, sensor and source."""
        return self.observed_at, self.sensor, self.source

    @property
    def write_key(self) -> tuple[bool, bool]:
        """What a recipe says of a figure beside its measure."""
        return self.valid_share is None, self.harmonised


Row = tuple[int, float, dict[str, Figure]]
"""A parcel, its valid share, and its figures by measure."""


@dataclass(slots=True, kw_only=True)
class Imported:
    """What became of the figures, and the scenes that have new ones or are newly judged."""

    created: int = 0
    updated: int = 0
    unchanged: int = 0
    scenes: list[Scene]


def import_figures(
    session: Session, figures: Iterable[Figure], *, assess: bool, at: datetime
) -> Imported:
    """Keep figures as further writes of their scenes; those that are there already do nothing.

    How figures are cut into calls does not matter: each write holds just what was sent and
    was new, and the newest write of a measure counts. A scene that is to be assessed once is
    judged from then on.
    """
    serialise(session, "scenes")
    result = Imported(scenes=[])
    by_scene = sorted(figures, key=lambda figure: figure.scene_key)
    for _, of_scene in groupby(by_scene, key=lambda figure: figure.scene_key):
        sent = list(of_scene)
        scene = _scene(session, sent[0], at=at)
        fresh = _fresh(session, scene, sent, result)
        if fresh:
            _write(session, scene, fresh, at=at)
        if fresh or (assess and not scene.is_judged):
            result.scenes.append(scene)
        scene.is_judged = scene.is_judged or assess
    return result


def _scene(session: Session, figure: Figure, *, at: datetime) -> Scene:
    identity = "\n".join((figure.observed_at.isoformat(), figure.sensor, figure.source))
    digest = hashlib.sha256(identity.encode()).hexdigest()
    ref = f"import-{digest[:24]}"
    row = session.scalar(select(Scene).where(Scene.ref == ref))
    if row is None:
        row = Scene(
            ref=ref,
            kind="imported",
            is_judged=False,
            sensor=figure.sensor,
            platform=None,
            tile=None,
            acquired_at=figure.observed_at,
            processing_baseline=None,
            details={"source": figure.source},
            digest=digest,
            grid_id=None,
            supersedes_id=None,
            generation=0,
            state=SceneState.DONE,
            progress=1.0,
            report=None,
            failure=None,
            received_at=at,
            changed_at=at,
        )
        session.add(row)
        session.flush()
    return row


def _fresh(
    session: Session, scene: Scene, sent: Sequence[Figure], result: Imported
) -> list[Figure]:
    """Return the figures that are not there yet or differ, and count all of them."""
    known: dict[tuple[int, str], Observed] = {}
    if scene.generation:
        for row in all_observations_of_scene(session, scene.id):
            for measure in row.places.measures:
                known[row.parcel_id, measure] = row
    fresh = []
    for figure in sent:
        held = known.get((figure.parcel_id, figure.measure))
        if held is None:
            result.created += 1
        elif _is_same(figure, held):
            result.unchanged += 1
            continue
        else:
            result.updated += 1
        fresh.append(figure)
    return fresh


def _is_same(figure: Figure, held: Observed) -> bool:
    if held.places.harmonised != figure.harmonised:
        return False
    share = np.float32(1.0 if figure.valid_share is None else figure.valid_share)
    return np.float32(held.of_look("valid_share")) == share and all(
        _as_stored(held.figure(f"{figure.measure}.{stat}")) == _as_stored(figure.stats.get(stat))
        for stat in STATS
    )


def _as_stored(value: float | None) -> np.float32 | None:
    return None if value is None else np.float32(value)


def _write(session: Session, scene: Scene, fresh: Sequence[Figure], *, at: datetime) -> None:
    """Write figures in as few writes as say nothing of what was not sent.

    A write holds the same measures of all its parcels: a measure that was not sent for a
    parcel must not hide what an earlier write says of it.
    """
    rows: dict[tuple[int, bool, bool, float], dict[str, Figure]] = {}
    for figure in fresh:
        share = 1.0 if figure.valid_share is None else figure.valid_share
        rows.setdefault((figure.parcel_id, *figure.write_key, share), {})[figure.measure] = figure
    writes: dict[tuple[bool, bool, Shape], list[Row]] = {}
    for (parcel_id, assumed, harmonised, share), by_measure in rows.items():
        shape = tuple((m, *sorted(by_measure[m].stats)) for m in sorted(by_measure))
        writes.setdefault((assumed, harmonised, shape), []).append((parcel_id, share, by_measure))
    for (assumed, harmonised, _), parcels in writes.items():
        for distinct in _distinct(parcels):
            scene.generation += 1
            session.flush()
            measured = _measured(distinct, assumed=assumed, harmonised=harmonised)
            record(session, scene, measured, at=at)


def _distinct(parcels: Sequence[Row]) -> list[list[Row]]:
    """Split rows so that no parcel is twice in one write (it may have two valid shares)."""
    layers: list[list[Row]] = []
    seen: dict[int, int] = {}
    for row in parcels:
        layer = seen.get(row[0], 0)
        seen[row[0]] = layer + 1
        if layer == len(layers):
            layers.append([])
        layers[layer].append(row)
    return layers


def _measured(parcels: Sequence[Row], *, assumed: bool, harmonised: bool) -> Measured:
    first = parcels[0][2]
    columns = [f"{m}.{stat}" for m in sorted(first) for stat in STATS if stat in first[m].stats]
    figures = np.array(
        [
            [share, *(by_measure[m].stats[stat] for m, stat in map(_split, columns))]
            for _, share, by_measure in parcels
        ],
        dtype=np.float32,
    )
    return Measured(
        parcel_ids=[parcel_id for parcel_id, _, _ in parcels],
        boundary_ids=[next(iter(of.values())).boundary_id for _, _, of in parcels],
        columns=[f"{RULE}.valid_share", *columns],
        figures=figures,
        recipe={
            "rule": RULE,
            "valid_share": "assumed" if assumed else "given",
            "harmonised": harmonised,
        },
        scaling={},
    )


def _split(column: str) -> tuple[str, str]:
    measure, _, stat = column.partition(".")
    return measure, stat
