"""What befalls parcels: seven kinds of events, their course, and when they become visible."""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, fields
from typing import Final

import numpy as np
from numpy.typing import NDArray

from benchmarks.histories.crops import CROPS, GROWTH, HARVEST, RIPENING, SOWING, Places
from benchmarks.histories.optics import INDICES, Figures, measures_of, reflectance_of
from benchmarks.histories.stands import (
    Days,
    Land,
    emerges_on,
    harvest_on,
    ripens_on,
    seen_at,
)

VISIBLE: Final = 0.10
"""An event is visible from the first day on which it has lowered NDVI, NDMI or NBR, or raised
NDWI, by so much in the true signal, without noise, against the same stand without it."""
OVER: Final = 0.05
"""It is over when its change has been below this for `_QUIET_DAYS`."""
SUDDEN: Final = ("flood", "burn", "early_cut", "hail")
SLOW: Final = ("moisture_stress", "late_emergence", "decline")
KINDS: Final = (*SUDDEN, *SLOW)
CAUSES: Final[Mapping[str, str]] = {
    "flood": "flood",
    "burn": "burn",
    "early_cut": "removal",
    "hail": "partial_loss",
    "moisture_stress": "moisture_stress",
    "late_emergence": "late_growth",
    "decline": "decline",
}
"""The cause that an alert of each kind should name."""
_WORSE: Final = np.array([-1.0, -1.0, -1.0, 1.0])
_LAST_ONSET: Final = 350.0
_QUIET_DAYS: Final = 15


@dataclass(frozen=True, slots=True, kw_only=True)
class Event:
    """What befell a parcel.

    Days count from the first of the history. `visible` to `faded` are the first and the last
    day on which its change is visible, `over` the last on which a trace of it is left; all
    None when it never became visible. What follows after a quiet time is not the event any
    more. `change` is the largest adverse change of an index.
    """

    kind: str
    parcel: int
    season: int
    onset: int
    visible: int | None
    faded: int | None
    over: int | None
    change: float

    @property
    def is_sudden(self) -> bool:
        """Whether it comes at once."""
        return self.kind in SUDDEN


@dataclass(frozen=True, slots=True, kw_only=True)
class Drawn:
    """An event to be: its onset by day of season, and numbers from 0 to 1 that shape it."""

    kind: str
    parcel: int
    season: int
    onset: float
    dice: tuple[float, ...]


def draw_events(rng: np.random.Generator, land: Land, season: int, *, share: float) -> list[Drawn]:
    """Draw events for a share of the parcels of a season, each kind as often as it can be."""
    parcels = rng.permutation(len(land.crop))[: max(1, round(share * len(land.crop)))]
    drawn = []
    for number, parcel in enumerate(parcels):
        turned = [KINDS[(number + turn) % len(KINDS)] for turn in range(len(KINDS))]
        for kind in turned:
            window = _WINDOWS[kind](land, int(parcel), season)
            if window is not None and window[1] > window[0]:
                onset = float(rng.uniform(*window))
                drawn.append(
                    Drawn(
                        kind=kind,
                        parcel=int(parcel),
                        season=season,
                        onset=onset,
                        dice=tuple(rng.random(4)),
                    )
                )
                break
    return drawn


def lateness_of(drawn: Sequence[Drawn], land: Land) -> Figures:
    """Return by how many days more stands come late, shape (parcels, seasons, 4)."""
    late = np.zeros(land.shifts.shape)
    for one in drawn:
        if one.kind == "late_emergence":
            days = 22.0 + 18.0 * one.dice[0]
            late[one.parcel, one.season, SOWING] = days
            late[one.parcel, one.season, GROWTH] = 0.65 * days
            late[one.parcel, one.season, RIPENING] = 0.35 * days
            late[one.parcel, one.season, HARVEST] = 0.25 * days
    return late


def befall(days: Days, drawn: Sequence[Drawn], land: Land) -> None:
    """Let events change stands, in place; late emergence is in the stands already."""
    for one in drawn:
        course = _COURSES.get(one.kind)
        if course is None:
            continue
        start = int(land.season_starts[one.season])
        onset = start + int(one.onset)
        end = start + _ends_on(one, land)
        rows = {each.name: getattr(days, each.name)[one.parcel, onset:end] for each in fields(days)}
        if end > onset:
            course(rows, np.arange(end - onset, dtype=np.float64), one.dice)


