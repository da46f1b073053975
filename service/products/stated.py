"""The scaling that a product's own metadata state, held against the published one."""

import math
from collections.abc import Mapping
from typing import Any

from service.spectral.roles import BandRole
from service.spectral.scaling import Scaling
from service.spectral.sensors import Sensor


def scaling_part(
    stated: Mapping[BandRole, Scaling], sensor: Sensor, *, processing_baseline: str | None
) -> dict[str, Any]:
    """Return ``scaling`` of the ``scene`` part by band role, where it is not the published one.

    The product's own word wins where they differ, since it says how these very numbers were
    stored. Where they agree nothing is sent, so that a product is the same content however it
    came.
    """
    found = {}
    for role, own in stated.items():
        published = sensor.scaling(role, processing_baseline=processing_baseline)
        if not _is_same(own, published):
            found[role.value] = {"scale": own.scale, "offset": own.offset}
    return {"scaling": found} if found else {}


def _is_same(one: Scaling, other: Scaling) -> bool:
    return math.isclose(one.scale, other.scale, rel_tol=1e-9) and math.isclose(
        one.offset, other.offset, rel_tol=1e-9, abs_tol=1e-12
    )
