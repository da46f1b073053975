"""Baselines: what is expected of a parcel by day of season, and what that rests on."""

import math
from datetime import date, timedelta
from typing import Annotated

from fastapi import Query
from pydantic import BaseModel

from service.api.context import Ctx, Reader
from service.api.measures import measures_in
from service.api.routes import contract_router
from service.api.wire import InstantOut, Text
from service.clock import now
from service.errors import NotFound, RejectedInput
from service.seasons.axis import season_ending_in
from service.seasons.baseline import expected_at
from service.store.judging import axes, find_newest_baselines, unpacked
from service.store.parcels import get_parcel
from service.store.seasons import crop_on, seasons_of
from service.store.tables import CropSeason

router = contract_router("/parcels", "series")


class BaselineOut(BaseModel):
    """The expected course of one measure over a season, before any look of it."""

    parcel: str
    index: str
    crop: str
    season: int
    days: list[date]
    mid: list[float | None]
    low: list[float | None]
    high: list[float | None]
    basis: list[str]
    seasons: list[int]
    crop_seasons: list[int]
    version: str
    fitted_at: InstantOut


@router.get("/{ref}/baseline")
def get_baseline(
    ref: str,
    caller: Reader,
    context: Ctx,
    index: Annotated[str, Query(description="An index id or band role.")] = "ndvi",
    crop: Annotated[
        Text | None, Query(description="By default the one of the season's last labelled day.")
    ] = None,
) -> BaselineOut:
    """Answer what is expected of a parcel on each day of the newest season that is judged.

    Bands and figures: `low` to `high` holds nine looks in ten if they are normally
    distributed. At a look, what the same crop does in the same pass moves the expected value
    further; the series shows that with `with=baseline`.
    """
    measures = measures_in([index])
    if len(measures) != 1:
        raise RejectedInput.parameter("index", "A baseline is of one index; name one.")
    with context.sessions.reading() as session:
        parcel = get_parcel(session, ref, holdings=caller.holdings)
        own = [
            axis for axis in axes(session, context.settings.season_starts) if parcel.id in axis.refs
        ]
        row = find_newest_baselines(session, own[0].id) if own else None
        if row is None:
            raise NotFound(
                "no-baseline",
                "No season of this parcel is judged yet. Import past figures and post a scene, or "
                "import with `assess=true`.",
            )
        first, last = season_ending_in(row.season, own[0].start)
        days = [first + timedelta(days=n) for n in range((last - first).days + 1)]
        seasons = seasons_of(session, [parcel.id]).get(parcel.id, [])
    grown = crop or _crop_of_season(seasons, days)
    expected = expected_at(
        unpacked(row.arrays).baselines,
        parcel=parcel.ref,
        crop=grown or "",
        measure=measures[0],
        days=range(len(days)),
    )
    return BaselineOut(
        parcel=parcel.ref,
        index=measures[0],
        crop=grown or "",
        season=row.season,
        days=days,
        mid=_known(expected.mid.tolist()),
        low=_known(expected.low.tolist()),
        high=_known(expected.high.tolist()),
        basis=[basis.value for basis in expected.basis],
        seasons=list(expected.seasons),
        crop_seasons=list(expected.crop_seasons),
        version=row.version,
        fitted_at=row.fitted_at,
    )


def _crop_of_season(seasons: list[CropSeason], days: list[date]) -> str | None:
    """Return the crop that holds the last labelled day of a season up to now."""
    past = [day for day in days if day <= now().date()] or days
    return next((crop for day in reversed(past) if (crop := crop_on(seasons, day))), None)


def _known(values: list[float]) -> list[float | None]:
    return [None if math.isnan(value) else round(value, 6) for value in values]
