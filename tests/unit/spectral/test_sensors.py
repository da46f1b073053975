"""Sensor profiles."""

import pytest

from service.errors import RejectedInput
from service.spectral.indices import INDICES
from service.spectral.quality import SCL
from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling
from service.spectral.sensors import SENSORS, Sensor

SENTINEL_2 = SENSORS["sentinel-2-l2a"]
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
    for band in sensor.bands:
        assert 0.4 < band.centre_um < 2.5
        assert 0.0 < band.width_um < 0.2
        assert band.gsd_m in {10.0, 20.0, 60.0}
