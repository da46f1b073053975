"""Where the numbers of a scene are."""

from dataclasses import dataclass
from pathlib import Path
from typing import Literal

from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling
from service.tiles.buffering import CloudBuffer


@dataclass(frozen=True, slots=True, kw_only=True)
class BandSource:
    """Where the numbers of one band, of the quality or of the saturation layer are.

    Attributes
    ----------
    role
        What the band measures, or ``quality`` or ``saturation``.
    path
        The file, in the archive.
    scaling
        How numbers become reflectance; None for layers that are no band.
    band
        Its place in the file, from 1.
    nodata
        The number that stands for "no data".
    saturated
        The number that stands for "saturated".
    saturation_bit
        The band's bit in the scene's saturation layer.
    part
        JSON pointer of the part that the file came in; by default that of the role.
    """

    role: BandRole | Literal["quality", "saturation"]
    path: Path
    scaling: Scaling | None
    band: int = 1
    nodata: float | None = None
    saturated: float | None = None
    saturation_bit: int | None = None
    part: str | None = None

    @property
    def pointer(self) -> str:
        """JSON pointer for faults of this file."""
        return self.part or f"/{self.role}"


@dataclass(frozen=True, slots=True, kw_only=True)
class SceneSource:
    """Where the numbers of one scene are.

    Attributes
    ----------
    bands
        At least one; each has a scaling.
    quality
        The quality layer, if the scene has one; it has a nodata class, which stands for
        what lies outside the layer.
    saturation
        The layer of saturation bits, if the scene has one; it has a number that stands for
        what lies outside it.
    cloud_buffer
        Which cells count as near cloud by the quality layer, None for no such thing.
    """

    bands: tuple[BandSource, ...]
    quality: BandSource | None = None
    saturation: BandSource | None = None
    cloud_buffer: CloudBuffer | None = None

    def __post_init__(self) -> None:
        if not self.bands or any(band.scaling is None for band in self.bands):
            raise ValueError("a scene needs bands, each with its scaling")
        if any(layer.nodata is None for layer in self.beside_bands):
            raise ValueError("a quality or saturation layer needs a nodata class")

    @property
    def layers(self) -> tuple[BandSource, ...]:
        """Bands, quality layer and saturation layer, in this order."""
        return (*self.bands, *self.beside_bands)

    @property
    def beside_bands(self) -> tuple[BandSource, ...]:
        """Quality layer and saturation layer, if there are any."""
        return tuple(layer for layer in (self.quality, self.saturation) if layer is not None)
