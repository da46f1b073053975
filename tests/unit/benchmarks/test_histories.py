"""The invented histories: the same again from a seed, and events that do what physics says.

Directions after McFeeters 1996 (water lowers the near infrared), Key and Benson 2006 (fire
lowers the near infrared and NBR), Gao 1996 (dry leaves raise the short-wave infrared), and
Jacquemoud et al. 2009 (what a canopy model makes of leaf area).
"""

import ast
from collections import Counter
from dataclasses import fields
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray
from prosail import run_prosail

from benchmarks.histories.bodies import figures_of, outlines_of, pass_bodies, seasons_of
from benchmarks.histories.crops import GRASS, NAMES
from benchmarks.histories.events import CAUSES, KINDS, SLOW, SUDDEN, VISIBLE, Drawn, befall
from benchmarks.histories.making import History, Scenario, make
from benchmarks.histories.optics import (
    BANDS,
    MEASURES,
    Stands,
    measures_of,
    reflectance_of,
    soil_of,
)
from benchmarks.histories.stands import Days, Land

HOME = Path(__file__).parents[3] / "benchmarks"
SENTINEL = "sentinel-2-l2a"


@pytest.fixture(scope="module")
def ordinary() -> History:
    return make(7, parcels=150, past_seasons=2)


def stands(**changed: float) -> Stands:
    """One green stand in midsummer, some members changed."""
    usual = {
        "lai": 3.5, "chlorophyll": 45.0, "leaf_water": 0.016, "brown": 0.0, "flowers": 0.0,
        "litter": 0.1, "water": 0.0, "char": 0.0, "sun_zenith": 35.0,
    }  # fmt: skip
    members = {name: np.array([value]) for name, value in {**usual, **changed}.items()}
    return Stands(**members, soil=soil_of(np.array([0.3]), np.array([1.0])))


def seen(sensor: str = SENTINEL, **changed: float) -> dict[str, float]:
    """Bands and indices of one stand."""
    bands = reflectance_of(stands(**changed), sensor)
    return dict(zip(MEASURES, measures_of(bands)[0].tolist(), strict=True))


def days(parcels: int, length: int) -> Days:
    """Green stands that nothing changes."""
    members = {
        "lai": 3.5, "chlorophyll": 45.0, "leaf_water": 0.016, "brown": 0.0, "flowers": 0.0,
        "litter": 0.1, "water": 0.0, "char": 0.0, "wetness": 0.3,
    }  # fmt: skip
    return Days(**{name: np.full((parcels, length), value) for name, value in members.items()})


def land(crop: str) -> Land:
    """One parcel with one season of a crop."""
    nothing = np.zeros((1, 1))
    return Land(
        places=np.zeros((1, 2)),
        crop=np.array([[NAMES.index(crop)]]),
        season_starts=np.array([0]),
        shifts=np.zeros((1, 1, 4)),
        vigour=np.ones((1, 1)),
        brightness=np.ones(1),
        thirst=np.ones(1),
        mowings=np.zeros((1, 1, 3)),
        litter_left=nothing,
        tilled_after=nothing,
        catch_lai=nothing,
    )


def after(kind: str, *, crop: str = "winter wheat", onset: int = 220, later: int = 1) -> Stands:
    """The stand some days after the onset of an event of middling size."""
    befallen = days(1, 366)
    event = Drawn(kind=kind, parcel=0, season=0, onset=float(onset), dice=(0.5, 0.5, 0.5, 0.5))
    befall(befallen, [event], land(crop))
    at = onset + later
    members = {each.name: getattr(befallen, each.name)[:, at] for each in fields(Days)}
    wetness = members.pop("wetness")
    return Stands(**members, soil=soil_of(wetness, np.ones(1)), sun_zenith=np.array([35.0]))


def change(kind: str, **when: int) -> dict[str, float]:
    """What an event of middling size changes in bands and indices."""
    measured = measures_of(reflectance_of(after(kind, **when), SENTINEL))[0]
    unharmed = measures_of(reflectance_of(stands(), SENTINEL))[0]
    return dict(zip(MEASURES, (measured - unharmed).tolist(), strict=True))


