"""Make an invented growers' co-operative: four seasons, four events, and the truth of them.

Run as ``python sample_tiles/season.py OUT [--seed N]``. The same seed gives the same files;
another one gives other weather, noise and clouds, and other fields that something befalls.
Nothing here comes from the service: what it says can be held against what was put in.

Quillmere Growers, their parcels and the land itself are invented; the tile lies over open
sea of UTM zone 33N, so that no real field is shown.
"""

import argparse
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from datetime import timedelta
from functools import partial
from pathlib import Path
from typing import Any, Final

import numpy as np
from quillmere.events import RUNNING, Event, draw_events, stand_with
from quillmere.growth import habits_of, past_years, stand_on, weather_of
from quillmere.imaging import Cover, Look, Zones, cover_of, look_at, measures_of, zones_in
from quillmere.land import FIELDS, YEARS, Field
from quillmere.passes import acquired_at, clear_days, platform_of, scene_days, season_start
from quillmere.sky import CELL, Sky, draw_fair_sky, draw_sky
from quillmere.surfaces import CELL_M
from quillmere.tile import averaged, geometry_of, numbers_stored, write_band, write_json

DEFAULT_SEED: Final = 1106
SENSOR: Final = "sentinel-2-l2a"
PROCESSING_BASELINE: Final = "05.10"
HISTORY_COLUMNS: Final = "parcel,index,observed_at,mean,sd,valid_share,sensor,source"
SOURCE: Final = "archive"
# A look owes a figure from this share on; imports leave out what shows hardly anything.
LOOK_VALID_SHARE: Final = 0.6
KEPT_VALID_SHARE: Final = 0.5
# Haze comes once in a past season, on one of its summer looks.
HAZY_PAST_LOOK: Final = range(12, 24)
# So many parcels of each crop stay in sight in every scene, else there is nothing to compare.
CROP_IN_SIGHT: Final = 4
HAZE_SHOWS: Final = 0.02


@dataclass(frozen=True, slots=True, kw_only=True)
class Scene:
    """One scene of the running season: its day, its sky, its image, what of it is usable."""

    ref: str
    day: int
    sky: Sky
    look: Look
    zones: Zones


def is_fair(sky: Sky, *, cover: Cover, protected: Sequence[int]) -> bool:
    """Return whether a sky leaves some fields wholly clear and every crop enough in sight."""
    # The classification is one of 20 m cells, so a cell that touches a cloud may lose four.
    veiled = averaged(sky.opacity + sky.shade, CELL_M["quality"], from_m=CELL) > 0.0
    clear = ~veiled.repeat(2, axis=0).repeat(2, axis=1)
    seen = zones_in(cover, clear).valid_share
    unhazy = zones_in(cover, clear & (sky.haze < HAZE_SHOWS)).valid_share
    crops = [field.crop_in(RUNNING) for field in FIELDS]
    in_sight = dict.fromkeys(crops, 0)
    for crop, share in zip(crops, seen, strict=True):
        in_sight[crop] += int(share >= LOOK_VALID_SHARE)
    return min(in_sight.values()) >= CROP_IN_SIGHT and all(unhazy[at] > 0.99 for at in protected)