def witnessed(
    drawn: Sequence[Drawn], befallen: Days, unharmed: Days, land: Land, sun_zenith: Figures
) -> list[Event]:
    """Return events with what shows of them.

    Parameters
    ----------
    befallen, unharmed
        Stands with and without events: a row for each event, in their order.
    sun_zenith
        At the pass of each day, shape (days,).
    """
    events = []
    for row, one in enumerate(drawn):
        start = int(land.season_starts[one.season])
        onset = start + int(one.onset)
        span = np.arange(onset, min(start + 365, sun_zenith.size))
        change = _adverse_change(
            befallen, unharmed, land, row=row, parcel=one.parcel, days=span, sun=sun_zenith[span]
        )
        shown = _spell(change >= VISIBLE, since=0)
        left = None if shown is None else _spell(change >= OVER, since=shown[0])
        events.append(
            Event(
                kind=one.kind,
                parcel=one.parcel,
                season=one.season,
                onset=onset,
                visible=None if shown is None else onset + shown[0],
                faded=None if shown is None else onset + shown[1],
                over=None if left is None else onset + left[1],
                change=float(change.max(initial=0.0)),
            )
        )
    return events


def _spell(holds: NDArray[np.bool_], *, since: int) -> tuple[int, int] | None:
    """Return the first and last day on which something holds, up to a quiet time after it."""
    days = since + np.flatnonzero(holds[since:])
    if days.size == 0:
        return None
    pauses = np.flatnonzero(np.diff(days) > _QUIET_DAYS)
    return int(days[0]), int(days[pauses[0]] if pauses.size else days[-1])


def dry_out(days: Days, land: Land, season: int, *, onset: int, thirst: Figures) -> None:
    """Let a drought take all stands of a region, in place.

    `thirst` is how much it takes of each parcel beside others, shape (parcels,).
    """
    start = int(land.season_starts[season])
    at = np.arange(start + onset, start + 365, dtype=np.int64)
    since = (at - at[0]).astype(np.float64)
    depth = np.interp(since, (0.0, 35.0, 75.0, 100.0), (0.0, 1.0, 1.0, 0.0))
    by_crop = np.array([crop.drought for crop in CROPS])[land.crop[:, season]]
    taken = np.clip(depth * (thirst * by_crop)[:, None], 0.0, 1.3)
    days.leaf_water[:, at] *= 1.0 - 0.45 * taken
    days.lai[:, at] *= 1.0 - 0.22 * taken
    days.chlorophyll[:, at] *= 1.0 - 0.15 * taken
    days.brown[:, at] += 0.08 * taken
    days.wetness[:, at] *= 1.0 - 0.7 * np.minimum(taken, 1.0)


def _adverse_change(
    befallen: Days,
    unharmed: Days,
    land: Land,
    *,
    row: int,
    parcel: int,
    days: Places,
    sun: Figures,
) -> Figures:
    """Return the largest adverse change of an index day by day."""
    rows, ground = np.full(days.size, row), np.full(days.size, parcel)
    seen = []
    for stands in (befallen, unharmed):
        bands = reflectance_of(seen_at(stands, land, rows, days, sun, ground), "sentinel-2-l2a")
        seen.append(measures_of(bands)[:, : len(INDICES)])
    change: Figures = ((seen[0] - seen[1]) * _WORSE).max(axis=1)
    return change


def _ends_on(one: Drawn, land: Land) -> int:
    """Return the day of season from which nothing of the event is left: the field is cleared."""
    if one.kind in {"flood", "burn"} or CROPS[land.crop[one.parcel, one.season]].is_grass:
        return 365
    return int(harvest_on(land, one.parcel, one.season))


Window = tuple[float, float] | None


def _any_time(land: Land, parcel: int, season: int) -> Window:
    """Return when floods come, with rain and melting snow: from autumn to early summer."""
    return (20.0, min(270.0, ripens_on(land, parcel, season)))


def _when_dry(land: Land, parcel: int, season: int) -> Window:
    """Return when fires run: through ripe stands and stubble, through grass in late summer."""
    crop = CROPS[land.crop[parcel, season]]
    if crop.is_grass:
        return (270.0, 330.0)
    if crop.harvest > 320.0:
        return None
    harvest = harvest_on(land, parcel, season)
    return (ripens_on(land, parcel, season) + 6.0, min(harvest + 3.0, _LAST_ONSET))


def _when_green(land: Land, parcel: int, season: int) -> Window:
    """Return when a stand has leaves to lose, well before it ripens."""
    crop = CROPS[land.crop[parcel, season]]
    if crop.is_grass:
        return None
    shift = float(land.shifts[parcel, season, GROWTH])
    leafy = next(knot[0] for knot in crop.knots if knot[1] >= _LEAFY) + shift
    return (max(leafy, 165.0), ripens_on(land, parcel, season) - 14.0)


def _when_growing(land: Land, parcel: int, season: int) -> Window:
    """Return when something slow still has time to show before the stand ripens."""
    crop = CROPS[land.crop[parcel, season]]
    if crop.is_grass:
        return (190.0, 310.0)
    found = _when_green(land, parcel, season)
    return None if found is None else (found[0], min(found[1] - 12.0, _LAST_ONSET - 40.0))