def test_a_seed_gives_the_same_history_again_and_another_seed_another() -> None:
    first, again, other = (make(seed, parcels=30, past_seasons=1) for seed in (3, 3, 4))
    np.testing.assert_array_equal(first.values, again.values)
    np.testing.assert_array_equal(first.valid_share, again.valid_share)
    assert first.passes == again.passes
    assert first.events == again.events
    assert first.crop_seasons == again.crop_seasons
    assert first.passes != other.passes


def test_the_generator_shares_no_code_with_the_service() -> None:
    scripts = [*(HOME / "histories").glob("*.py"), HOME / "scoring.py", HOME / "rivals.py"]
    imported = {
        name
        for script in scripts
        for node in ast.walk(ast.parse(script.read_text("utf-8")))
        for name in _imports(node)
    }
    assert len(scripts) > 8
    assert {name for name in imported if name.split(".")[0] == "service"} == set()


def _imports(node: ast.AST) -> list[str]:
    if isinstance(node, ast.Import):
        return [alias.name for alias in node.names]
    return [node.module] if isinstance(node, ast.ImportFrom) and node.module else []


def test_water_lowers_near_and_short_wave_infrared_and_raises_ndwi() -> None:
    moved = change("flood")
    assert moved["nir"] < -0.1
    assert moved["swir16"] < -0.05
    assert moved["ndwi"] > 0.2


def test_fire_lowers_the_near_infrared_and_nbr_more_than_ndvi() -> None:
    moved = change("burn", onset=290)
    assert moved["nir"] < -0.1
    assert moved["nbr"] < 1.25 * moved["ndvi"] < 0


def test_an_early_cut_leaves_little_green() -> None:
    moved = change("early_cut")
    assert moved["ndvi"] < -0.4
    assert moved["swir16"] > 0


def test_hail_takes_part_at_once_and_some_grows_again() -> None:
    at_once, later = change("hail", later=3), change("hail", later=55)
    assert at_once["ndvi"] < -0.04
    assert at_once["nir"] < later["nir"] < 0


def test_dry_leaves_lower_ndmi_more_than_ndvi_and_raise_short_wave_infrared() -> None:
    moved = change("moisture_stress", later=35)
    assert moved["ndmi"] < moved["ndvi"] < 0
    assert moved["swir16"] > 0.015


def test_a_decline_creeps_and_lowers_greenness() -> None:
    early, late = change("decline", later=5), change("decline", later=40)
    assert late["ndvi"] < 2 * early["ndvi"] < 0


def test_what_dries_or_ails_a_stand_ends_with_its_harvest() -> None:
    harvested = change("decline", onset=270, later=60)
    assert harvested["ndvi"] == pytest.approx(0.0, abs=1e-9)


def test_more_leaf_area_is_greener_and_both_sensors_agree_about_it() -> None:
    by_sensor = {
        sensor: [seen(sensor, lai=lai)["ndvi"] for lai in (0.2, 1.0, 2.5, 5.0)]
        for sensor in (SENTINEL, "landsat-c2-l2")
    }
    for ndvi in by_sensor.values():
        assert (np.diff(ndvi) > 0).all()
    apart = np.abs(np.subtract(*by_sensor.values()))
    assert 0.0 < apart.max() < 0.04


def test_the_canopy_is_that_of_the_model_at_a_node_of_the_table() -> None:
    ground = np.full(2101, 0.05)
    spectrum = run_prosail(
        n=1.5, cab=50.0, car=10.0, cbrown=0.0, cw=0.014, cm=0.008, lai=3.0, lidfa=-0.35,
        lidfb=-0.15, typelidf=1, hspot=0.05, tts=30.0, tto=5.0, psi=90.0, rsoil0=ground,
        prospect_version="5",
    )  # fmt: skip
    stand = stands(lai=3.0, chlorophyll=50.0, leaf_water=0.014, litter=0.0, sun_zenith=30.0)
    dark = Stands(
        **{each.name: getattr(stand, each.name) for each in fields(Stands) if each.name != "soil"},
        soil=np.full((1, len(BANDS)), 0.05),
    )
    nir = reflectance_of(dark, SENTINEL)[0, BANDS.index("nir")]
    assert nir == pytest.approx(spectrum[780 - 400 : 886 - 400].mean(), abs=2e-3)


