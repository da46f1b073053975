"""What to say about departures: rules, persistence, causes, and the alert itself.

::

    rules        what is watched, and from which score on; a rule is one entry
    looks        a look that departed, with its figures
    evidence     what departed looks show
    causes       why a parcel may have departed; a cause is one entry
    reasons      how to say so, in figures
    alert        the alert of a parcel: identity, severity, figures
    actions      what a person did with an alert
    diary        what people know to have happened, and what it explains
    notices      a shift that the crops of a region share
    chance       the odds that an alert is a false one
    explained    what is known beside the looks, and what of it explains a departure
    watch        what is remembered of each parcel from look to look
    persistence  from the scores of a pass to alerts opened, changed and closed
    replay       the alarms that a rule would have raised in finished seasons
    tuning       thresholds from that
"""