def _at_emergence(land: Land, parcel: int, season: int) -> Window:
    crop = CROPS[land.crop[parcel, season]]
    emergence = emerges_on(land, parcel, season)
    return None if crop.is_grass or emergence < 0.0 else (emergence, emergence + 0.5)


_LEAFY: Final = 1.7
_WINDOWS: Final[Mapping[str, Callable[[Land, int, int], Window]]] = {
    "flood": _any_time,
    "burn": _when_dry,
    "early_cut": _when_green,
    "hail": _when_green,
    "moisture_stress": _when_growing,
    "late_emergence": _at_emergence,
    "decline": _when_growing,
}

Rows = dict[str, Figures]


def _flood(rows: Rows, since: Figures, dice: Sequence[float]) -> None:
    """Let water stand for days and drain for weeks; it harms the stand, the ground stays wet."""
    stands, drains = 3.0 + 12.0 * dice[0], 10.0 + 20.0 * dice[1]
    left = np.interp(since, (stands, stands + drains), (1.0, 0.0))
    rows["water"][:] = (0.40 + 0.6 * dice[2]) * left
    harm = (0.2 + 0.5 * dice[3]) * np.interp(since, (0.0, 10.0, 50.0, 110.0), (0.0, 1.0, 1.0, 0.0))
    rows["lai"] *= 1.0 - harm
    rows["wetness"][:] = np.maximum(rows["wetness"], np.where(left > 0.0, 1.0, 0.0))


def _burn(rows: Rows, since: Figures, dice: Sequence[float]) -> None:
    """Burn what stands; char covers most of the ground, and is washed and ploughed away."""
    kept = np.exp(-since / (35.0 + 50.0 * dice[0]))
    rows["char"][:] = (0.5 + 0.45 * dice[1]) * kept
    rows["lai"] *= 0.05 + 0.5 * np.clip((since - 25.0) / 80.0, 0.0, 1.0)
    rows["litter"] *= 0.15


def _early_cut(rows: Rows, since: Figures, dice: Sequence[float]) -> None:
    """Take the stand weeks before its time; a little comes again."""
    rows["lai"] *= 0.04 + 0.10 * dice[0] + 0.1 * np.clip(since / 60.0, 0.0, 1.0)
    rows["litter"][:] = np.maximum(rows["litter"], 0.2 + 0.3 * dice[1])
    rows["flowers"][:] = 0.0


def _hail(rows: Rows, since: Figures, dice: Sequence[float]) -> None:
    """Tear leaves; part of them browns, part of the loss grows again."""
    loss = (0.45 + 0.35 * dice[0]) * np.interp(since, (0.0, 12.0, 60.0), (1.0, 1.0, 0.6))
    rows["lai"] *= 1.0 - loss
    rows["brown"] += (0.05 + 0.25 * dice[1]) * np.interp(since, (0.0, 4.0, 40.0), (0.4, 1.0, 0.3))
    rows["flowers"] *= 0.3
    rows["litter"][:] = np.maximum(rows["litter"], 0.3)


def _moisture_stress(rows: Rows, since: Figures, dice: Sequence[float]) -> None:
    """Dry the leaves while they are green; leaf area follows."""
    ramp, lasts = 14.0 + 16.0 * dice[0], 25.0 + 25.0 * dice[1]
    depth = np.interp(since, (0.0, ramp, ramp + lasts, ramp + lasts + 25.0), (0.0, 1.0, 1.0, 0.0))
    rows["leaf_water"] *= 1.0 - (0.50 + 0.22 * dice[2]) * depth
    rows["lai"] *= 1.0 - (0.12 + 0.25 * dice[3]) * depth
    rows["chlorophyll"] *= 1.0 - 0.15 * depth
    rows["wetness"] *= 1.0 - 0.7 * depth


def _decline(rows: Rows, since: Figures, dice: Sequence[float]) -> None:
    """Let disease or hunger make less leaf, paler and browner, until the harvest."""
    depth = np.clip(since / (18.0 + 22.0 * dice[0]), 0.0, 1.0)
    rows["lai"] *= 1.0 - (0.40 + 0.28 * dice[1]) * depth
    rows["chlorophyll"] *= 1.0 - (0.25 + 0.30 * dice[2]) * depth
    rows["brown"] += (0.08 + 0.22 * dice[3]) * depth


_COURSES: Final[Mapping[str, Callable[[Rows, Figures, Sequence[float]], None]]] = {
    "flood": _flood,
    "burn": _burn,
    "early_cut": _early_cut,
    "hail": _hail,
    "moisture_stress": _moisture_stress,
    "decline": _decline,
}
