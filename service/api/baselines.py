"""Baselines: what is expected of a parcel by day of season, and what that rests on."""

import math
from collections.abc import Mapping
from datetime import date, timedelta
from typing import Annotated

from fastapi import Query
from pydantic import BaseModel

from service.api.context import Ctx, Reader
from service.api.measures import measures_in
from service.api.routes import contract_router
from service.api.wire import InstantOut, QueryInstant, Text
from service.clock import now
from service.errors import NotFound, RejectedInput
from service.seasons.axis import season_ending_in
from service.seasons.baseline import Baselines, expected_at
from service.store.alert_tables import BaselineRow
from service.store.crops import labels_in
from service.store.judging import axes, find_newest_baselines, unpacked
from service.store.parcels import get_parcel
from service.store.seasons import crop_on, seasons_of

router = contract_router("/parcels", "series")


class BaselineOut(BaseModel):
    """The expected course of one measure over a season, before any look of it.

    `crops` is what grows on each day; a day without a label is that of `crop`, the season's
    last one. `usual` is the climatology of the day's crop, `mid` that with the parcel's own
    offset. `seasons` are the parcel's own that it rests on, `crop_seasons` those of all its
    parcels, of which there are `cohort_parcels`; `compared_as` is the label under which a crop
    of too few parcels is compared.
    """

    parcel: str
    index: str
    crop: str
    compared_as: str
    season: int
    days: list[date]
    crops: list[str | None]
    usual: list[float | None]
    mid: list[float | None]
    low: list[float | None]
    high: list[float | None]
    basis: list[str]
    seasons: list[int]
    crop_seasons: list[int]
    cohort_parcels: int
    version: str
    fitted_at: InstantOut


@router.get("/{ref}/baseline")
def get_baseline(
    ref: str,
    caller: Reader,
    context: Ctx,
    index: Annotated[str, Query(description="An index id or band role.")] = "ndvi",
    crop: Annotated[
        Text | None, Query(description="One crop on all days; by default what grows on each.")
    ] = None,
    as_of: Annotated[
        QueryInstant | None, Query(description="The version that was in use at that time.")
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
        row = find_newest_baselines(session, own[0].id, as_of=as_of) if own else None
        if row is None:
            raise NotFound(
                "no-baseline",
                "No season of this parcel was judged by then. Import past figures and post a "
                "scene, or import with `assess=true`.",
            )
        first, last = season_ending_in(row.season, own[0].start)
        days = [first + timedelta(days=n) for n in range((last - first).days + 1)]
        seasons = seasons_of(session, [parcel.id]).get(parcel.id, [])
        compared = labels_in(session, own[0], row.season)
    grown: list[str | None] = [crop or crop_on(seasons, day) for day in days]
    return _told(row, parcel.ref, measures[0], days, grown, _last_grown(days, grown), compared)


def _told(
    row: BaselineRow,
    parcel: str,
    measure: str,
    days: list[date],
    grown: list[str | None],
    main: str,
    compared: Mapping[str, str],
) -> BaselineOut:
    baselines = unpacked(row.arrays).baselines
    labels = [compared.get(crop or main, crop or main) for crop in grown]
    by_label = {
        label: expected_at(
            baselines, parcel=parcel, crop=label, measure=measure, days=range(len(days))
        )
        for label in {*labels, compared.get(main, main)}
    }
    of_main = by_label[compared.get(main, main)]
    daily = [by_label[label] for label in labels]
    return BaselineOut(
        parcel=parcel,
        index=measure,
        crop=main,
        compared_as=compared.get(main, main),
        season=row.season,
        days=days,
        crops=grown,
        usual=_known([_usual(baselines, label, measure, at) for at, label in enumerate(labels)]),
        mid=_known([float(each.mid[at]) for at, each in enumerate(daily)]),
        low=_known([float(each.low[at]) for at, each in enumerate(daily)]),
        high=_known([float(each.high[at]) for at, each in enumerate(daily)]),
        basis=[each.basis[at].value for at, each in enumerate(daily)],
        seasons=list(of_main.seasons),
        crop_seasons=list(of_main.crop_seasons),
        cohort_parcels=sum(crop == compared.get(main, main) for _, crop in baselines.own.pairs),
        version=row.version,
        fitted_at=row.fitted_at,
    )


def _usual(baselines: Baselines, crop: str, measure: str, day: int) -> float:
    if crop not in baselines.usual or measure not in baselines.measures:
        return math.nan
    return float(baselines.usual[crop][day, baselines.measures.index(measure)])


def _last_grown(days: list[date], grown: list[str | None]) -> str:
    """Return the crop of the last labelled day of a season up to now, empty without any."""
    past = [crop for day, crop in zip(days, grown, strict=True) if day <= now().date()] or grown
    return next((crop for crop in reversed(past) if crop), "")


def _known(values: list[float]) -> list[float | None]:
    return [None if math.isnan(value) else round(value, 6) for value in values]
