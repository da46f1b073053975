"""From stored numbers to reflectance."""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, slots=True, kw_only=True)
class Scaling:
    """How a band's stored numbers become reflectance: number * scale + offset.

    The offset is added *after* the scale, as in the STAC raster extension (version 2).
    The agency's metadata of Sentinel-2 state the same as -1000 to be added *before* the
    division by 10,000.

    Attributes
    ----------
    scale
        Reflectance per unit of the stored number, above 0.
    offset
        Reflectance of a stored 0, unitless.
    """

    scale: float
    offset: float

    def __post_init__(self) -> None:
        if not (math.isfinite(self.scale) and self.scale > 0 and math.isfinite(self.offset)):
            raise ValueError("a scaling needs a finite scale above 0 and a finite offset")

    def reflectance(
        self, numbers: NDArray[np.integer] | NDArray[np.floating]
    ) -> NDArray[np.float64]:
        """Return the reflectance of stored numbers.

        Parameters
        ----------
        numbers
            Numbers as stored, any shape. Nodata and saturated numbers are the caller's to
            leave out: here they are numbers like any other.

        Returns
        -------
        NDArray[np.float64]
            Same shape, unitless (0.25 is 25 %), not clipped: a small negative reflectance
            is a legal outcome of atmospheric correction. NaN where a number is NaN or
            infinite.
        """
        reflectance = np.asarray(np.multiply(numbers, self.scale, dtype=np.float64))
        reflectance += self.offset
        if not np.issubdtype(np.asarray(numbers).dtype, np.integer):
            # A float file may hold infinities: no reflectance, and they would spread.
            reflectance[~np.isfinite(reflectance)] = np.nan
        return reflectance