def test_a_history_has_every_kind_of_event_both_sensors_and_looks_of_all_parcels() -> None:
    history = make(9, parcels=400, past_seasons=2)
    last = len(history.seasons) - 1
    kinds = Counter(event.kind for event in history.events if event.season == last)
    assert set(kinds) == set(KINDS) == set(SUDDEN) | set(SLOW) == set(CAUSES)
    assert 0.08 <= sum(kinds.values()) / 400 <= 0.15
    assert any(event.season < last for event in history.events)
    assert {one.sensor for one in history.passes} == {SENTINEL, "landsat-c2-l2"}
    assert set(history.look_parcel[history.is_judged]) == set(range(400))
    assert set(history.crop.ravel()) == set(range(len(NAMES)))
    rate = history.is_residual[history.is_look].mean()
    assert 0.01 < rate < 0.10


def test_grass_stays_grass_and_other_land_rotates(ordinary: History) -> None:
    is_grass = ordinary.crop == GRASS
    assert (is_grass.all(axis=1) | ~is_grass.any(axis=1)).all()
    changing = (np.diff(ordinary.crop, axis=1) != 0).any(axis=1)
    assert changing[~is_grass.any(axis=1)].mean() > 0.8


def test_an_event_is_visible_from_its_onset_on_and_not_behind_its_end(ordinary: History) -> None:
    shown = [event for event in ordinary.events if event.visible is not None]
    assert shown
    for event in shown:
        assert event.visible is not None
        assert event.faded is not None
        assert event.over is not None
        assert event.onset <= event.visible <= event.faded <= event.over
        assert event.change >= VISIBLE


def test_sudden_events_are_visible_sooner_than_slow_ones() -> None:
    history = make(11, parcels=400, past_seasons=0)
    waits: dict[bool, list[int]] = {True: [], False: []}
    for event in history.events:
        if event.visible is not None:
            waits[event.is_sudden].append(event.visible - event.onset)
    assert np.median(waits[True]) == 0
    assert np.median(waits[False]) > 7


def test_a_drought_takes_moisture_from_every_crop_that_stands() -> None:
    dry = make(5, parcels=120, past_seasons=1, scenario=Scenario.DROUGHT)
    assert dry.drought is not None
    assert dry.drought.onset < dry.drought.visible
    wet = make(5, parcels=120, past_seasons=1)
    assert wet.drought is None
    peak = (dry.drought.onset + 40, dry.drought.onset + 75)
    assert _median_ndmi(dry, peak) < _median_ndmi(dry, (peak[0] - 80, peak[1] - 80))


def _median_ndmi(history: History, between: tuple[int, int]) -> float:
    """Median NDMI of the parcels under grass, which stand all summer."""
    day = np.array([one.day for one in history.passes])[history.look_pass]
    grass: NDArray[np.bool_] = history.crop[history.look_parcel, -1] == GRASS
    some = history.is_look & grass & (day >= between[0]) & (day < between[1])
    return float(np.median(history.values[some, MEASURES.index("ndmi")]))


def test_without_history_there_is_one_season() -> None:
    history = make(5, parcels=30, scenario=Scenario.NO_HISTORY)
    assert history.seasons == (2025,)
    assert history.is_judged.all()


def test_the_bodies_hold_every_parcel_season_and_figure_once(ordinary: History) -> None:
    outlines, seasons = outlines_of(ordinary), seasons_of(ordinary)
    assert [each["properties"]["ref"] for each in outlines["features"]] == list(ordinary.refs)
    spans: dict[str, list[tuple[str, str]]] = {}
    for row in seasons:
        spans.setdefault(row["parcel"], []).append((row["from_on"], row["until_on"]))
    for of_parcel in spans.values():
        assert len(of_parcel) == len(ordinary.seasons)
        ends = [until for _, until in of_parcel[:-1]]
        assert all(until < first for until, (first, _) in zip(ends, of_parcel[1:], strict=True))
    past = np.flatnonzero(~ordinary.is_judged)
    rows = [line for body in figures_of(ordinary, past) for line in body.decode().splitlines()[1:]]
    assert len(rows) == len(set(rows)) == past.size * len(MEASURES)
    judged = np.flatnonzero(ordinary.is_judged)
    passes = list(pass_bodies(ordinary, judged))
    assert len(passes) == np.unique(ordinary.look_pass[judged]).size
