"""Band roles: what a band measures, whatever a product calls it."""

from enum import StrEnum


class BandRole(StrEnum):
    """What a band measures, by the common names of the STAC electro-optical extension."""

    COASTAL = "coastal"
    BLUE = "blue"
    GREEN = "green"
    RED = "red"
    REDEDGE071 = "rededge071"
    REDEDGE075 = "rededge075"
    REDEDGE078 = "rededge078"
    NIR = "nir"
    NIR08 = "nir08"
    SWIR16 = "swir16"
    SWIR22 = "swir22"
    LWIR11 = "lwir11"
