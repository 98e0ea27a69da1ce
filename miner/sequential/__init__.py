"""Statistics for looking again every quarter: evidence that stays honest however often one looks.

``clusters`` says which triggers hang together, ``evidence`` holds the e-process, ``interval`` the
confidence sequence, ``ebh`` the choice across rules, ``online`` false discoveries in a stream of
new rules, ``change`` lasting changes in how often an alert type comes. Arrays in, records out.
"""
