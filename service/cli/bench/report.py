"""What came of a validation, as tables for people and as plain members for programs."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from math import isnan
from typing import TYPE_CHECKING, Any, Final

from rich.box import SIMPLE
from rich.table import Table

from service.cli.bench.home import benchmark

if TYPE_CHECKING:
    from benchmarks.scoring import Share, Tally

NOT_ANSWERED: Final = "not answered"
NONE: Final = "none"
ORDINARY: Final = "ordinary"
DROUGHT: Final = "drought"
_EVENTS: Final = ("sudden", "slow")


@dataclass(frozen=True, slots=True, kw_only=True)
class Compared:
    """Tallies of one kind of region, a tally a seed: the service's and its rivals'."""

    region: str
    parcels: int
    seeds: Sequence[int]
    own: "Sequence[Tally]"
    z_score: "Sequence[Tally]"
    z_threshold: float
    fixed: "Sequence[Tally]"
    fixed_threshold: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Figure:
    """A figure that is to be shown: what it must be, should be, and how to take it.

    `value` gives the figure, or None where it was not answered; `told` how it reads.
    """

    name: str
    must: str
    aim: str
    value: "Callable[[Sequence[Tally]], float | None]"
    told: "Callable[[Sequence[Tally]], str]"


def tables_of(compared: Sequence[Compared]) -> list[Table]:
    """Return the tables of a validation: figures by region, then causes and chance."""
    tables = []
    for each in compared:
        tables.append(_figures(each))
        tables.append(_by_kind(each))
        if any(tally.causes for tally in each.own):
            tables.append(_causes(each))
        if any(tally.chances for tally in each.own):
            tables.append(_reliability(each))
    return tables


def document_of(compared: Compared) -> dict[str, Any]:
    """Return the same as plain members, fit for JSON."""
    methods = {
        "service": compared.own,
        "z_score": compared.z_score,
        "fixed_threshold": compared.fixed,
    }
    pooled = benchmark("scoring").pooled(compared.own)
    return {
        "scenario": compared.region,
        "parcels": compared.parcels,
        "thresholds": {
            "z_score": compared.z_threshold,
            "fixed_threshold": compared.fixed_threshold,
        },
        "methods": {
            name: {figure.name: figure.value(tallies) for figure in figures_for(compared.region)}
            for name, tallies in methods.items()
        },
        "causes": {f"{kind} called {cause}": n for (kind, cause), n in pooled.causes.items()},
        "chance": [
            {"up_to": high, "stated": stated, "true": share.value, "alerts": share.of}
            for high, share, stated in pooled.reliability()
        ],
        "parcel_weeks": pooled.parcel_weeks,
        "events_not_scored": pooled.unseen,
    }


def figures_for(region: str) -> list[Figure]:
    """Return the figures that are shown for a kind of region, with what they must be."""
    drought = region == DROUGHT
    shown = [
        _false_alarms("1.6" if drought else "1.25", "1.0" if drought else "0.8"),
        _share("sudden events in time", "0.90", "0.94", lambda tally: _total(tally.sudden)),
        _share("slow events in time", "0.78", "0.87", lambda tally: _total(tally.slow)),
        _nominal(),
        _share(
            "true of chance ≤ 0.1",
            "0.85",
            "0.92",
            lambda tally: tally.sure_and_true,
            stated=lambda tally: tally.chances,
        ),
        _share(
            "cause right at opening",
            "0.80",
            "0.88",
            lambda tally: tally.cause_right,
            stated=lambda tally: tally.causes,
        ),
        _share(
            "flood and burn, precision",
            "0.95",
            "0.98",
            lambda tally: tally.steady_precision,
            stated=lambda tally: tally.causes,
        ),
    ]
    return [*shown, _warned() if drought else _notices()]


def _figures(compared: Compared) -> Table:
    seeds = ", ".join(map(str, compared.seeds))
    table = Table(
        "figure",
        "must",
        "aim",
        "service",
        f"z ≥ {compared.z_threshold:.1f}",
        f"fall ≥ {compared.fixed_threshold:g}",
        title=f"{compared.region}: {compared.parcels} parcels, seeds {seeds}",
        box=SIMPLE,
    )
    for figure in figures_for(compared.region):
        told = [figure.told(each) for each in (compared.own, compared.z_score, compared.fixed)]
        # What is asked of the service in an ordinary region is not asked of other ones.
        is_asked = compared.region in {ORDINARY, DROUGHT}
        table.add_row(figure.name, *((figure.must, figure.aim) if is_asked else ("", "")), *told)
    return table


def _by_kind(compared: Compared) -> Table:
    table = Table(
        "event", "service", "z-score", "fixed", title="Opened in time, by kind", box=SIMPLE
    )
    pooled = benchmark("scoring").pooled
    methods = [pooled(each) for each in (compared.own, compared.z_score, compared.fixed)]
    for speed in _EVENTS:
        for kind in getattr(methods[0], speed):
            table.add_row(kind, *(_told_share(getattr(each, speed)[kind]) for each in methods))
    table.add_row("not scored", *(str(each.unseen) for each in methods))
    return table


def _causes(compared: Compared) -> Table:
    causes = benchmark("scoring").pooled(compared.own).causes
    named = sorted({cause for _, cause in causes})
    table = Table("what was", *named, title="Causes named at opening", box=SIMPLE)
    for kind in sorted({kind for kind, _ in causes}):
        table.add_row(kind, *(str(causes.get((kind, cause), "")) for cause in named))
    return table


def _reliability(compared: Compared) -> Table:
    table = Table(
        "chance up to",
        "stated, mean",
        "false",
        "alerts",
        title="Chance of a false alarm",
        box=SIMPLE,
    )
    for high, share, stated in benchmark("scoring").pooled(compared.own).reliability():
        table.add_row(f"{high:g}", f"{stated:.3f}", f"{1.0 - share.value:.3f}", str(share.of))
    return table


def _false_alarms(must: str, aim: str) -> Figure:
    def told(tallies: "Sequence[Tally]") -> str:
        pooled = benchmark("scoring").pooled(tallies)
        return f"{pooled.false_alarm_rate:.2f} ± {pooled.false_alarm_error:.2f}"

    return Figure(
        name="false alarms / 1,000 weeks",
        must=f"≤ {must}",
        aim=f"≤ {aim}",
        value=lambda tallies: float(benchmark("scoring").pooled(tallies).false_alarm_rate),
        told=told,
    )


def _share(
    name: str,
    must: str,
    aim: str,
    of: "Callable[[Tally], Share]",
    *,
    stated: "Callable[[Tally], object]" = bool,
) -> Figure:
    """Return the figure of a share; `stated` is falsy for methods that say nothing of it."""

    def share(tallies: "Sequence[Tally]") -> "Share":
        return of(benchmark("scoring").pooled(tallies))

    def told(tallies: "Sequence[Tally]") -> str:
        is_answered = any(stated(tally) for tally in tallies)
        return _told_share(share(tallies)) if is_answered else NOT_ANSWERED

    return Figure(
        name=name,
        must=f"≥ {must}",
        aim=f"≥ {aim}",
        value=lambda tallies: share(tallies).value if share(tallies).of else None,
        told=told,
    )


def _nominal() -> Figure:
    def shares(tallies: "Sequence[Tally]") -> list[float]:
        return [each.value for tally in tallies for each in tally.nominal if each.of]

    def told(tallies: "Sequence[Tally]") -> str:
        found = shares(tallies)
        return f"{min(found):.2%} to {max(found):.2%}" if found else NOT_ANSWERED

    def farthest(tallies: "Sequence[Tally]") -> float | None:
        """Return the seed's share that is farthest from 1 %, as a factor."""
        found = shares(tallies)
        return max(found, key=lambda share: abs(share - 0.01)) if found else None

    return Figure(
        name="p ≤ 1 % by seed",
        must="0.5 to 2 %",
        aim="0.7 to 1.4 %",
        value=farthest,
        told=told,
    )


