"""Sensor profiles."""

import itertools

import pytest

from service.errors import RejectedInput
from service.spectral.indices import INDICES
from service.spectral.quality import SCL
from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling
from service.spectral.sensors import SENSORS, Sensor

SENTINEL_2 = SENSORS["sentinel-2-l2a"]
LANDSAT = SENSORS["landsat-c2-l2"]
GENERIC = SENSORS["generic"]

every_sensor = pytest.mark.parametrize("sensor", SENSORS.values(), ids=SENSORS)


def refusal(sensor: Sensor, role: BandRole, baseline: str | None) -> RejectedInput:
    with pytest.raises(RejectedInput) as caught:
        sensor.scaling(role, processing_baseline=baseline)
    return caught.value


@pytest.mark.parametrize("baseline", ["00.01", "02.07", "02.12", "03.00", "03.01", "03.99"])
def test_a_baseline_before_04_has_no_offset(baseline: str) -> None:
    scaling = SENTINEL_2.scaling(BandRole.RED, processing_baseline=baseline)
    assert scaling == Scaling(scale=1e-4, offset=0.0)


@pytest.mark.parametrize("baseline", ["04.00", "05.00", "05.09", "05.10", "05.11"])
def test_a_baseline_from_04_on_has_the_published_offset(baseline: str) -> None:
    scaling = SENTINEL_2.scaling(BandRole.NIR, processing_baseline=baseline)
    assert scaling == Scaling(scale=1e-4, offset=-0.1)


@pytest.mark.parametrize("baseline", ["06.00", "10.00", "99.99"])
def test_a_baseline_that_is_not_published_yet_is_refused_and_scaling_asked_for(
    baseline: str,
) -> None:
    error = refusal(SENTINEL_2, BandRole.RED, baseline)
    assert error.code == "unknown-offset"
    assert error.faults[0].pointer == "/scene/processing_baseline"
    assert "Send `scaling`" in error.detail
    assert baseline not in error.detail


def test_a_missing_baseline_is_refused_with_what_to_send() -> None:
    error = refusal(SENTINEL_2, BandRole.RED, None)
    assert error.code == "unknown-offset"
    assert error.faults[0].pointer == "/scene/processing_baseline"
    assert "`processing_baseline`" in error.detail
    assert "`scaling`" in error.detail


@pytest.mark.parametrize(
    "baseline",
    [
        "",
        "5.10",
        "05.1",
        "0510",
        "N0510",
        "N05.10",
        " 05.10",
        "05.10\n",
        "05.100",
        "-4.00",
        "०५.१०",
    ],
)
def test_a_baseline_in_another_form_is_refused_and_not_echoed(baseline: str) -> None:
    error = refusal(SENTINEL_2, BandRole.RED, baseline)
    assert error.code == "unknown-offset"
    assert error.faults[0].pointer == "/scene/processing_baseline"
    assert "two digits, a point and two digits" in error.detail


@pytest.mark.parametrize("baseline", [None, "05.10"])
def test_a_generic_scene_must_bring_its_scaling(baseline: str | None) -> None:
    error = refusal(GENERIC, BandRole.LWIR11, baseline)
    assert error.code == "unknown-offset"
    assert error.faults[0].pointer == "/scene/scaling"
    assert "`scaling` is required" in error.detail


def test_a_band_that_the_sensor_lacks_is_refused_at_its_part() -> None:
    error = refusal(SENTINEL_2, BandRole.LWIR11, "05.10")
    assert error.faults[0].pointer == "/lwir11"


def test_a_generic_scene_may_bring_any_band_role() -> None:
    assert set(GENERIC.roles) == set(BandRole)
    assert GENERIC.quality is None
    assert GENERIC.nodata is None


def test_sentinel_2_has_both_near_infrared_bands() -> None:
    names = {band.role: band.name for band in SENTINEL_2.bands}
    assert (names[BandRole.NIR], names[BandRole.NIR08]) == ("B08", "B8A")


def test_sentinel_2_has_its_scene_classes_and_special_numbers() -> None:
    assert SENTINEL_2.quality is SCL
    assert (SENTINEL_2.nodata, SENTINEL_2.saturated) == (0.0, 65535.0)


def test_sentinel_2_feeds_every_index_of_the_catalogue() -> None:
    assert {role for index in INDICES.values() for role in index.roles} <= set(SENTINEL_2.roles)


