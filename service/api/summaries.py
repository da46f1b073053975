"""What became of alerts, in numbers: how often they were right."""

from collections.abc import Sequence
from typing import Annotated, Any

from fastapi import Query
from pydantic import BaseModel

from service.api.context import Ctx, Reader
from service.api.routes import contract_router
from service.api.wire import QueryInstant, Ref
from service.errors import RejectedInput
from service.store.summaries import Counted, by, counted_alerts, totals

router = contract_router("/alerts/summary", "alerts")


class Totals(BaseModel):
    """Alerts by state and verdict; `precision` is null where nobody gave a verdict."""

    alerts: int
    open: int
    acknowledged: int
    closed: int
    verdicts: dict[str, int]
    precision: float | None


class OfRule(Totals):
    """The alerts of a rule."""

    rule: str


class OfCause(Totals):
    """The alerts of a likely cause."""

    cause: str


class OfCrop(Totals):
    """The alerts of a crop; null is that of parcels without a label."""

    crop: str | None


class OfSeason(Totals):
    """The alerts that opened in a crop year, both days included."""

    from_on: str
    until_on: str


class SummaryOut(BaseModel):
    """Alerts in numbers. Retracted ones are left out: judged anew, they never opened."""

    total: Totals
    by_rule: list[OfRule]
    by_cause: list[OfCause]
    by_crop: list[OfCrop]
    by_season: list[OfSeason]


@router.get("")
def get_summary(
    caller: Reader,
    context: Ctx,
    holding: Annotated[Ref | None, Query()] = None,
    since: Annotated[
        QueryInstant | None, Query(alias="from", description="Opened at or after.")
    ] = None,
    until: Annotated[QueryInstant | None, Query(alias="to", description="Opened before.")] = None,
) -> SummaryOut:
    """Count alerts and verdicts by rule, cause, crop and season.

    Precision is the share of alerts with a verdict that were `confirmed` or `expected`. It says
    nothing about what was missed, nor about alerts that nobody looked into.
    """
    if since is not None and until is not None and since >= until:
        raise RejectedInput.parameter("to", "`to` must be later than `from`; it is not included.")
    with context.sessions.reading() as session:
        counted = counted_alerts(
            session, holdings=caller.holdings, holding=holding, since=since, until=until
        )
    return SummaryOut(
        total=Totals(**totals(counted)),
        by_rule=[OfRule(rule=rule, **some) for rule, some in _split(counted, "rule")],
        by_cause=[OfCause(cause=cause, **some) for cause, some in _split(counted, "cause")],
        by_crop=[OfCrop(crop=crop, **some) for crop, some in _split(counted, "crop")],
        by_season=[
            OfSeason(from_on=first, until_on=last, **some)
            for (first, last), some in _split(counted, "season")
        ],
    )


def _split(counted: Sequence[Counted], name: str) -> list[tuple[Any, dict[str, Any]]]:
    return [(key, totals(some)) for key, some in by(counted, name).items()]
