"""The past as it would have been judged: each look with its own season left out."""

from dataclasses import replace

import numpy as np
import pytest

from service.seasons.departure import WORSE
from service.seasons.fitting import fit, ranked
from service.seasons.history import UNLABELLED, History
from tests.simulated_seasons import simulate


def small() -> History:
    return simulate(1, per_crop=6, seasons=4, with_events=False).history


def test_a_look_does_not_shape_what_it_is_compared_with() -> None:
    history = small()
    plain = fit(history).past
    # One parcel of one season falls; its other seasons are compared with it, it is not.
    name, season = history.parcels.index("maize-00008"), 2022
    fallen = (history.parcel == name) & (history.season == season)
    values = history.values.copy()
    values[fallen, history.measures.index("ndvi")] -= 0.3
    past = fit(replace(history, values=values)).past
    own = (past.parcel == past.parcels.index("maize-00008")) & (past.season == season)
    at = past.measures.index("ndvi")
    moved = past.shortfall[at, own] - plain.shortfall[at, own]
    # But for what one parcel of six moves its cohort's median in the pass.
    assert np.median(moved) == pytest.approx(-0.3, abs=0.03)


def test_looks_that_must_not_shape_baselines_are_judged_and_leave_no_trace() -> None:
    history = small()
    out = (history.parcel == 3) & (history.season == 2022)
    values = history.values.copy()
    values[out] += 0.2
    spoiled = fit(replace(history, values=values, shapes=~out))
    gone = fit(replace(history, shapes=~out))
    for name in ("barley", "maize"):
        np.testing.assert_array_equal(spoiled.baselines.usual[name], gone.baselines.usual[name])
    assert spoiled.baselines.own.pair.size == history.parcel.size - out.sum()
    assert spoiled.past.shortfall.shape == gone.past.shortfall.shape
    assert not np.array_equal(spoiled.past.shortfall, gone.past.shortfall, equal_nan=True)


def test_quiet_seasons_rank_evenly() -> None:
    fitted = fit(small())
    scores = fitted.past.scores(WORSE, relieved=False)
    p = fitted.baselines.ranks.p(
        [fitted.past.crops[crop] for crop in fitted.past.crop.tolist()], scores
    )
    known = p[np.isfinite(p)]
    assert known.size > 2_000
    # p-values of the very scores they rank are uniform but for ties.
    for share in (0.01, 0.1, 0.5):
        assert np.mean(known <= share) == pytest.approx(share, abs=0.002)


def test_what_is_known_to_be_real_is_not_ranked_among() -> None:
    history = small()
    scores = fit(history).baselines.ranks.by_crop["*"].total
    known = history.parcel == 2
    fewer = fit(replace(history, is_known=known)).baselines.ranks.by_crop["*"].total
    assert scores - known.sum() <= fewer < scores
    fitted = fit(history)
    without = fitted.past.parcel == 2
    assert ranked(fitted, without=without).ranks.by_crop["*"].total == fewer
    assert ranked(fitted, without=without).version != fitted.baselines.version


def test_a_parcel_without_a_label_has_a_baseline_of_all_that_grew_on_it() -> None:
    fitted = fit(replace(small(), without_label=frozenset({"beet-00012"})))
    assert UNLABELLED in fitted.baselines.usual
    (code,) = fitted.baselines.own.codes(["beet-00012"], [UNLABELLED])
    assert code >= 0
    assert fitted.baselines.own.codes(["beet-00013"], [UNLABELLED])[0] == -1
    plain = fit(small())
    np.testing.assert_array_equal(fitted.baselines.usual["beet"], plain.baselines.usual["beet"])
    np.testing.assert_array_equal(fitted.baselines.spread["beet"], plain.baselines.spread["beet"])
