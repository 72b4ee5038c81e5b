"""One clearing sequence as a table: when, what, and the row that led to it.

A log holds far more rows than anybody reads. Kept by default are what a reader of the
sequence asks for: the fault, failures that happened, trip outputs, lockouts, breakers,
timers with the margin at which they were stopped, the elements behind all these, and
every row on the way to an opening or to the clearing.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from html import escape
from typing import TYPE_CHECKING, Any

from schemesim.engine.answers import Answers, DrawnAnswers, FixedAnswers, ForcedAnswers
from schemesim.engine.case import Case
from schemesim.engine.event import DEFAULT_HORIZON_US, run_event
from schemesim.engine.outcome import Run
from schemesim.engine.times import DelayTimes
from schemesim.errors import reject
from schemesim.report.selection import select
from schemesim.report.sequence import ClearingSequence, plain, shorten
from schemesim.study.injection import Injected
from schemesim.study.tree import Leaf
from schemesim.ticks import from_cycles, from_ms, looks_like_seconds, to_cycles, to_ms

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes

Source = Answers | Run | Leaf | Injected | Mapping[int, bool] | Iterable[str | int]
"""Whatever says how the questions of a run were answered."""

TEXT_WIDTH = 110
"""Columns of the plain text table."""


@dataclass(frozen=True, eq=False, repr=False)
class Timeline(ClearingSequence):
    """The clearing sequence of one run, as a table, as plain text and as a picture.

    See :class:`~schemesim.report.sequence.ClearingSequence` for its attributes.
    """

    def table(self, all: bool = False) -> pd.DataFrame:
        """The sequence, one line for each row, by the number of the row in the log.

        Parameters
        ----------
        all : bool
            Every row of the log, not only those that matter for reading.

        Returns
        -------
        pandas.DataFrame
            Columns ``t_ms``, ``t_cycles``, ``subject``, ``what``, ``cause_row`` (nullable
            whole number; none for what held before the event), ``cause``, ``margin_ms``
            (what was left of a timer that was stopped), ``kind``.
        """
        import pandas as pd  # heavy: only when a table is asked for

        rows = self.rows(all)
        causes = [self.cause_of(r, all) for r in rows]
        return pd.DataFrame(
            {
                "t_ms": [to_ms(r.t_us) for r in rows],
                "t_cycles": [to_cycles(r.t_us, self.frequency_hz) for r in rows],
                "subject": [r.subject for r in rows],
                "what": [self.says(r) for r in rows],
                "cause_row": pd.array([None if c is None else c.index for c in causes], dtype="Int64"),
                "cause": [self.because(r, all) for r in rows],
                "margin_ms": pd.array([None if r.margin_us is None else to_ms(r.margin_us) for r in rows], "Float64"),
                "kind": [r.kind for r in rows],
            },
            index=pd.Index([r.index for r in rows], name="row"),
        )

    def to_text(self, all: bool = False, width: int = TEXT_WIDTH) -> str:
        """The sequence in plain text, no line over ``width`` columns; long names lose their middle.

        Raises
        ------
        InputError
            If the width leaves no room for the columns.
        """
        if width < 80:
            raise reject("width of the text", width, "80 columns or more")
        rows = self.rows(all)
        digits = max((_digits(r.t_us) for r in rows), default=0)
        cells = [("row", "ms", "cycles", "component", "what", "cause")]
        for r in rows:
            c = self.cause_of(r, all)
            what = self.says(r) if r.margin_us is None else f"{_STOPPED[r.what]}, {plain(to_ms(r.margin_us))} ms left"
            cause = self.because(r, all) if c is None else f"{c.index} {self.because(r, all)}"
            cycles = f"{to_cycles(r.t_us, self.frequency_hz):.2f}"
            cells.append((str(r.index), f"{to_ms(r.t_us):.{digits}f}", cycles, r.subject, what, cause))
        fixed = [max(len(line[n]) for line in cells) for n in range(3)]
        said = min(max(len(line[4]) for line in cells), 30)
        rest = width - sum(fixed) - said - 10
        named = min(max(len(line[3]) for line in cells), rest * 11 // 20)
        lines = shorten(self.title, width), shorten(self.ending, width), ""
        body = (
            f"{a:>{fixed[0]}}  {b:>{fixed[1]}}  {c:>{fixed[2]}}  {shorten(d, named):{named}}  "
            f"{shorten(e, said):{said}}  {shorten(f, rest - named)}".rstrip()
            for a, b, c, d, e, f in cells
        )
        return "\n".join((*lines, *body))

    def plot(self, ax: Axes | None = None, *, short: bool = False) -> Axes:
        """The sequence as a picture; see :func:`schemesim.report.pictures.plot_timeline`."""
        from schemesim.report.pictures import plot_timeline  # heavy: only when a picture is asked for

        return plot_timeline(self, ax, short=short)

    def plot_one_line(self, stations: Iterable[str] | None = None, ax: Axes | None = None) -> Axes:
        """What happened, on the one-line diagram; see :func:`schemesim.report.one_line.plot_one_line`."""
        from schemesim.report.one_line import plot_one_line  # heavy: only when a picture is asked for

        return plot_one_line(self, stations=stations, ax=ax)

    def __repr__(self) -> str:
        return self.to_text()

    def _repr_html_(self) -> str:
        head = f"<p><b>{escape(self.title)}</b><br>{escape(self.ending)}</p>"
        table = self.table().drop(columns="kind").astype(object)
        return head + str(table.where(table.notna(), "").to_html(float_format=plain))


def timeline(
    case: Case,
    run: Run,
    *,
    frequency_hz: float = 50.0,
    limit_ms: float | None = None,
    times: DelayTimes | None = None,
) -> Timeline:
    """The clearing sequence of a run: what happened, when, and what led to it.

    Parameters
    ----------
    case : Case
    run : Run
        Any run of the case. One that kept no log is run again with the same answers.
    frequency_hz : float
        Power frequency, for times in cycles.
    limit_ms : float or None
        Clearing time not to be exceeded, in ms.
    times : DelayTimes or None
        The random delays of a run that kept no log.

    Returns
    -------
    Timeline

    Raises
    ------
    InputError
        For a frequency or limit that is none, and for a run without a log that does not
        come out the same again (it had other delays, another horizon or processes of its own).

    Examples
    --------
    >>> from schemesim.engine.case import bind
    >>> from schemesim.engine.program import compile_scheme
    >>> from schemesim.engine.sensing import LogicalSensing
    >>> from schemesim.plant.layouts import Bay, feeder, generator, single_bus
    >>> from schemesim.plant.model import Location, PlantBuilder
    >>> from schemesim.scheme.dress import dress
    >>> from schemesim.scheme.policy import Policy
    >>> b = PlantBuilder()
    >>> generator(b, "G1", station="Alder")
    >>> feeder(b, "F1", station="Alder", load_mw=10)
    >>> single_bus(b, "Alder", [Bay("G1", "G1"), Bay("F1", "F1")])
    >>> plant = b.build()
    >>> program = compile_scheme(plant, dress(plant, Policy()))
    >>> case = bind(program, Location("F1"), LogicalSensing())
    >>> found = timeline(case, replay(case, ()), limit_ms=150)
    >>> found.ending
    'cleared at 70 ms (3.50 cycles), 80 ms inside the limit of 150 ms'
    """
    from_cycles(1, frequency_hz)
    limit_us = None if limit_ms is None else from_ms(limit_ms, "limit of the clearing time")
    tip = "" if limit_ms is None else looks_like_seconds(limit_ms)
    if tip:
        raise reject("limit of the clearing time", limit_ms, "a time of 1 ms or more", tip=tip)
    if not run.log:
        again = replay(case, run, times)
        if (again.outcome, again.asked) != (run.outcome, run.asked):
            expected = "a run with its log, or the delays it had (replay it with them and with its horizon)"
            raise reject("run without a log", str(run.outcome.status), expected)
        run = again
    story, kept = select(case, run)
    return Timeline(case, run, frequency_hz, limit_us, kept, story)


def replay(
    case: Case, answers: Source, times: DelayTimes | None = None, *, horizon_us: int = DEFAULT_HORIZON_US
) -> Run:
    """Run a case again under known answers, and keep the log.

    Parameters
    ----------
    case : Case
    answers : Answers, Run, Leaf, Injected, mapping or iterable
        A source of answers; a run, a leaf of an event tree or an injected case, for its
        answers; a mapping from question index to answer (no elsewhere); or the questions
        answered yes, by name or index.
    times : DelayTimes or None
        Random delays; nominal ones by default.
    horizon_us : int

    Returns
    -------
    Run
        With its log.

    Raises
    ------
    InputError
        For a failure that is no question of the scheme.
    """
    source: Any = answers  # told apart by what it is, below
    if isinstance(source, (Run, Leaf)):
        source = ForcedAnswers(dict(source.asked))
    elif isinstance(source, Injected):
        source = ForcedAnswers(dict.fromkeys(source.questions, True))
    elif isinstance(source, Mapping):
        source = ForcedAnswers(source)
    elif not hasattr(source, "answer"):
        source = FixedAnswers(case.program, [source] if isinstance(source, str) else source)
    return run_event(case, source, times=times, log=True, horizon_us=horizon_us)


def replay_trial(case: Case, seed: int, trial: int, *, horizon_us: int = DEFAULT_HORIZON_US) -> Run:
    """One trial of a Monte Carlo study again, with its answers, its random delays and the log."""
    answers, times = DrawnAnswers(case.program, seed, trial), DelayTimes(seed, trial)
    return replay(case, answers, times, horizon_us=horizon_us)


_STOPPED = {"stopped before operating": "stopped", "held": "held"}


def _digits(t_us: int) -> int:
    return 0 if t_us % 1000 == 0 else 1 if t_us % 100 == 0 else 2 if t_us % 10 == 0 else 3
