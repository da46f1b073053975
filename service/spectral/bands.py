"""The bands of each instrument: what they measure, where in the spectrum, how fine.

Sources: centres of Sentinel-2A and 2B from public copies of the agency's table of spectral
responses (its issues differ by up to 0.5 nm), their widths and all of 2C from memory of that
table; centres and widths of Landsat from the band limits that USGS publishes for each
instrument, which agree with published catalogue items.
"""

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Final

from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling

_R = BandRole


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
        Ground sample distance at which it is taken, metres, None if it varies; a product may
        be resampled.
    unit
        Of what its numbers become by their scaling: ``reflectance`` or ``kelvin``.
    scaling
        Its own published scaling, where it is not that of the sensor.
    valid_numbers
        Lowest and highest stored number that the product calls valid, None if it says
        nothing. Numbers outside are kept: a small negative reflectance is no gap.
    saturation_bit
        Its bit in the sensor's saturation layer, None if it has none.
    """

    role: BandRole
    name: str
    centre_um: float
    width_um: float
    gsd_m: float | None
    unit: str = "reflectance"
    scaling: Scaling | None = None
    valid_numbers: tuple[int, int] | None = None
    saturation_bit: int | None = None


def _msi(*wavelengths_nm: tuple[float, float]) -> tuple[Band, ...]:
    """Return the bands of one Sentinel-2 unit from its (centre, width) in nanometres."""
    return tuple(
        Band(role=role, name=name, centre_um=centre / 1e3, width_um=width / 1e3, gsd_m=gsd_m)
        for (role, name, gsd_m), (centre, width) in zip(_MSI, wavelengths_nm, strict=True)
    )


_MSI: Final = (
    (_R.COASTAL, "B01", 60.0),
    (_R.BLUE, "B02", 10.0),
    (_R.GREEN, "B03", 10.0),
    (_R.RED, "B04", 10.0),
    (_R.REDEDGE071, "B05", 20.0),
    (_R.REDEDGE075, "B06", 20.0),
    (_R.REDEDGE078, "B07", 20.0),
    (_R.NIR, "B08", 10.0),
    (_R.NIR08, "B8A", 20.0),
    (_R.SWIR16, "B11", 20.0),
    (_R.SWIR22, "B12", 20.0),
)

SENTINEL_2A: Final = _msi(
    (442.7, 20), (492.7, 65), (559.8, 35), (664.6, 30), (704.1, 14), (740.5, 14), (782.8, 19),
    (832.8, 105), (864.7, 21), (1613.7, 90), (2202.4, 174),
)  # fmt: skip
SENTINEL_2B: Final = _msi(
    (442.3, 20), (492.3, 65), (558.9, 35), (664.9, 31), (703.8, 15), (739.1, 13), (779.7, 19),
    (832.9, 104), (864.0, 21), (1610.4, 94), (2185.7, 184),
)  # fmt: skip
SENTINEL_2C: Final = _msi(
    (444.2, 20), (489.0, 65), (560.6, 35), (666.5, 31), (707.1, 15), (741.1, 14), (784.7, 19),
    (834.6, 105), (865.6, 21), (1612.0, 91), (2191.3, 182),
)  # fmt: skip


def _landsat(
    reflective: Iterable[tuple[int, BandRole, float, float]], thermal: Band
) -> tuple[Band, ...]:
    """Return the bands of one Landsat instrument from (number, role, centre, width in nm).

    Stored numbers 7273 to 43636 are reflectance 0 to 1, as the product's metadata say. The
    saturation bit of band n is n - 1, from memory of the data format control books.
    """
    return (
        *(
            Band(
                role=role,
                name=f"SR_B{number}",
                centre_um=centre / 1e3,
                width_um=width / 1e3,
                gsd_m=30.0,
                valid_numbers=(7273, 43636),
                saturation_bit=number - 1,
            )
            for number, role, centre, width in reflective
        ),
        thermal,
    )


def _thermal(name: str, centre_um: float, width_um: float, gsd_m: float) -> Band:
    """Return a surface temperature band; its valid numbers are from memory.

    It has no saturation bit here: which of a sensor's thermal channels and gains the
    temperature was made from is not told by the layer.
    """
    return Band(
        role=_R.LWIR11,
        name=name,
        centre_um=centre_um,
        width_um=width_um,
        gsd_m=gsd_m,
        unit="kelvin",
        scaling=Scaling(scale=0.00341802, offset=149.0),
        valid_numbers=(293, 61440),
    )


TM: Final = _landsat(
    [
        (1, _R.BLUE, 485, 70),
        (2, _R.GREEN, 560, 80),
        (3, _R.RED, 660, 60),
        (4, _R.NIR, 830, 140),
        (5, _R.SWIR16, 1650, 200),
        (7, _R.SWIR22, 2215, 270),
    ],
    _thermal("ST_B6", 11.45, 2.1, 120.0),
)
ETM_PLUS: Final = _landsat(
    [
        (1, _R.BLUE, 485, 70),
        (2, _R.GREEN, 560, 80),
        (3, _R.RED, 660, 60),
        (4, _R.NIR, 835, 130),
        (5, _R.SWIR16, 1650, 200),
        (7, _R.SWIR22, 2220, 260),
    ],
    _thermal("ST_B6", 11.45, 2.1, 60.0),
)
# The one near-infrared band of OLI is narrow; it serves as `nir`, as the broad ones do.
OLI: Final = _landsat(
    [
        (1, _R.COASTAL, 443, 16),
        (2, _R.BLUE, 482, 60),
        (3, _R.GREEN, 561.5, 57),
        (4, _R.RED, 654.5, 37),
        (5, _R.NIR, 865, 28),
        (6, _R.SWIR16, 1608.5, 85),
        (7, _R.SWIR22, 2200.5, 187),
    ],
    _thermal("ST_B10", 10.895, 0.59, 100.0),
)
