"""Holdings: who parcels belong to, and when their crop years begin."""

from typing import Annotated

from fastapi import Path
from pydantic import BaseModel, Field

from service.api.context import Ctx, Reader, Steward
from service.api.routes import contract_router
from service.api.wire import Ref, Sent
from service.errors import NotFound
from service.store.holdings import get_holding, list_holdings, parcels_in, put_holding
from service.store.tables import Holding

router = contract_router("/holdings", "parcels")


class HoldingSent(Sent):
    """What is set of a holding."""

    season_start: (
        Annotated[
            str,
            Field(
                pattern=r"^(0[1-9]|1[0-2])-(0[1-9]|1\d|2[0-8])$",
                description="First day of the crop year, MM-DD; null is the hemisphere's.",
            ),
        ]
        | None
    )


class HoldingOut(BaseModel):
    """A holding; a `season_start` of null is that of the parcel's hemisphere."""

    ref: str
    season_start: str | None
    parcels: int


class HoldingsOut(BaseModel):
    """The holdings that the key may see."""

    holdings: list[HoldingOut]


def _out(row: Holding, parcels: int) -> HoldingOut:
    return HoldingOut(ref=row.ref, season_start=row.season_start, parcels=parcels)


@router.get("")
def get_holdings(caller: Reader, context: Ctx) -> HoldingsOut:
    """List holdings with the number of their parcels."""
    with context.sessions.reading() as session:
        rows = list_holdings(session, holdings=caller.holdings)
        counts = parcels_in(session, rows)
    return HoldingsOut(holdings=[_out(row, counts[row.id]) for row in rows])


@router.get("/{ref}")
def get_one_holding(ref: str, caller: Reader, context: Ctx) -> HoldingOut:
    """Answer one holding."""
    with context.sessions.reading() as session:
        row = get_holding(session, ref, holdings=caller.holdings)
        return _out(row, parcels_in(session, [row])[row.id])


@router.put("/{ref}")
def put_one_holding(
    ref: Annotated[Ref, Path()], sent: HoldingSent, caller: Steward, context: Ctx
) -> HoldingOut:
    """Set when the crop years of a holding begin; what is judged already is judged anew.

    Crop seasons that are there keep their days; those posted by `year` from now on follow.
    """
    if caller.holdings is not None and ref not in caller.holdings:
        raise NotFound("holding-not-found", "There is no holding with this ref.")
    with context.sessions.writing() as session:
        row = put_holding(session, ref, sent.season_start, context.settings.season_starts)
        made = _out(row, parcels_in(session, [row])[row.id])
    context.promise_judging()
    return made
