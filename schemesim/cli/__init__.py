"""The command line: check a scenario, show a clearing sequence, study all locations, inject failures.

``python -m schemesim COMMAND FILE …``; ``python -m schemesim COMMAND --help`` tells the rest.

Exit status: 0 done, 1 a run that cannot go on (it says why), 2 bad input (every mistake is told),
130 interrupted (what was finished until then is printed).

JSON
----
With ``--json`` one object goes to the output instead of text. ``"schemesim": 1`` is the version
of this form, ``"kind"`` the command, ``"scenario"`` the file and its name, ``"note"`` the
safety note. Names carry units: ``_ms``, ``_per_yr``, ``_mw``; ``_low`` and ``_high`` are the ends of a
bracket that certainly holds. ``null`` stands for none and for what has no bound. Then, for each kind:

check
    ``stations``, ``sections``, ``breakers``, ``sources``, ``locations`` (counts); ``policies``, for each its
    ``components``, ``blocks`` and ``questions``; ``dc_domains``: for each policy and label its ``stations`` and how
    many ``outputs`` hang on it; ``runs`` (names); ``coverage_gaps`` (sections in no protected zone).
show
    ``run`` (null for ``--fault``), ``policy``, ``dispatch`` (null: all sources in service), ``out_of_service``,
    ``event``, ``failures``, ``limit_ms``; ``outcome`` with ``status``, ``t_clear_ms``,
    ``at_horizon`` and ``openings`` (``breaker``, ``t_trip_ms``, ``t_open_ms``, ``role``, ``via``, ``interrupted``);
    ``expect``; ``rows`` of the sequence, as in the CSV.
study
    ``complete`` (false if interrupted), ``epsilon``, ``policies``: for each its ``measures``
    (``low``, ``high``), ``locations`` (rows as in the CSV, with ``breakers`` and ``excess``:
    the distribution as ``count``, ``low``, ``high``; and ``points``: single points of failure) and
    ``no_fault`` (rows) if asked for; ``comparison`` (rows) if there are several.
inject
    ``policy``, ``event``, ``order``, ``rows`` as in the CSV.
decide
    ``unit`` of money; ``locations`` with their ``faults_per_yr``, ``left_out_per_yr``; ``variants`` (rows as in the
    CSV), ``costs`` a year by policy and kind, ``frontier``, ``next_best``, ``tornado``, ``uncertainty`` (rows),
    ``order`` of the additions made, ``not_possible`` ones and why.
register
    ``policy``, ``complete``, ``locations`` (count); ``entries``: for each failure or pair its ``group``, whether it is
    ``exempt`` and ``why``, the worst over its locations, and ``where`` (rows); ``anyway``: locations spoiled
    with no failure at all.
outages
    ``policy``, ``complete``, ``locations`` (count); ``outages`` (rows as in the CSV); ``critical``: locations
    spoiled by an outage alone (``failure`` empty) or by one failure more; ``uncleared_per_yr``,
    ``late_or_uncleared_per_yr`` and both ``added_…`` (``low``, ``high``; null without hours).
intervals
    ``policy``, ``class`` (``kind``, ``pattern``, ``components``); ``rows`` as in the CSV; ``best_yr``; ``single_yr``:
    by mode the interval best for one item by itself.
misoperations
    ``policy``; ``per_yr`` by category (``low``, ``high``; null without frequencies); ``rows`` as in the CSV.
report
    ``policy``, ``complete``, ``locations`` (count); ``output`` (the file written), ``bytes``; ``measures`` (rows).
audit
    ``policy``; ``elements``, for each its ``sets``, ``fully_duplicated`` and ``shared_kinds``; ``shared`` (rows as in
    the CSV); ``trip_matrix``: one row for each way; ``differences`` and the marks ``compared`` (null without a table).
settings
    ``policy``; ``elements`` (count); ``rows`` as in the CSV: one value each, with its ``reason`` (impedances in words).
elements
    ``policy``, ``faults`` and ``states`` of the sources (counts); ``rows`` as in the CSV, quantity ÷ setting at its
    ``least`` of what an element is meant to see and its ``greatest`` of what it is not; ``blind`` and
    ``over_reaching``: names.

timer
    ``policy``, ``per_yr`` (whether risks are per year), ``weights``; ``timers`` (rows as in the CSV); ``curves``:
    for each timer asked for by name its rows against the setting.
dial
    ``policy``, ``dial``, ``positions``; ``figures`` (rows as in the CSV).
importance
    ``policy``, ``event``, ``complete``, ``locations`` (count), ``p_event`` (``low``, ``high``), ``faults_per_yr``;
    ``components`` (rows as in the CSV); ``others`` (count) in no explored sequence, and ``others_at_most``: the
    Birnbaum importance that any of these can have.

campaign
    ``action`` (run, show, replay). Of run and show: ``complete``, ``trials`` counted and ``wanted``, ``confidence`` and
    kind of
    ``interval``, ``rows`` (one for each place: ``…_estimate``, and ``_low`` and ``_high`` of an interval, no bracket);
    with ``--location`` its ``endings``. Of replay: ``trial``, ``variant``, ``event``, ``failures``, ``counted``
    (whether the trial is in the store), then as in show.

CSV
---
With ``--csv FILE`` the table of the command is written, whole or not at all: the rows of the
sequence (show), one row for each policy and location (study), one for each combination of
failures (inject), one for each measure and variant (decide), one for each single point or
pair and location (register), each item out (outages), each item shared (audit), each value (settings),
each element (elements), each timer (timer), each group and position (dial), each component (importance), one for each
policy (check), each place (campaign run and show). The first row names the columns, as in the JSON.
"""

from schemesim.cli.parser import main

__all__ = ["main"]
