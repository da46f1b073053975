"""The catalogue of indices: what each computes, from which bands, and how to read it.

Pixels are arrays of surface reflectance, unitless (0.25 is 25 %), of any float type and
shape; NaN means unknown. An index gives an array of the same shape and type, NaN where a
band is NaN or the denominator vanishes. Nothing is clipped.

A new index is one more entry in `INDICES` and its row in the reference table of the tests.
"""

import hashlib
import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Final

import numpy as np
from numpy.typing import NDArray

from service.spectral.roles import BandRole

Pixels = NDArray[np.floating]

# Stored numbers are steps of 1e-5 or more in reflectance, so a smaller denominator is a
# zero that rounding has moved.
SMALLEST_DENOMINATOR: Final = 1e-6
_ROUNDINGS: Final = 8


def quotient(numerator: Pixels, denominator: Pixels) -> Pixels:
    """Return the quotient, NaN where the denominator vanishes.

    Parameters
    ----------
    numerator, denominator
        Sums of reflectances, unitless, of one shape and float type.

    Returns
    -------
    Pixels
        Same shape and type. NaN where an input is NaN, or the denominator is nearer to
        zero than `SMALLEST_DENOMINATOR` or eight roundings of its type (which is more in
        half precision only).
    """
    smallest = max(SMALLEST_DENOMINATOR, _ROUNDINGS * float(np.finfo(denominator.dtype).eps))
    divisor = np.where(np.abs(denominator) < smallest, np.nan, denominator)
    return np.asarray(numerator / divisor)


def normalised_difference(first: Pixels, second: Pixels) -> Pixels:
    """Return (first - second) / (first + second), NaN where the sum vanishes.

    Within [-1, 1] for reflectances that are not negative; free of a common scale, not of a
    common offset.
    """
    return quotient(first - second, first + second)


def _difference_of(first: BandRole, second: BandRole) -> Callable[..., Pixels]:
    """Return the normalised difference of two band roles, called by their names."""

    def compute(**bands: Pixels) -> Pixels:
        return normalised_difference(bands[first], bands[second])

    return compute


def _msavi(nir: Pixels, red: Pixels) -> Pixels:
    """Return the closed form of MSAVI, NaN where the root is of a negative number."""
    rise = 2.0 * nir + 1.0
    radicand = rise * rise - 8.0 * (nir - red)
    return np.asarray((rise - np.sqrt(np.where(radicand < 0.0, np.nan, radicand))) / 2.0)


_NORMALISED: Final = re.compile(r"\((?P<a>.+)-(?P<b>.+)\)/\((?P=a)\+(?P=b)\)")


@dataclass(frozen=True, slots=True, kw_only=True)
class Index:
    """One spectral index.

    Attributes
    ----------
    id, title, domain
        Its name in requests, its name for people, what it is about.
    formula
        Its text in band roles and constants, with ``^`` for powers.
    roles
        The bands that it needs.
    constants
        The constants of the formula, as published.
    compute
        The same formula over pixels, called with one keyword argument per role:
        ``compute(nir=…, red=…)``.
    valid_range
        Lowest and highest value for reflectances between 0 and 1, None where unbounded.
        A value outside is kept.
    typical
        Values to expect, in words.
    rise, fall
        What a rise and a fall usually mean. Other causes are possible: look on the ground.
    source
        Where it was published.
    note
        What to mind.
    watched
        Whether it is measured unless something else is said.
    quality_rule
        The quality rule by which its cells are chosen, where the rule of the scene would
        take away just those that it is about; None for the rule of the scene. A quality layer
        without this rule is read by the rule of the scene.
    """

    id: str
    title: str
    domain: str
    formula: str
    roles: tuple[BandRole, ...]
    constants: Mapping[str, float] = field(default_factory=dict)
    compute: Callable[..., Pixels]
    valid_range: tuple[float | None, float | None]
    typical: str
    rise: str
    fall: str
    source: str
    note: str = ""
    watched: bool
    quality_rule: str | None = None

    @property
    def normalised(self) -> bool:
        """Whether it is a normalised difference: outside [-1, 1] a reflectance is negative."""
        return _NORMALISED.fullmatch(self.formula) is not None

    @property
    def version(self) -> str:
        """The id and a short hash of formula and constants: other numbers, other version."""
        constants = ";".join(f"{name}={value!r}" for name, value in sorted(self.constants.items()))
        digest = hashlib.sha256(f"{self.formula}|{constants}".encode()).hexdigest()
        return f"{self.id}-{digest[:8]}"


_UNIT: Final = (-1.0, 1.0)

