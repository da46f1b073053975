"""Crops: the labels that are in use, and the groups in which small ones are compared."""

from typing import Annotated

from pydantic import BaseModel, Field

from service.api.context import Ctx, Reader, Steward
from service.api.routes import contract_router
from service.api.wire import Sent, Text
from service.store.crops import crop_groups, parcels_by_crop, put_crop_groups
from service.store.judging import want_judging_of_everything
from service.store.sessions import serialise

router = contract_router("/crops", "parcels")


class GroupsSent(Sent):
    """Crop and group of those that have one; what is left out has none."""

    groups: Annotated[dict[Text, Text], Field(max_length=2000)]


class CropOut(BaseModel):
    """A crop by its user's own label, its group, and how many parcels ever grew it."""

    crop: str
    group: str | None
    parcels: int


class CropsOut(BaseModel):
    """The crops that are in use or have a group."""

    crops: list[CropOut]


@router.get("")
def get_crops(caller: Reader, context: Ctx) -> CropsOut:
    """List crops with their groups. Labels are the user's own and mean nothing to the service."""
    with context.sessions.reading() as session:
        grown = parcels_by_crop(session, holdings=caller.holdings)
        groups = crop_groups(session)
    # What others call their crops is their business.
    named = grown if caller.holdings is not None else grown | groups
    return CropsOut(
        crops=[
            CropOut(crop=crop, group=groups.get(crop), parcels=grown.get(crop, 0))
            for crop in sorted(named)
        ]
    )


@router.put("")
def put_crops(sent: GroupsSent, caller: Steward, context: Ctx) -> CropsOut:
    """Say which crops belong together; what is judged already is judged anew.

    A crop with fewer than 8 parcels in a season is then compared with the small crops of its
    group, or with the group's largest where these are too few as well.
    """
    caller.must_see_all("how crops are grouped")
    with context.sessions.writing() as session:
        serialise(session, "judging")
        if put_crop_groups(session, sent.groups):
            want_judging_of_everything(session)
    context.promise_judging()
    return get_crops(caller, context)
