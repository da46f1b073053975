"""What to say about departures: rules, persistence, causes, and the alert itself.

::

    rules        what is watched, and from which score on; a rule is one entry
    looks        a look that departed, with its figures
    causes       why it may have departed; a cause is one entry
    alert        the alert of a parcel: identity, severity, figures
    actions      what a person did with an alert
    watch        what is remembered of each parcel from look to look
    persistence  from the scores of a pass to alerts opened, changed and closed
"""
