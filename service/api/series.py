"""Series: the figures of one parcel in time order."""

from collections.abc import Mapping, Sequence
from datetime import datetime
from typing import Annotated, Final

from fastapi import Query, Request, Response
from sqlalchemy.orm import Session

from service import __version__
from service.api.context import Ctx, Reader
from service.api.measures import measures_in, media_type_in, split, stats_in
from service.api.routes import contract_router, is_known, not_modified, tag_of
from service.api.wire import QueryInstant, Text, joined, written
from service.errors import RejectedInput
from service.exports import SERIES_FORMATS, MeasureSeries, ParcelSeries
from service.store.judgements import Judged, judgements_of
from service.store.looks import LOOK_SHARE, PASS_GAP, Observed, observations, one_per_pass
from service.store.parcels import get_parcel
from service.store.seasons import crop_on, seasons_of
from service.store.tables import CropSeason, Parcel

router = contract_router("/parcels", "series")
_FORMATS = {media_type: entry.name for media_type, entry in SERIES_FORMATS.items()}


@router.get(
    "/{ref}/series",
    responses={200: {"content": {media_type: {} for media_type in SERIES_FORMATS}}},
)
def get_series(
    ref: str,
    caller: Reader,
    context: Ctx,
    request: Request,
    index: Annotated[list[str] | None, Query(description="Index ids or band roles.")] = None,
    since: Annotated[QueryInstant | None, Query(alias="from", description="Included.")] = None,
    until: Annotated[QueryInstant | None, Query(alias="to", description="Not included.")] = None,
    stat: Annotated[list[str] | None, Query(description="Statistics.")] = None,
    min_valid: Annotated[
        float, Query(ge=0, le=1, description="Drop looks with a smaller valid share.")
    ] = LOOK_SHARE,
    sensor: Annotated[Text | None, Query(description="One sensor only.")] = None,
    as_of: Annotated[QueryInstant | None, Query(description="As known at that time.")] = None,
    beside: Annotated[
        list[str] | None, Query(alias="with", description="baseline, departure or both.")
    ] = None,
    format: Annotated[str | None, Query(description="json or csv.")] = None,  # noqa: A002 - the contract's name
) -> Response:
    """Answer a parcel's series: one look a pass, as JSON by column or as CSV.

    With `baseline` what was expected, the band that nine looks in ten should lie in, and what
    it rests on (`own`, `blended`, `cohort`). With `departure` the shortfall, the same in
    spreads, how rare so high a score was in the past (`p`), and why a look was not judged.
    """
    measures = measures_in(index)
    stats = stats_in(stat, measures)
    judged = _judged_columns(beside)
    media_type = media_type_in(format, request.headers.get("Accept", ""), _FORMATS)
    if since is not None and until is not None and since >= until:
        raise RejectedInput.parameter("to", "`to` must be later than `from`; it is not included.")
    with context.sessions.reading() as session:
        parcel = get_parcel(session, ref, holdings=caller.holdings)
        # Nothing that the answer is made of changes without the revision.
        asked = (measures, stats, judged, since, until, min_valid, sensor, as_of, media_type)
        tag = tag_of(__version__, parcel.ref, parcel.revision, asked)
        if is_known(request, tag):
            return not_modified(tag)
        rows = _rows(session, parcel, since, until, sensor=sensor, as_of=as_of)
        seasons = seasons_of(session, [parcel.id]).get(parcel.id, [])
        thought = (
            judgements_of(session, parcel, since=since, until=until, as_of=as_of) if judged else {}
        )
    series = ParcelSeries(
        parcel=parcel.ref,
        stats=[*stats, *judged],
        measures=[
            _measure_series(
                _looks(rows, measure, (since, until), min_valid),
                measure,
                stats,
                seasons,
                {column: (thought, name) for column, name in judged.items()},
            )
            for measure in measures
        ],
    )
    return Response(
        SERIES_FORMATS[media_type].write(series), media_type=media_type, headers={"ETag": tag}
    )


def _rows(
    session: Session,
    parcel: Parcel,
    since: datetime | None,
    until: datetime | None,
    *,
    sensor: str | None,
    as_of: datetime | None,
) -> list[Observed]:
    """Return what is needed to choose looks: a pass may straddle the ends of the interval."""
    return list(
        observations(
            session,
            [parcel.id],
            since=since - PASS_GAP if since else None,
            until=until + PASS_GAP if until else None,
            sensor=sensor,
            as_of=as_of,
        )
    )


_JUDGED: Final[Mapping[str, Mapping[str, str]]] = {
    "baseline": {
        "baseline.mid": "expected",
        "baseline.low": "low",
        "baseline.high": "high",
        "baseline.basis": "basis",
    },
    "departure": {
        "shortfall": "shortfall",
        "departure": "departure",
        "p": "p",
        "unjudged": "unjudged",
    },
}
"""What `with` names: the columns it adds, and the figures of a judgement that are in them."""


def _judged_columns(values: list[str] | None) -> dict[str, str]:
    columns: dict[str, str] = {}
    for name in split(values or []):
        if name not in _JUDGED:
            raise RejectedInput.parameter("with", f"Beside figures there are {joined(_JUDGED)}.")
        columns |= _JUDGED[name]
    return columns


def _looks(
    rows: Sequence[Observed],
    measure: str,
    interval: tuple[datetime | None, datetime | None],
    min_valid: float,
) -> list[Observed]:
    since, until = interval
    return [
        look
        for look in one_per_pass((row for row in rows if row.places.has(measure)), measure)
        if look.share_of(measure) >= min_valid
        and (since is None or look.acquired_at >= since)
        and (until is None or look.acquired_at < until)
    ]


def _measure_series(
    looks: Sequence[Observed],
    measure: str,
    stats: Sequence[str],
    seasons: Sequence[CropSeason],
    judged: Mapping[str, tuple[Mapping[datetime, Judged], str]],
) -> MeasureSeries:
    """Return one measure's columns; a look that was not judged has nulls beside its figures."""
    of_look = {
        column: [thought.get(look.acquired_at, {}).get(measure, {}).get(name) for look in looks]
        for column, (thought, name) in judged.items()
    }
    return MeasureSeries(
        measure=measure,
        observed_at=[written(look.acquired_at) for look in looks],
        scene=[look.scene_ref for look in looks],
        sensor=[look.sensor for look in looks],
        crop=[crop_on(seasons, look.acquired_at.date()) for look in looks],
        stats={
            **{stat: [look.of_measure(measure, stat) for look in looks] for stat in stats},
            **of_look,
        },
    )
