"""Scalings as they are sent: one for all bands, or one for each band role."""

from collections.abc import Mapping
from typing import Annotated

from pydantic import Field, FiniteFloat

from service.api.batches import model_of
from service.api.wire import Sent
from service.errors import RejectedInput
from service.spectral.roles import BandRole


class ScalingSent(Sent):
    """Reflectance = number * scale + offset."""

    scale: Annotated[FiniteFloat, Field(gt=0)]
    offset: FiniteFloat


def scaling_from(sent: object, pointer: str) -> ScalingSent | dict[BandRole, ScalingSent]:
    """Return one scaling, or one for each role, decided by hand so that faults name the place.

    Raises
    ------
    RejectedInput
        It is neither; with pointers below `pointer`.
    """
    if not isinstance(sent, Mapping) or not sent or "scale" in sent or "offset" in sent:
        return model_of(ScalingSent, sent, pointer)
    if not sent.keys() <= set(BandRole):
        raise RejectedInput.at(
            pointer,
            "Scaling is one object with `scale` and `offset`, or one for each band role "
            f"({', '.join(BandRole)}).",
        )
    return {
        BandRole(role): model_of(ScalingSent, own, f"{pointer}/{role}")
        for role, own in sent.items()
    }
