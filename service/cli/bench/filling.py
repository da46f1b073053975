"""A store filled with seasons of a wide land, by the code that records scenes."""

from collections.abc import Sequence
from datetime import UTC, date, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Final

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import insert
from sqlalchemy.orm import Session

from service.clock import now
from service.jobs.resources import Resources
from service.observe import columns_for
from service.settings import Settings
from service.spectral.indices import INDICES, Index
from service.spectral.roles import BandRole
from service.store.judging import want_judging_of_scenes
from service.store.observations import Measured, record
from service.store.sessions import Sessions, migrate, open_engine
from service.store.tables import Boundary, CropSeason, Parcel, Scene
from service.tiles.archive import Archive
from service.tiles.plans import Plans

if TYPE_CHECKING:
    from benchmarks.wide_land import WideLand

_BEGUN: Final = datetime(2020, 1, 1, tzinfo=UTC)
_RULE: Final = "clear"


def resources_on(data: Path) -> Resources:
    """Return what judging works with, on a data folder that is brought up to date."""
    data.mkdir(parents=True, exist_ok=True)
    settings = Settings(data=data, disk_reserve_bytes=0)
    engine = open_engine(settings.app_url)
    migrate(engine, lock_folder=data)
    return Resources(
        settings=settings,
        sessions=Sessions(engine),
        archive=Archive(data),
        plans=Plans(data / "plans", limit_bytes=settings.plan_limit_bytes),
    )


def fill(work: Resources, land: "WideLand", seasons: Sequence[int]) -> None:
    """Add the parcels of a land, what grew there up to the last season, and past seasons."""
    with work.sessions.writing() as session:
        _settle(session, land, range(min(seasons), land.running + 1))
    for season in seasons:
        for number in range(land.passes):
            add_pass(work, land, season, number)


def _settle(session: Session, land: "WideLand", seasons: Sequence[int]) -> None:
    numbered = list(enumerate(land.refs, start=1))
    parcels = [
        {
            "id": at,
            "ref": ref,
            "name": None,
            "holding_id": None,
            "created_at": _BEGUN,
            "retired_at": None,
            "revision": 0,
        }
        for at, ref in numbered
    ]
    boundaries = [
        {
            "id": at,
            "parcel_id": at,
            "valid_from": None,
            "valid_to": None,
            "recorded_at": _BEGUN,
            "closed_at": None,
            "wkb": outline.wkb,
            "area_ha": 1.0,
            **dict(zip(("west", "south", "east", "north"), outline.bounds, strict=True)),
        }
        for at, outline in enumerate(land.outlines(), start=1)
    ]
    session.execute(insert(Parcel), parcels)
    session.execute(insert(Boundary), boundaries)
    for season in seasons:
        session.execute(insert(CropSeason), _crops(land, season))


def _crops(land: "WideLand", season: int) -> list[dict[str, int | str | date | None]]:
    first, last = land.days_of(season)
    return [
        {
            "parcel_id": number + 1,
            "crop": land.crop_of(number, season),
            "from_on": first,
            "until_on": last,
            "sown_on": None,
            "harvested_on": None,
        }
        for number in range(land.parcels)
    ]


def add_pass(work: Resources, land: "WideLand", season: int, number: int) -> None:
    """Record a pass as if just measured, and promise that it is judged."""
    measured = _measured(land, season, number)
    ref = f"wide-{season}-{number}"
    with work.sessions.writing() as session:
        scene = Scene(
            ref=ref,
            kind="measured",
            is_judged=season == land.running,
            sensor="sentinel-2-l2a",
            platform="sentinel-2a",
            acquired_at=land.acquired_at(season, number),
            processing_baseline="05.10",
            details={},
            digest=f"{season * 1000 + number:064d}",
            generation=1,
            state="done",
            progress=1.0,
            received_at=now(),
            changed_at=now(),
        )
        session.add(scene)
        session.flush()
        record(session, scene, measured, at=now())
        want_judging_of_scenes(session, [scene], work.settings.season_starts)


def _measured(land: "WideLand", season: int, number: int) -> Measured:
    """Return figures of all columns that a scene of these bands has; only means tell apart."""
    bands = land.spectra(season, number)
    roles = tuple(BandRole(band) for band in land.bands)
    indices = tuple(i for i in INDICES.values() if i.watched and set(i.roles) <= set(roles))
    columns = columns_for(roles, indices, _RULE, {})
    values = {role.value: bands[:, at] for at, role in enumerate(roles)}
    values |= {index.id: _values(index, bands, roles) for index in indices}
    figures = np.zeros((land.parcels, len(columns)), dtype=np.float32)
    for at, column in enumerate(columns):
        measure, _, stat = column.partition(".")
        if measure in values:
            figures[:, at] = values[measure]
        elif stat == "valid_share":
            figures[:, at] = land.shares(season, number)
        elif stat == "pixels":
            figures[:, at] = 100.0
    ids = list(range(1, land.parcels + 1))
    return Measured(
        parcel_ids=ids,
        boundary_ids=ids,
        columns=columns,
        figures=figures,
        recipe={"rule": _RULE, "rules": {}},
        scaling={},
    )


def _values(
    index: Index, bands: NDArray[np.float64], roles: Sequence[BandRole]
) -> NDArray[np.float64]:
    return np.asarray(
        index.compute(**{role.value: bands[:, roles.index(role)] for role in index.roles})
    )
