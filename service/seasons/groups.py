"""Crops of which too few parcels grow, compared under the name of their group."""

from collections.abc import Mapping

from service.seasons.cohort import LOOKS_OF_NEW_CROP


def compared_under(parcels: Mapping[str, int], groups: Mapping[str, str]) -> dict[str, str]:
    """Return the label under which small crops are compared; others keep their own.

    A crop of a group with fewer than 8 parcels is compared with the other small crops of the
    group, under the group's name. Where they are fewer than 8 all together, they are compared
    with the largest crop of the group instead, if that is large enough. What nobody grows in
    the season keeps its label: its past must not colour that of others.

    Parameters
    ----------
    parcels
        Crop → parcels that grow it in the season.
    groups
        Crop → its group.
    """
    members: dict[str, dict[str, int]] = {}
    for crop, group in groups.items():
        if parcels.get(crop, 0) > 0:
            members.setdefault(group, {})[crop] = parcels[crop]
    found: dict[str, str] = {}
    for group, crops in members.items():
        small = {crop: count for crop, count in crops.items() if count < LOOKS_OF_NEW_CROP}
        label = group
        if sum(small.values()) + parcels.get(group, 0) < LOOKS_OF_NEW_CROP:
            # The first by name of those that are as large as the largest.
            largest = min(crops, key=lambda crop: (-crops[crop], crop))
            label = largest if crops[largest] >= LOOKS_OF_NEW_CROP else group
        found |= dict.fromkeys(small, label)
    return {crop: label for crop, label in sorted(found.items()) if crop != label}
