"""The four real events of the running season: which field, when, and what they do to it."""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from quillmere.growth import Habits, Stand, Weather, harvest_day, joined, stand_on
from quillmere.land import BARLEY, BEET, FIELDS, GRASS, MAIZE, RAPE, WHEAT, YEARS

Window = tuple[str, int, int]

RUNNING: Final = YEARS[-1]
# Looks that must be clear around the first one that shows an event.
LOOKS_BEFORE, LOOKS_AFTER = 2, 4
STRESS_RAMP_DAYS: Final = 26.0
# Dry leaves show from this part of the ramp on: NDMI is then about 0.06 lower.
STRESS_SHOWS: Final = 0.3


@dataclass(frozen=True, slots=True, kw_only=True)
class Kind:
    """A kind of event: its cause, the part of a field it takes, and crops with their days."""

    cause: str
    title: str
    area_share: float
    windows: tuple[Window, ...]


# Nothing befalls a crop shortly before all of its kind turns ripe where that would hide it: a
# cut cereal differs little from a ripe one.
KINDS: Final = (
    Kind(cause="flood", title="flooded", area_share=0.85,
         windows=((WHEAT, 205, 250), (BARLEY, 205, 236), (RAPE, 205, 240), (GRASS, 215, 270))),
    Kind(cause="burn", title="burnt", area_share=0.90,
         windows=((WHEAT, 255, 300), (BARLEY, 236, 280), (RAPE, 245, 288), (GRASS, 255, 300))),
    Kind(cause="removal", title="cut early", area_share=1.0,
         windows=((MAIZE, 276, 312), (BEET, 262, 312))),
    Kind(cause="moisture_stress", title="drying out", area_share=1.0,
         windows=((BEET, 268, 296), (MAIZE, 278, 296), (GRASS, 225, 280))),
)  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True)
class Event:
    """One event: what, where (a place in FIELDS), from which day, first seen in which look."""

    kind: Kind
    at: int
    start_day: float
    first_look: int

    @property
    def decisive(self) -> range:
        """Looks, by number, in which the field must be seen for the event to be fair."""
        return range(self.first_look - LOOKS_BEFORE, self.first_look + LOOKS_AFTER)


def draw_events(days: Sequence[int], *, weather: Weather, habits: Habits, seed: int) -> list[Event]:
    """Draw one event of each kind, on four crops, where there is something to lose."""
    random = np.random.default_rng([seed, RUNNING, 5])
    chances = [chances_of(kind, days, weather=weather, habits=habits, seed=seed) for kind in KINDS]
    while True:
        events = [drawn[random.integers(len(drawn))] for drawn in chances]
        if len({FIELDS[event.at].crop_in(RUNNING) for event in events}) == len(events):
            return events


def chances_of(
    kind: Kind, days: Sequence[int], *, weather: Weather, habits: Habits, seed: int
) -> list[Event]:
    """Return every fair event of a kind, at most one per field and look."""
    found = []
    for look in range(LOOKS_BEFORE, len(days) - LOOKS_AFTER):
        stand = stand_on(RUNNING, days[look], weather=weather, habits=habits, seed=seed)
        for at in fields_at_risk(kind, days[look], stand):
            harvest = harvest_day(at, RUNNING, weather=weather, habits=habits)
            if harvest is None or days[look] < harvest - 8:
                found.append(begun(kind, at, days, look=look))
    return found


def fields_at_risk(kind: Kind, day: int, stand: Stand) -> list[int]:
    """Return the large, wholly visible fields whose crop is in its window and well grown."""
    crops = {crop for crop, first, last in kind.windows if first <= day <= last}
    return [
        at
        for at, field in enumerate(FIELDS)
        if field.crop_in(RUNNING) in crops
        and field.shape.area > 30_000
        and field.shape.bounds[3] < 1920
        and stand.cover[at] > 0.82
        and (kind.cause == "burn" or stand.greenness[at] > 0.85)
    ]


def begun(kind: Kind, at: int, days: Sequence[int], *, look: int) -> Event:
    """Return an event that begins so that a look is the first to show it."""
    if kind.cause == "moisture_stress":
        start = days[look] - STRESS_SHOWS * STRESS_RAMP_DAYS
    else:
        start = days[look] - 2.0
    return Event(kind=kind, at=at, start_day=start, first_look=look)


def flooded(part: Stand, days: float) -> Stand:
    """Return a stand under water, which goes down in three weeks and leaves plants behind."""
    damage = np.interp(days, (0, 20), (0.0, 0.35))
    return replace(
        part,
        water=np.full(1, np.interp(days, (0, 9, 28), (0.85, 0.85, 0.0))),
        wetness=np.ones(1),
        cover=part.cover * (1.0 - damage),
        greenness=part.greenness * (1.0 - 0.6 * damage),
    )


def burnt(part: Stand, days: float) -> Stand:
    """Return a stand turned to char, which wind and rain slowly carry off."""
    char = np.full(1, np.interp(days, (0, 45), (0.88, 0.62)))
    return replace(part, char=char, cover=0.1 * part.cover, residue=np.full(1, 0.2))


def cut(part: Stand, days: float) -> Stand:
    """Return a stand mown down to stubble, with a little growing after."""
    cover = np.minimum(part.cover, np.interp(days, (0, 60), (0.07, 0.25)))
    return replace(part, cover=cover, greenness=np.ones(1), residue=np.full(1, 0.5))


def dried(part: Stand, days: float) -> Stand:
    """Return a stand that loses its leaves' water and only a little of the leaves."""
    ramp = min(days / STRESS_RAMP_DAYS, 1.0)
    return replace(
        part,
        leaf_dryness=part.leaf_dryness + ramp,
        cover=part.cover * (1.0 - 0.03 * ramp),
        greenness=part.greenness * (1.0 - 0.03 * ramp),
    )


EFFECTS: Final[Mapping[str, Callable[[Stand, float], Stand]]] = {
    "flood": flooded,
    "burn": burnt,
    "removal": cut,
    "moisture_stress": dried,
}


def stand_with(stand: Stand, events: Sequence[Event], *, day: int | None) -> Stand:
    """Return the stand with one unit more per event: the part of the field that it takes.

    Without a day nothing has happened to that part.
    """
    for event in events:
        part = stand.taken([event.at])
        if day is not None and day >= event.start_day:
            part = EFFECTS[event.kind.cause](part, day - event.start_day)
        stand = joined(stand, part)
    return stand