@every_sensor
def test_a_profile_is_whole(sensor: Sensor) -> None:
    assert SENSORS[sensor.id] is sensor
    assert len(set(sensor.roles)) == len(sensor.roles)
    assert sensor.quality is None or sensor.quality_rule in sensor.quality.rules
    for band in itertools.chain(sensor.bands, *sensor.platforms.values()):
        thermal = band.unit == "kelvin"
        low, high = (10.0, 13.0) if thermal else (0.4, 2.5)
        assert low < band.centre_um - band.width_um / 2
        assert band.centre_um + band.width_um / 2 < high
        assert band.gsd_m in {10.0, 20.0, 30.0, 60.0, 100.0, 120.0}
        assert (band.scaling is not None) == thermal


@every_sensor
def test_a_profile_on_a_platform_has_that_platform_s_bands(sensor: Sensor) -> None:
    for platform, bands in sensor.platforms.items():
        on = sensor.on(platform)
        assert on.bands == bands
        assert len(set(on.roles)) == len(on.roles)
        assert (on.id, on.quality, on.nodata) == (sensor.id, sensor.quality, sensor.nodata)
        assert on.on("anything") is on


@pytest.mark.parametrize("platform", [None, "", "landsat-6", "LANDSAT_8", "sentinel-2a"])
def test_a_landsat_whose_platform_is_not_known_is_refused_with_what_to_send(
    platform: str | None,
) -> None:
    with pytest.raises(RejectedInput) as caught:
        LANDSAT.on(platform)
    assert caught.value.faults[0].pointer == "/scene/platform"
    assert "landsat-4, landsat-5, landsat-7, landsat-8, landsat-9" in caught.value.detail


@pytest.mark.parametrize("platform", [None, "sentinel-2d", "a ship"])
def test_a_sentinel_2_of_another_unit_has_the_bands_of_the_first(platform: str | None) -> None:
    assert SENTINEL_2.on(platform) is SENTINEL_2
    assert SENTINEL_2.bands == SENTINEL_2.platforms["sentinel-2a"]


@pytest.mark.parametrize(
    ("platform", "names"),
    [
        ("landsat-5", ["SR_B1", "SR_B2", "SR_B3", "SR_B4", "SR_B5", "SR_B7", "ST_B6"]),
        ("landsat-7", ["SR_B1", "SR_B2", "SR_B3", "SR_B4", "SR_B5", "SR_B7", "ST_B6"]),
        ("landsat-9", [f"SR_B{number}" for number in range(1, 8)] + ["ST_B10"]),
    ],
)
def test_a_landsat_has_one_near_infrared_band_and_no_red_edge(
    platform: str, names: list[str]
) -> None:
    sensor = LANDSAT.on(platform)
    assert [band.name for band in sensor.bands] == names
    assert BandRole.NIR in sensor.roles
    absent = [BandRole.NIR08, BandRole.REDEDGE071, BandRole.REDEDGE075, BandRole.REDEDGE078]
    assert not set(absent) & set(sensor.roles)
    assert (BandRole.COASTAL in sensor.roles) == (platform == "landsat-9")


@pytest.mark.parametrize("baseline", [None, "05.10", "anything"])
def test_landsat_reflectance_and_temperature_have_the_published_scalings(
    baseline: str | None,
) -> None:
    # USGS, Landsat Collection 2 Level-2 scale factors.
    sensor = LANDSAT.on("landsat-8")
    red = sensor.scaling(BandRole.RED, processing_baseline=baseline)
    heat = sensor.scaling(BandRole.LWIR11, processing_baseline=baseline)
    assert red == Scaling(scale=0.0000275, offset=-0.2)
    assert heat == Scaling(scale=0.00341802, offset=149.0)
    assert (sensor.nodata, sensor.saturated) == (0.0, None)


def test_saturation_bits_follow_the_band_numbers_of_each_instrument() -> None:
    # From memory of LSDS-1618 and LSDS-1619: bit n - 1 for band n.
    for platform in LANDSAT.platforms:
        bits = {
            band.name: band.saturation_bit
            for band in LANDSAT.on(platform).bands
            if band.unit == "reflectance"
        }
        assert bits == {name: int(name.removeprefix("SR_B")) - 1 for name in bits}