def scenes_of(
    days: Sequence[int], events: Sequence[Event], cover: Cover, *, seed: int
) -> Iterator[Scene]:
    """Make the scenes of the running season one after another."""
    weather, habits = weather_of(RUNNING, seed=seed), habits_of(RUNNING, seed=seed)
    choosing = np.random.default_rng([seed, RUNNING, 6])
    # Far enough apart that no field meets haze twice within three looks.
    first = choosing.integers(2, len(days) // 2 - 2)
    hazy = (first, first + len(days) // 2)
    for number, day in enumerate(days):
        random = np.random.default_rng([seed, RUNNING, 7, day])
        protected = [event.at for event in events if number in event.decisive]
        fair = partial(is_fair, cover=cover, protected=protected)
        sky = draw_fair_sky(random, hazy=number in hazy, is_fair=fair)
        stand = stand_on(RUNNING, day, weather=weather, habits=habits, seed=seed)
        look = look_at(cover, stand_with(stand, events, day=day), sky, random)
        yield Scene(
            ref=f"quillmere_{acquired_at(RUNNING, day):%Y%m%d}",
            day=day,
            sky=sky,
            look=look,
            zones=zones_in(cover, look.usable()),
        )


def write_scene(folder: Path, scene: Scene) -> None:
    """Write one scene: its `scene` part, its bands and its classification."""
    folder.mkdir(parents=True)
    write_json(
        folder / "scene.json",
        {
            "ref": scene.ref,
            "sensor": SENSOR,
            "acquired_at": stamp(RUNNING, scene.day),
            "processing_baseline": PROCESSING_BASELINE,
            "platform": platform_of(scene.day),
            "tile": "quillmere",
        },
    )
    for role, image in scene.look.bands.items():
        write_band(folder / f"{role}.tif", numbers_stored(image), CELL_M[role])
    classes = scene.look.quality.astype(np.uint8)
    write_band(folder / "quality.tif", classes, CELL_M["quality"])


def stamp(year: int, day: int) -> str:
    """Return the acquisition time of a day's pass as RFC 3339."""
    return f"{acquired_at(year, day):%Y-%m-%dT%H:%M:%SZ}"


def history_rows(events: Sequence[Event], cover: Cover, *, seed: int) -> Iterator[str]:
    """Make the figures of the finished seasons, one line per parcel, look and measure."""
    for year in past_years():
        weather, habits = weather_of(year, seed=seed), habits_of(year, seed=seed)
        days = clear_days(year, seed=seed)
        hazy = np.random.default_rng([seed, year, 6]).choice(HAZY_PAST_LOOK)
        for number, day in enumerate(days):
            random = np.random.default_rng([seed, year, 7, day])
            sky = draw_sky(random, hazy=number == hazy)
            stand = stand_on(year, day, weather=weather, habits=habits, seed=seed)
            # The parts that something will befall are as yet like the rest of their fields.
            look = look_at(cover, stand_with(stand, events, day=None), sky, random)
            yield from rows_of(look, zones_in(cover, look.usable()), at=stamp(year, day))


def rows_of(look: Look, zones: Zones, *, at: str) -> Iterator[str]:
    """Make the lines of one past look, for the parcels that it shows well enough."""
    shown = np.flatnonzero(zones.valid_share >= KEPT_VALID_SHARE)
    for measure, image in measures_of(look).items():
        mean, sd = zones.mean_and_sd(image)
        for place in shown:
            yield (
                f"{FIELDS[place].ref},{measure},{at},{mean[place]:.5f},{sd[place]:.5f},"
                f"{zones.valid_share[place]:.4f},{SENSOR},{SOURCE}\n"
            )


def feature_of(field: Field) -> dict[str, Any]:
    """Return the GeoJSON feature of a parcel, WGS 84, as `PUT /v1/parcels` takes it."""
    properties = {
        "ref": field.ref,
        "name": field.name,
        "holding": field.holding,
        "tags": list(field.tags),
    }
    return {"type": "Feature", "properties": properties, "geometry": geometry_of(field.shape)}


def crop_seasons() -> list[dict[str, Any]]:
    """Return what grew where in all four seasons, as `POST /v1/seasons` takes it."""
    return [
        {"parcel": field.ref, "crop": field.crop_in(year), "year": year}
        for year in YEARS
        for field in FIELDS
    ]


def event_truth(event: Event, scenes: Sequence[Scene]) -> dict[str, Any]:
    """Return what befell which parcel, from which day, and the first scene that shows it."""
    field = FIELDS[event.at]
    start = season_start(RUNNING) + timedelta(days=int(event.start_day))
    return {
        "event": event.kind.title,
        "cause": event.kind.cause,
        "parcel": field.ref,
        "crop": field.crop_in(RUNNING),
        "holding": field.holding,
        "started_on": start.isoformat(),
        "area_share": event.kind.area_share,
        "first_scene": scenes[event.first_look].ref,
    }


def scene_truth(scene: Scene) -> dict[str, Any]:
    """Return which parcels a scene does not show, and which through haze that nothing tells."""
    shares = scene.zones.valid_share
    if scene.sky.haze.any():
        haze, _ = scene.zones.mean_and_sd(scene.sky.haze)
    else:
        haze = np.zeros(len(FIELDS))
    return {
        "ref": scene.ref,
        "acquired_at": stamp(RUNNING, scene.day),
        "valid_share": {
            field.ref: round(float(share), 3)
            for field, share in zip(FIELDS, shares, strict=True)
            if share < 0.995
        },
        "unseen": [FIELDS[at].ref for at in np.flatnonzero(shares < LOOK_VALID_SHARE)],
        "hazy": [FIELDS[at].ref for at in np.flatnonzero(haze > HAZE_SHOWS)],
    }


def generate(folder: Path, *, seed: int = DEFAULT_SEED) -> None:
    """Write everything into a folder, which is made if need be and holds no scenes yet."""
    folder.mkdir(parents=True, exist_ok=True)
    weather, habits = weather_of(RUNNING, seed=seed), habits_of(RUNNING, seed=seed)
    days = scene_days(RUNNING, seed=seed)
    events = draw_events(days, weather=weather, habits=habits, seed=seed)
    cover = cover_of(events)
    features = [feature_of(field) for field in FIELDS]
    write_json(folder / "parcels.geojson", {"type": "FeatureCollection", "features": features})
    write_json(folder / "seasons.json", crop_seasons())
    with (folder / "history.csv").open("w", encoding="utf-8", newline="") as file:
        file.write(f"{HISTORY_COLUMNS}\n")
        file.writelines(history_rows(events, cover, seed=seed))
    scenes = list(scenes_of(days, events, cover, seed=seed))
    for scene in scenes:
        write_scene(folder / "scenes" / scene.ref, scene)
    write_json(
        folder / "truth.json",
        {
            "seed": seed,
            "season": {"year": RUNNING, "from_on": season_start(RUNNING).isoformat()},
            "events": [event_truth(event, scenes) for event in events],
            "scenes": [scene_truth(scene) for scene in scenes],
        },
    )


def main() -> None:
    """Read the command line and generate."""
    parser = argparse.ArgumentParser(description="Write the invented co-operative's four seasons.")
    parser.add_argument("out", type=Path, help="folder to write into")
    parser.add_argument("--seed", type=int, default=DEFAULT_SEED, help="same seed, same files")
    arguments = parser.parse_args()
    generate(arguments.out, seed=arguments.seed)
    print(f"{len(FIELDS)} parcels over {len(YEARS)} seasons written")


if __name__ == "__main__":
    main()