def _notices() -> Figure:
    def count(tallies: "Sequence[Tally]") -> float | None:
        told = [each for tally in tallies for each in tally.notices]
        return float(sum(told)) if told else None

    return Figure(
        name="regional notices",
        must="≤ 1 of 6",
        aim="0",
        value=count,
        told=lambda tallies: (
            NOT_ANSWERED
            if (found := count(tallies)) is None
            else f"{found:.0f} in {len(tallies)} seasons"
        ),
    )


def _warned() -> Figure:
    def share(tallies: "Sequence[Tally]") -> "Share":
        return benchmark("scoring").pooled(tallies).droughts  # type: ignore[no-any-return]

    return Figure(
        name="notice within 30 days",
        must="≥ 5 of 6",
        aim="6 of 6",
        value=lambda tallies: share(tallies).value if share(tallies).of else None,
        told=lambda tallies: _told_count(share(tallies)),
    )


def _told_share(share: "Share") -> str:
    if isnan(share.value):
        return NONE
    low, high = share.interval
    return f"{share.value:.2f} ({low:.2f}-{high:.2f}) of {share.of}"


def _told_count(share: "Share") -> str:
    return f"{share.hits} of {share.of}" if share.of else NOT_ANSWERED


def _total(by_kind: "dict[str, Share]") -> "Share":
    return benchmark("scoring").total(by_kind)  # type: ignore[no-any-return]
