"""From series, baselines and a rule to judgements and alerts.

Judging is a fold over the passes of one season axis in order of acquisition: `judge` takes
the state, one pass, the baselines and a rule, and gives the next state, a judgement of every
look, and what happened to alerts. The state is all that is remembered; nothing is changed in
place, so that a fold may start again from any state that was kept. A rehearsal is the same
fold over passes of the past.

::

    preparing   baselines, and rules tuned by replaying finished seasons
    state       what is remembered from pass to pass, and what is known beside the looks
    scored      from judgements to the looks that a rule watches
    folding     the fold itself
"""

from service.assess.folding import alerts_after, fold, in_order, judge
from service.assess.preparing import (
    BASELINE_MEASURES,
    LOOK_MEASURES,
    Prepared,
    past_looks,
    prepare,
)
from service.assess.state import NO_HOLDINGS, Beside, Holdings, State, Step

__all__ = [
    "BASELINE_MEASURES",
    "LOOK_MEASURES",
    "NO_HOLDINGS",
    "Beside",
    "Holdings",
    "Prepared",
    "State",
    "Step",
    "alerts_after",
    "fold",
    "in_order",
    "judge",
    "past_looks",
    "prepare",
]
