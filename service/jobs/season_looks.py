"""The looks of a season pass by pass, and those of the seasons before it as history."""

from collections.abc import Iterable, Mapping, Sequence
from datetime import date, datetime, timedelta
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from sqlalchemy.orm import Session

from service.assess import BASELINE_MEASURES, LOOK_MEASURES
from service.seasons.history import History
from service.seasons.judgement import OnePass
from service.store.columns import microseconds
from service.store.crop_labels import CropLabels, crop_labels
from service.store.judging import Axis, PastAlert, Spell, past_alerts
from service.store.look_arrays import read_looks
from service.store.look_choice import Looks
from service.store.looks import LOOK_SHARE

Numbers = NDArray[np.int64]
NOTHING: Final[Mapping[str, str]] = {}

_DAY_US: Final = 86_400_000_000
_DAY_0: Final = date(1970, 1, 1).toordinal()
_TICK: Final = timedelta(microseconds=1)
_DAY: Final = timedelta(days=1)


def passes_of(
    session: Session,
    axis: Axis,
    season: int,
    *,
    after: datetime | None = None,
    compared: Mapping[str, str] = NOTHING,
    is_judged: bool | None = True,
) -> list[OnePass]:
    """Return the judged looks of a season, pass by pass; only those later than `after`.

    `compared` are the labels under which some crops are compared; an `is_judged` of None takes
    looks that only shape baselines as well.
    """
    since = axis.begins_at(season) if after is None else after + _TICK
    until = axis.ends_at(season)
    looks = read_looks(
        session, axis.refs, LOOK_MEASURES, since=since, until=until, is_judged=is_judged
    )
    labels = crop_labels(session, axis.refs, since=since.date(), until=until.date())
    begun = looks.begun()
    # A pass is one platform's; looks are by parcel and are taken apart by pass.
    keys = sorted({(begun[at], looks.platforms[at]) for at in np.unique(looks.scene).tolist()})
    number = {key: at for at, key in enumerate(keys)}
    of_scene = [number.get((begun[at], looks.platforms[at]), -1) for at in range(len(begun))]
    of_look = np.array(of_scene, dtype=np.int64)[looks.scene]
    order = np.argsort(of_look, kind="stable")
    edges = np.searchsorted(of_look[order], np.arange(len(keys) + 1))
    return [
        _one_pass(axis, season, at, looks.kept(order[first:last]), labels, compared)
        for (at, _), first, last in zip(keys, edges[:-1], edges[1:], strict=True)
    ]


def _one_pass(
    axis: Axis,
    season: int,
    acquired_at: datetime,
    looks: Looks,
    labels: CropLabels,
    compared: Mapping[str, str],
) -> OnePass:
    crop = labels.on(looks.parcel_ids, _days(looks)).tolist()
    names = (*labels.crops, None)
    under = (*(compared.get(name, name) for name in labels.crops), None)
    scene = looks.scene.tolist()
    return OnePass(
        acquired_at=acquired_at,
        season=season,
        day=axis.day_of(acquired_at),
        parcels=[axis.refs[parcel_id] for parcel_id in looks.parcel_ids.tolist()],
        crops=[under[code] for code in crop],
        declared=[names[code] for code in crop],
        scenes=[looks.refs[at] for at in scene],
        looked_at=[looks.acquired_at[at] for at in scene],
        measures=LOOK_MEASURES,
        values=looks.values.astype(np.float64),
        valid_share=_as_told(looks.valid_share),
        water=_as_told(looks.water),
    )


def _as_told(shares: NDArray[np.float32]) -> NDArray[np.float64]:
    """Return stored shares in their shortest decimals: 0.7 is not below a limit of 0.7."""
    distinct, which = np.unique(shares, return_inverse=True)
    told: NDArray[np.float64] = np.array([float(str(share)) for share in distinct])[which]
    return told


def _days(looks: Looks) -> Numbers:
    days: Numbers = looks.instants() // _DAY_US + _DAY_0
    return days


def past_of(
    session: Session,
    axis: Axis,
    season: int,
    compared: Mapping[str, str] = NOTHING,
    *,
    alerts: Sequence[PastAlert] | None = None,
) -> History:
    """Return the looks of the seasons before one, with what alerts and people said of them.

    Without `alerts` those that are kept.
    """
    if alerts is None:
        alerts = past_alerts(session, axis, axis.begins_at(season))
    return history_of(
        session,
        axis,
        season,
        spoiled=[each.spell for each in alerts if each.is_spoiled],
        real=[each.spell for each in alerts if each.is_real],
        compared=compared,
    )


def history_of(
    session: Session,
    axis: Axis,
    season: int,
    *,
    spoiled: Iterable[Spell],
    real: Iterable[Spell],
    compared: Mapping[str, str] = NOTHING,
) -> History:
    """Return the looks of the seasons before one, and which of them shape baselines.

    Parameters
    ----------
    spoiled
        Looks that must not shape a baseline.
    real
        Looks of which a person said that they had departed indeed.
    compared
        Labels under which some crops are compared.
    """
    begin, end = axis.begins_at(season), axis.ends_at(season)
    looks = read_looks(session, axis.refs, BASELINE_MEASURES, since=None, until=begin)
    looks = looks.kept(looks.valid_share >= np.float32(LOOK_SHARE))
    labels = crop_labels(session, axis.refs, since=None, until=end.date() - _DAY)
    labelled = labels.parcels_between(begin.date(), end.date() - _DAY)
    labels = labels.under(compared)
    known, parcel = np.unique(looks.parcel_ids, return_inverse=True)
    return History(
        parcels=tuple(axis.refs[parcel_id] for parcel_id in known.tolist()),
        crops=labels.crops,
        measures=BASELINE_MEASURES,
        parcel=parcel,
        crop=labels.on(looks.parcel_ids, _days(looks)),
        season=_by_scene(looks, [axis.season_of(at) for at in looks.acquired_at]),
        day=_by_scene(looks, [axis.day_of(at) for at in looks.acquired_at]),
        pass_at=_by_scene(looks, [int(at.timestamp()) for at in looks.begun()]),
        values=looks.values.astype(np.float64),
        shapes=~_within(looks, spoiled),
        is_known=_within(looks, real),
        without_label=frozenset(
            ref for parcel_id, ref in axis.refs.items() if parcel_id not in labelled
        ),
    )


def _by_scene(looks: Looks, figures: Sequence[int]) -> Numbers:
    return np.array(figures, dtype=np.int64)[looks.scene]


def _within(looks: Looks, spells: Iterable[Spell]) -> NDArray[np.bool_]:
    """Whether each look, of looks by parcel, lies in a spell of its parcel."""
    at, lies = looks.instants(), np.zeros(len(looks), dtype=bool)
    for parcel_id, first, last in spells:
        begin, end = np.searchsorted(looks.parcel_ids, [parcel_id, parcel_id + 1])
        own: NDArray[Any] = at[begin:end]
        lies[begin:end] |= (own >= microseconds(first)) & (own <= microseconds(last))
    return lies