_CATALOGUE: Final = (
    Index(
        id="ndvi",
        title="Normalised difference vegetation index",
        domain="vegetation",
        formula="(nir-red)/(nir+red)",
        roles=(BandRole.NIR, BandRole.RED),
        compute=_difference_of(BandRole.NIR, BandRole.RED),
        valid_range=_UNIT,
        typical="soil 0.05 to 0.25, crops 0.3 to 0.9, water below 0",
        rise="more green leaf area",
        fall="thinning, stress, ripening or harvest; a missed cloud looks the same",
        source="Rouse et al. 1974, Third ERTS-1 Symposium, NASA SP-351",
        note="Saturates near a leaf area index of 3 to 4.",
        watched=True,
    ),
    Index(
        id="evi",
        title="Enhanced vegetation index",
        domain="vegetation",
        formula="G*(nir-red)/(nir+C1*red-C2*blue+L)",
        roles=(BandRole.NIR, BandRole.RED, BandRole.BLUE),
        constants={"G": 2.5, "C1": 6.0, "C2": 7.5, "L": 1.0},
        compute=lambda nir, red, blue: quotient(
            2.5 * (nir - red), nir + 6.0 * red - 7.5 * blue + 1.0
        ),
        valid_range=(None, None),
        typical="0 to 1",
        rise="a denser canopy; saturates later than NDVI",
        fall="a thinner canopy, stress or harvest",
        source="Huete et al. 2002, Remote Sensing of Environment 83, 195",
        note="The denominator can come near zero over bright haze or snow: values beyond 1.5 "
        "say nothing about plants. They are kept, because clipping would hide the haze.",
        watched=False,
    ),
    Index(
        id="evi2",
        title="Two-band enhanced vegetation index",
        domain="vegetation",
        formula="G*(nir-red)/(nir+c*red+L)",
        roles=(BandRole.NIR, BandRole.RED),
        constants={"G": 2.5, "c": 2.4, "L": 1.0},
        compute=lambda nir, red: quotient(2.5 * (nir - red), nir + 2.4 * red + 1.0),
        valid_range=(-2.5 / 3.4, 1.25),
        typical="0 to 0.9",
        rise="a denser canopy, as EVI but without a blue band",
        fall="a thinner canopy, stress or harvest",
        source="Jiang et al. 2008, Remote Sensing of Environment 112, 3833",
        watched=True,
    ),
    Index(
        id="savi",
        title="Soil-adjusted vegetation index",
        domain="vegetation",
        formula="(1+L)*(nir-red)/(nir+red+L)",
        roles=(BandRole.NIR, BandRole.RED),
        constants={"L": 0.5},
        compute=lambda nir, red: quotient(1.5 * (nir - red), nir + red + 0.5),
        valid_range=_UNIT,
        typical="0 to 0.8",
        rise="more vegetation, with the brightness of the soil damped",
        fall="less vegetation",
        source="Huete 1988, Remote Sensing of Environment 25, 295",
        watched=True,
    ),
    Index(
        id="msavi",
        title="Modified soil-adjusted vegetation index, closed form",
        domain="vegetation",
        formula="(2*nir+1-sqrt((2*nir+1)^2-8*(nir-red)))/2",
        roles=(BandRole.NIR, BandRole.RED),
        compute=_msavi,
        valid_range=_UNIT,
        typical="0 to 0.9",
        rise="more vegetation, with a soil term that adjusts itself",
        fall="less vegetation",
        source="Qi et al. 1994, Remote Sensing of Environment 48, 119",
        note="Unknown where red is negative and near-infrared close to 0.5: the root is of a "
        "negative number there.",
        watched=False,
    ),
    Index(
        id="gndvi",
        title="Green normalised difference vegetation index",
        domain="vegetation",
        formula="(nir-green)/(nir+green)",
        roles=(BandRole.NIR, BandRole.GREEN),
        compute=_difference_of(BandRole.NIR, BandRole.GREEN),
        valid_range=_UNIT,
        typical="0.2 to 0.85",
        rise="more chlorophyll",
        fall="less chlorophyll, ripening or harvest",
        source="Gitelson, Kaufman and Merzlyak 1996, Remote Sensing of Environment 58, 289",
        note="NDWI with the sign turned: no evidence of its own beside it.",
        watched=False,
    ),
    Index(
        id="ndre",
        title="Normalised difference red edge (near-infrared and first red edge)",
        domain="vegetation",
        formula="(nir-rededge071)/(nir+rededge071)",
        roles=(BandRole.NIR, BandRole.REDEDGE071),
        compute=_difference_of(BandRole.NIR, BandRole.REDEDGE071),
        valid_range=_UNIT,
        typical="0 to 0.7",
        rise="more chlorophyll and nitrogen in the canopy",
        fall="less chlorophyll; falls early when nitrogen is short",
        source="Barnes et al. 2000, Fifth International Conference on Precision Agriculture",
        note="Published for 790 and 720 nm; here the red edge is the band near 704 nm.",
        watched=True,
    ),
    Index(
        id="ndmi",
        title="Normalised difference moisture index",
        domain="moisture",
        formula="(nir-swir16)/(nir+swir16)",
        roles=(BandRole.NIR, BandRole.SWIR16),
        compute=_difference_of(BandRole.NIR, BandRole.SWIR16),
        valid_range=_UNIT,
        typical="-0.2 to 0.5",
        rise="a wetter canopy",
        fall="drying, or less canopy",
        source="Wilson and Sader 2002, Remote Sensing of Environment 80, 385",
        note="Elsewhere also called NDWI after Gao, who used 1.24 µm, not 1.6 µm.",
        watched=True,
    ),
    Index(
        id="ndwi",
        title="Normalised difference water index (open water)",
        domain="water",
        formula="(green-nir)/(green+nir)",
        roles=(BandRole.GREEN, BandRole.NIR),
        compute=_difference_of(BandRole.GREEN, BandRole.NIR),
        valid_range=_UNIT,
        typical="water above 0, land below 0",
        rise="open water, or less canopy",
        fall="water gone, or more canopy",
        source="McFeeters 1996, International Journal of Remote Sensing 17, 1425",
        note="Built-up land can be above 0 as well.",
        watched=True,
    ),
    Index(
        id="mndwi",
        title="Modified normalised difference water index",
        domain="water",
        formula="(green-swir16)/(green+swir16)",
        roles=(BandRole.GREEN, BandRole.SWIR16),
        compute=_difference_of(BandRole.GREEN, BandRole.SWIR16),
        valid_range=_UNIT,
        typical="water above 0, land below 0; snow above 0 too",
        rise="open water or snow; keeps built-up land apart better than NDWI",
        fall="water or snow gone, or drying",
        source="Xu 2006, International Journal of Remote Sensing 27, 3025",
        note="The same numbers as NDSI: no evidence of its own beside it.",
        watched=True,
    ),
    Index(
        id="nbr",
        title="Normalised burn ratio",
        domain="burn",
        formula="(nir-swir22)/(nir+swir22)",
        roles=(BandRole.NIR, BandRole.SWIR22),
        compute=_difference_of(BandRole.NIR, BandRole.SWIR22),
        valid_range=_UNIT,
        typical="healthy 0.3 to 0.8, burned below 0.1",
        rise="recovery, more canopy",
        fall="burn or loss of canopy; harvest and ploughing too",
        source="Lopez Garcia and Caselles 1991; Key and Benson 2006, FIREMON, RMRS-GTR-164",
        watched=True,
    ),
    Index(
        id="nbr2",
        title="Normalised burn ratio 2",
        domain="burn",
        formula="(swir16-swir22)/(swir16+swir22)",
        roles=(BandRole.SWIR16, BandRole.SWIR22),
        compute=_difference_of(BandRole.SWIR16, BandRole.SWIR22),
        valid_range=_UNIT,
        typical="0 to 0.4",
        rise="recovery after fire, more water in the canopy, or more crop residue",
        fall="burn, or residue gone",
        source="USGS, Landsat surface reflectance-derived spectral indices guide",
        note="The same numbers as the tillage index NDTI.",
        watched=True,
    ),
    Index(
        id="ndsi",
        title="Normalised difference snow index",
        domain="snow",
        formula="(green-swir16)/(green+swir16)",
        roles=(BandRole.GREEN, BandRole.SWIR16),
        compute=_difference_of(BandRole.GREEN, BandRole.SWIR16),
        valid_range=_UNIT,
        typical="snow above 0.4",
        rise="snow or ice; water is high too, but dark in near-infrared (below 0.11)",
        fall="snow gone",
        source="Hall, Riggs and Salomonson 1995, Remote Sensing of Environment 54, 127",
        note="The formula of MNDWI, over snow cells too, which the rule `clear` leaves out: "
        "where there is no snow the same numbers, no evidence of its own.",
        watched=True,
        # Under `clear` every cell called snow is lost, so the index of snow would be known
        # only where there is none. `snow` alone keeps nothing else: it would be unknown over
        # bare fields, and could not tell that the snow has gone.
        quality_rule="surface",
    ),
    Index(
        id="bsi",
        title="Bare soil index",
        domain="soil",
        formula="((swir16+red)-(nir+blue))/((swir16+red)+(nir+blue))",
        roles=(BandRole.SWIR16, BandRole.RED, BandRole.NIR, BandRole.BLUE),
        compute=lambda swir16, red, nir, blue: normalised_difference(swir16 + red, nir + blue),
        valid_range=_UNIT,
        typical="-0.4 to 0.3",
        rise="more bare soil: harvest, ploughing, loss of cover",
        fall="soil being covered by plants",
        source="Rikimaru, Roy and Miyatake 2002, Tropical Ecology 43, 39",
        watched=True,
    ),
)

INDICES: Final[Mapping[str, Index]] = {index.id: index for index in _CATALOGUE}
