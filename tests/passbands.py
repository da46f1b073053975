"""What a sensor's bands see of a spectrum: its mean over each passband."""

from collections.abc import Iterable
from typing import Any

import numpy as np
import prosail
from numpy.typing import NDArray

from service.spectral.bands import Band

Spectra = NDArray[np.float64]

CANOPY_NM: Spectra = np.arange(400.0, 2501.0)
"""Wavelengths of `canopy`."""

# A green canopy in midsummer, as the worked examples of the reference table state it.
_CANOPY: dict[str, Any] = {
    "n": 1.5, "cab": 40.0, "car": 8.0, "cbrown": 0.0, "cw": 0.01, "cm": 0.009, "lai": 3.0,
    "lidfa": -0.35, "lidfb": -0.15, "typelidf": 1, "hspot": 0.01, "tts": 30.0, "tto": 10.0,
    "psi": 0.0, "rsoil": 1.0, "psoil": 1.0, "prospect_version": "5",
}  # fmt: skip


def canopy(**changed: float) -> Spectra:
    """Reflectance of a canopy by PROSAIL (Jacquemoud et al. 2009), at `CANOPY_NM`."""
    return np.asarray(prosail.run_prosail(**{**_CANOPY, **changed}), dtype=np.float64)


def through(bands: Iterable[Band], spectra: Spectra, wavelengths_nm: Spectra) -> dict[str, Any]:
    """Return by band role the mean of spectra (…, wavelengths) within half a width of its centre.

    Thermal bands are left out: the spectra end before them.
    """
    seen = {}
    for band in bands:
        if band.unit == "reflectance":
            off = np.abs(wavelengths_nm - 1e3 * band.centre_um)
            within = off <= 1e3 * band.width_um / 2 + 1e-3
            assert within.any(), band
            seen[band.role.value] = spectra[..., within].mean(axis=-1)
    return seen
