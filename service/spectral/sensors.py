"""Sensor profiles: the bands of a product, how its numbers scale, how its quality reads.

A new sensor is one more entry in `SENSORS`.
"""

import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Final

from service.errors import RejectedInput
from service.spectral.quality import SCL, QualityLayer
from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling

UNKNOWN_OFFSET: Final = "unknown-offset"


@dataclass(frozen=True, slots=True, kw_only=True)
class Band:
    """One band of a sensor.

    Attributes
    ----------
    role
        What it measures.
    name
        The product's own name of the band.
    centre_um, width_um
        Centre wavelength and full width at half maximum, micrometres.
    gsd_m
        Ground sample distance of the product's own grid, metres.
    """

    role: BandRole
    name: str
    centre_um: float
    width_um: float
    gsd_m: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Sensor:
    """What is known of a product before its pixels are read.

    Attributes
    ----------
    id, title
        Its name in requests and for people.
    bands
        Its bands; empty if a scene may bring any band role.
    quality
        Its quality layer, None if it has none.
    quality_rule
        The rule by which that layer is read unless something else is said.
    nodata, saturated
        Stored numbers that mean "nothing here" and "too bright", None if not fixed.
    published
        Returns the published scaling for a processing baseline, or refuses.
    """

    id: str
    title: str
    bands: tuple[Band, ...]
    quality: QualityLayer | None
    quality_rule: str = "clear"
    nodata: float | None
    saturated: float | None
    published: Callable[[str | None], Scaling]

    @property
    def roles(self) -> tuple[BandRole, ...]:
        """The band roles that a scene of this sensor may bring."""
        return tuple(band.role for band in self.bands) or tuple(BandRole)

    def scaling(self, role: BandRole, *, processing_baseline: str | None) -> Scaling:
        """Return the published scaling of a band.

        Raises
        ------
        RejectedInput
            If no scaling is published for what is known of the scene
            (``unknown-offset``), or the sensor has no such band. A scaling is never
            guessed.
        """
        if role not in self.roles:
            raise RejectedInput.at(
                f"/{role}", f"{self.title} has no band of this role. Leave the part out."
            )
        return self.published(processing_baseline)


_BASELINE: Final = re.compile(r"(?P<major>[0-9]{2})\.[0-9]{2}")
_FIRST_WITH_OFFSET: Final = 4
_LAST_PUBLISHED: Final = 5


def _by_baseline(baseline: str | None) -> Scaling:
    """Return the scaling of Sentinel-2 Level-2A by processing baseline.

    Source: ESA, format change of processing baseline 04.00 (BOA_ADD_OFFSET -1000,
    BOA_QUANTIFICATION_VALUE 10,000). Never by date: old acquisitions that were processed
    again carry the offset too.
    """
    pointer = "/scene/processing_baseline"
    if baseline is None:
        raise RejectedInput.at(
            pointer,
            "Without its processing baseline the offset of this scene is not known. Send "
            "`processing_baseline` as in the product's metadata (such as 05.10), or `scaling`.",
            code=UNKNOWN_OFFSET,
        )
    match = _BASELINE.fullmatch(baseline)
    if match is None:
        raise RejectedInput.at(
            pointer,
            "A processing baseline is two digits, a point and two digits, such as 05.10.",
            code=UNKNOWN_OFFSET,
        )
    major = int(match["major"])
    if major > _LAST_PUBLISHED:
        raise RejectedInput.at(
            pointer,
            "The offset of this processing baseline is not known here. Send `scaling` with the "
            "scale and offset from the product's metadata.",
            code=UNKNOWN_OFFSET,
        )
    return Scaling(scale=1e-4, offset=-0.1 if major >= _FIRST_WITH_OFFSET else 0.0)


def _must_be_sent(_baseline: str | None) -> Scaling:
    raise RejectedInput.at(
        "/scene/scaling",
        "A generic scene has no published scaling: `scaling` is required, with `scale` and "
        "`offset`, where reflectance = number * scale + offset.",
        code=UNKNOWN_OFFSET,
    )


# Centres and widths: ESA table of spectral responses, unit 2A; the widths from memory and
# checked to 1 nm against a second list. Units 2B and 2C differ by up to 17 nm in a centre.
# 65535 as the saturated number is from memory of the product's metadata.
SENTINEL_2_L2A: Final = Sensor(
    id="sentinel-2-l2a",
    title="Sentinel-2 Level-2A",
    bands=tuple(
        Band(role=role, name=name, centre_um=centre_um, width_um=width_um, gsd_m=gsd_m)
        for role, name, centre_um, width_um, gsd_m in (
            (BandRole.COASTAL, "B01", 0.4427, 0.020, 60.0),
            (BandRole.BLUE, "B02", 0.4927, 0.065, 10.0),
            (BandRole.GREEN, "B03", 0.5598, 0.035, 10.0),
            (BandRole.RED, "B04", 0.6646, 0.030, 10.0),
            (BandRole.REDEDGE071, "B05", 0.7041, 0.014, 20.0),
            (BandRole.REDEDGE075, "B06", 0.7405, 0.014, 20.0),
            (BandRole.REDEDGE078, "B07", 0.7828, 0.019, 20.0),
            (BandRole.NIR, "B08", 0.8328, 0.105, 10.0),
            (BandRole.NIR08, "B8A", 0.8647, 0.021, 20.0),
            (BandRole.SWIR16, "B11", 1.6137, 0.090, 20.0),
            (BandRole.SWIR22, "B12", 2.2024, 0.174, 20.0),
        )
    ),
    quality=SCL,
    nodata=0.0,
    saturated=65535.0,
    published=_by_baseline,
)

GENERIC: Final = Sensor(
    id="generic",
    title="Any sensor, described by the scene itself",
    bands=(),
    quality=None,
    nodata=None,
    saturated=None,
    published=_must_be_sent,
)

SENSORS: Final[Mapping[str, Sensor]] = {sensor.id: sensor for sensor in (SENTINEL_2_L2A, GENERIC)}
