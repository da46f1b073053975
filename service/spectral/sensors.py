"""Sensor profiles: the bands of a product, how its numbers scale, how its quality reads.

A new sensor is one more entry in `SENSORS`; its bands are a table in `bands`.
"""

import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from typing import Final

from service.errors import RejectedInput
from service.spectral.bands import (
    ETM_PLUS,
    OLI,
    SENTINEL_2A,
    SENTINEL_2B,
    SENTINEL_2C,
    TM,
    Band,
)
from service.spectral.quality import SCL, QualityLayer
from service.spectral.quality_bits import QA_PIXEL, QA_RADSAT, SaturationLayer
from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling

UNKNOWN_OFFSET: Final = "unknown-offset"


@dataclass(frozen=True, slots=True, kw_only=True)
class Sensor:
    """What is known of a product before its pixels are read.

    Attributes
    ----------
    id, title
        Its name in requests and for people.
    bands
        Its bands; empty if a scene may bring any band role.
    platforms
        By platform the bands that it carries, where platforms differ; see `on`.
    needs_platform
        Whether the bands are not known before the platform is.
    quality
        Its quality layer, None if it has none.
    quality_rule
        The rule by which that layer is read unless something else is said.
    saturation
        Its layer of saturation bits, None if it has none.
    nodata, saturated
        Stored numbers that mean "nothing here" and "too bright", None if not fixed.
    published
        Returns the published scaling for a processing baseline, or refuses.
    version
        Which version of a profile of one's own this is, from 1; None for a built-in one.
    """

    id: str
    title: str
    bands: tuple[Band, ...]
    platforms: Mapping[str, tuple[Band, ...]] = field(default_factory=dict)
    needs_platform: bool = False
    quality: QualityLayer | None
    quality_rule: str = "clear"
    saturation: SaturationLayer | None = None
    nodata: float | None
    saturated: float | None
    published: Callable[[str | None], Scaling]
    version: int | None = None

    @property
    def roles(self) -> tuple[BandRole, ...]:
        """The band roles that a scene of this sensor may bring."""
        return tuple(band.role for band in self.bands) or tuple(BandRole)

    def on(self, platform: str | None) -> "Sensor":
        """Return the profile as it is on one platform.

        A platform that is not listed, or none, gives the profile itself, unless the bands
        depend on it.

        Raises
        ------
        RejectedInput
            The platform has to be named, and is not one of the listed.
        """
        own = self.platforms.get(platform or "")
        if own is not None:
            title = f"{self.title} of {platform}" if self.needs_platform else self.title
            return replace(self, title=title, bands=own, platforms={}, needs_platform=False)
        if self.needs_platform:
            raise RejectedInput.at(
                "/scene/platform",
                f"Which bands a scene of {self.id} has depends on its platform. Send `platform`: "
                f"one of {', '.join(self.platforms)}.",
            )
        return self

    def band(self, role: BandRole) -> Band | None:
        """Return the band of a role, None if the profile doesn't describe it."""
        return next((band for band in self.bands if band.role == role), None)

    def check_role(self, role: BandRole, pointer: str) -> None:
        """Refuse a band that the sensor hasn't got.

        Raises
        ------
        RejectedInput
            At `pointer`, with the bands that there are.
        """
        if role not in self.roles:
            raise RejectedInput.at(
                pointer,
                f"{self.title} has no band {role}; it has {', '.join(self.roles)}. Leave it out.",
            )

    def scaling(self, role: BandRole, *, processing_baseline: str | None) -> Scaling:
        """Return the published scaling of a band.

        Raises
        ------
        RejectedInput
            If no scaling is published for what is known of the scene
            (``unknown-offset``), or the sensor has no such band. A scaling is never
            guessed.
        """
        self.check_role(role, f"/{role}")
        band = self.band(role)
        if band is not None and band.scaling is not None:
            return band.scaling
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


def _collection_2(_baseline: str | None) -> Scaling:
    """Return the scaling of Landsat Collection 2 Level-2 surface reflectance.

    Source: USGS, Landsat Collection 2 Level-2 scale factors; the same for all platforms and
    processing versions.
    """
    return Scaling(scale=2.75e-5, offset=-0.2)


# 65535 as the saturated number is from memory of the product's metadata. A scene that does
# not name its unit has the bands of unit 2A; the centres of the others differ by up to 17 nm.
SENTINEL_2_L2A: Final = Sensor(
    id="sentinel-2-l2a",
    title="Sentinel-2 Level-2A",
    bands=SENTINEL_2A,
    platforms={
        "sentinel-2a": SENTINEL_2A,
        "sentinel-2b": SENTINEL_2B,
        "sentinel-2c": SENTINEL_2C,
    },
    quality=SCL,
    nodata=0.0,
    saturated=65535.0,
    published=_by_baseline,
)

# The newest instrument's bands stand here for the list of sensors; a scene is never read by
# them before its platform is known. A surface reflectance has no number of its own for
# saturation, the product tells it by bits.
LANDSAT_C2_L2: Final = Sensor(
    id="landsat-c2-l2",
    title="Landsat Collection 2 Level-2",
    bands=OLI,
    platforms={
        "landsat-4": TM,
        "landsat-5": TM,
        "landsat-7": ETM_PLUS,
        "landsat-8": OLI,
        "landsat-9": OLI,
    },
    needs_platform=True,
    quality=QA_PIXEL,
    saturation=QA_RADSAT,
    nodata=0.0,
    saturated=None,
    published=_collection_2,
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

SENSORS: Final[Mapping[str, Sensor]] = {
    sensor.id: sensor for sensor in (SENTINEL_2_L2A, LANDSAT_C2_L2, GENERIC)
}
