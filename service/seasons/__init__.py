"""What is normal at which time of the season: the season axis, baselines and departures.

The method is "own offset against cohort": a parcel is compared with the usual course of its
crop, moved by what the same crop does in the same pass, moved by what this parcel always does.

::

    axis        where a season begins and ends, and which day of it a date is
    history     the looks of finished seasons, one flat table
    usual       the usual course of a crop over the season (its climatology)
    cohort      how far a crop is off its usual course in one pass
    offsets     how far a parcel is off its crop, season after season
    spread      how far looks lie from what was expected of them
    groups      small crops under the name of their group
    ranks       how rare a score is among those of the past
    baseline    all of that, as it is kept; what to expect on any day
    departure   one pass against the baseline: shortfalls, departures, suspect looks
    judgement   what is thought of each look of a pass
    past        the past as it would have been judged
    fitting     baselines and the past, from the history
"""
