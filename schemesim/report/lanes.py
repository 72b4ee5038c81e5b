"""What a picture of a clearing sequence holds, before anything is drawn: lanes, bars, marks, links.

One lane for each component that took part, those of one station together, first those
on the way to an opening or a failure, in the order in which they began; a bar for each
state that lasts, a mark for each failure, and a link from cause to effect along the
way to the openings.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Iterator, Set
from dataclasses import dataclass, field
from enum import StrEnum

from schemesim.engine.case import Case
from schemesim.engine.outcome import Row, Status
from schemesim.engine.program import Kind
from schemesim.report.selection import is_channel, only_holds, output_of
from schemesim.report.sequence import ClearingSequence, plain
from schemesim.scheme.model import Breaker, ComponentKind, Gate, Sense
from schemesim.ticks import to_ms


class Look(StrEnum):
    """What a bar stands for."""

    FAULT = "fault fed"
    MEASURING = "element measuring"
    PICKED_UP = "element picked up"
    RUNNING = "timer running"
    UNDER_WAY = "signal under way on a channel"
    ON = "output on"
    SEALED_IN = "sealed in, or lockout operated"
    OPENING = "coil energised, until interrupted"
    CLOSING = "closing"
    CLOSED = "52a closed"


@dataclass(frozen=True, slots=True)
class Bar:
    """A state that lasts; ``note`` is written behind it. ``open_ended``: it outlasts the picture."""

    look: Look
    start_us: int
    end_us: int
    note: str = ""
    open_ended: bool = False


@dataclass(frozen=True, slots=True)
class Mark:
    """A failure, at its moment; ``prevented``: an output that would operate then, but for a failure."""

    t_us: int
    text: str
    prevented: bool = False


@dataclass
class Lane:
    """Everything about one component."""

    subject: str
    station: str
    began: tuple[int, int]
    bars: list[Bar] = field(default_factory=list)
    marks: list[Mark] = field(default_factory=list)

    @property
    def label(self) -> str:
        """Its name without the station it stands under."""
        name = self.subject
        for joint in ("/", "."):
            name = name.removeprefix(self.station + joint) if self.station else name
        return name


@dataclass(frozen=True, slots=True)
class Link:
    """From the lane of a cause to the lane of its effect; ``contact``: the cause is a breaker's 52a contact."""

    cause: str
    t_cause_us: int
    effect: str
    t_effect_us: int
    contact: bool = False


@dataclass(frozen=True)
class Drawing:
    """A whole picture: lanes by station, links between them, and the last moment shown."""

    fault: Lane
    stations: tuple[tuple[str, tuple[Lane, ...]], ...]
    links: tuple[Link, ...]
    end_us: int

    @property
    def lanes(self) -> tuple[Lane, ...]:
        """Every lane, the fault's first."""
        return (self.fault, *(lane for _, lanes in self.stations for lane in lanes))

    @property
    def way(self) -> frozenset[str]:
        """Components that failed, or are on the way to an opening or a failure."""
        failed = {lane.subject for lane in self.lanes if lane.marks}
        return frozenset(failed.union(*({link.cause, link.effect} for link in self.links)))

    def short(self) -> Drawing:
        """Only what failed, and what is on the way to an opening or a failure."""
        way = self.way
        kept = ((s, tuple(x for x in lanes if x.subject in way)) for s, lanes in self.stations)
        return Drawing(self.fault, tuple((s, lanes) for s, lanes in kept if lanes), self.links, self.end_us)


def drawing(t: ClearingSequence, also: Set[str] = frozenset()) -> Drawing:
    """What the picture of a timeline holds; ``also``: components with a lane whatever they did."""
    log = t.run.log
    subjects = {_subject(t, log[i]) for i in t.story if log[i].kind not in ("gate", "run", "fault")}
    subjects |= {_subject(t, log[i]) for i in t.kept if log[i].kind == "timer" or log[i].what == "prevented"}
    end = max((log[i].t_us for i in t.kept if log[i].kind != "run"), default=0)
    end = max(end, t.limit_us or 0, 1000)
    subjects = {name for name in subjects if not only_holds(t.case, name)} | also
    rows: dict[str, list[Row]] = {name: [] for name in subjects}
    for row in log:
        name = _subject(t, row)
        if name in rows and not (row.kind == "question" and row.what == "no"):
            rows[name].append(row)
    lanes = [_lane(t, name, found) for name, found in rows.items() if found]
    links = tuple(_links(t, subjects))
    on_way = {name for link in links for name in (link.cause, link.effect)}
    by_station: dict[str, list[Lane]] = {}
    for lane in sorted(lanes, key=lambda lane: (lane.subject not in on_way, lane.began)):
        by_station.setdefault(lane.station, []).append(lane)
    stations = tuple((name, tuple(found)) for name, found in by_station.items())
    return Drawing(_fault(t), stations, links, end)


def _subject(t: ClearingSequence, row: Row) -> str:
    """The lane of a row: a failure's is the component's, and the time a lockout takes is the lockout's."""
    if row.kind == "question":
        return t.case.questions[t.question_at[row.index]].component or row.subject
    if row.what == "prevented":
        whole = output_of(row.subject)
        return whole if whole in t.case.index else row.subject
    return _latch_of(t.case, row.subject) if row.kind == "timer" else row.subject


def _latch_of(case: Case, name: str) -> str:
    """The latch that a timer sets and nothing else reads (but for a gate of their own), or the timer itself."""
    i = case.index[name]
    while True:
        readers = case.consumers[i]
        if len(readers) != 1 or case.inputs[readers[0]][0] != (i, False):
            return name
        i = readers[0]
        if case.kind[i] is Kind.LATCH:
            return case.names[i]
        if case.kind[i] is not Kind.GATE or case.contacts[i] is not None or len(case.inputs[i]) != 1:
            return name


def _fault(t: ClearingSequence) -> Lane:
    log = t.run.log
    lane = Lane(log[0].subject, "", (0, 0))
    if t.run.outcome.status in (Status.NO_FAULT, Status.NOT_FED):
        return lane
    start: int | None = 0
    for row in log:
        if row.kind == "fault" and row.what == "cleared" and start is not None:
            lane.bars.append(Bar(Look.FAULT, start, row.t_us))
            start = None
        elif row.kind == "fault" and row.what == "fed again":
            start = row.t_us
    if start is not None:
        lane.bars.append(Bar(Look.FAULT, start, log[-1].t_us, str(t.run.outcome.status), open_ended=True))
    return lane


def _lane(t: ClearingSequence, name: str, rows: list[Row]) -> Lane:
    first = min(rows, key=lambda r: (t.since_us(r), r.index))
    lane = Lane(name, _station(t.case, name), (t.since_us(first), first.index))
    if isinstance(t.case.program.scheme.block.get(name), Breaker):
        _draw_breaker(lane, rows, t.run.log[-1].t_us)
    else:
        _draw_signal(lane, t, rows, t.run.log[-1].t_us)
    for r in rows:
        if r.kind == "question":
            question = t.case.questions[t.question_at[r.index]]
            words = question.mode.replace("_", " ") if question.component else "common cause"
            lane.marks.append(Mark(r.t_us, words) if t.fails_at_once(r) else Mark(0, f"{words}, before the fault"))
        elif r.what == "prevented":
            if not any(m.text == t.says(r) for m in lane.marks):
                lane.marks.append(Mark(r.t_us, t.says(r), prevented=True))
        elif r.kind == "breaker" and r.what in _FAILS and not lane.marks:
            lane.marks.append(Mark(r.t_us, _FAILS[r.what]))  # certain, so it was not asked
    return lane


_FAILS = {"does not open": "does not open", "opens but does not interrupt": "does not interrupt"}


_CHANGES = frozenset(
    {"picks up", "drops out", "operates", "resets", "seals in", "is reset", "stopped before operating"}
)
_BEGINS = {"operates": Look.ON, "picks up": Look.PICKED_UP, "seals in": Look.SEALED_IN}


def _draw_signal(lane: Lane, t: ClearingSequence, rows: list[Row], end: int) -> None:
    """An element, a timer, a latch or a trip output: what it is about, then its output."""
    waiting = Look.RUNNING
    if isinstance(t.case.program.scheme.block.get(lane.subject), Sense):
        waiting = Look.MEASURING
    elif is_channel(t.case, lane.subject):
        waiting = Look.UNDER_WAY
    now: tuple[Look, int] | None = None
    for r in rows:
        own = r.subject == lane.subject  # not the timer that sets a latch: the lane tells of that until it has run
        if now is not None and r.what in _CHANGES and (own or now[0] is waiting):
            note = "" if r.margin_us is None else f"{plain(to_ms(r.margin_us))} ms left"
            lane.bars.append(Bar(*now, r.t_us, note))
            now = None
        look = waiting if r.what == "starts" else _BEGINS.get(r.what)
        if look is waiting or (look is not None and own):
            now = look, t.since_us(r)
    if now is not None:
        lane.bars.append(Bar(*now, end, open_ended=True))


def _draw_breaker(lane: Lane, rows: list[Row], end: int) -> None:
    """A breaker: its 52a contact, and the time from the coil to the interruption."""
    closed: int | None = 0
    moving: tuple[Look, int] | None = None
    for r in rows:
        if r.what == "52a open" and closed is not None:
            lane.bars.append(Bar(Look.CLOSED, closed, r.t_us))
            closed = None
        elif r.what == "52a closed":
            closed = r.t_us
        elif r.what in ("committed to open", "closing"):
            moving = Look.OPENING if r.what == "committed to open" else Look.CLOSING, r.t_us
        elif r.what in ("opens", "opens but does not interrupt", "closes") and moving is not None:
            lane.bars.append(Bar(*moving, r.t_us))
            moving = None
    if moving is not None:
        lane.bars.append(Bar(*moving, end, open_ended=True))
    if closed is not None:
        lane.bars.append(Bar(Look.CLOSED, closed, end, open_ended=True))


def _links(t: ClearingSequence, subjects: set[str]) -> Iterator[Link]:
    """Links on the way to openings, breakers that do not open, and failures; each pair of lanes and times once."""
    log = t.run.log
    way: set[int] = set()
    beforehand = {r.index for r in log if r.kind == "question" and r.what == "yes" and not t.fails_at_once(r)}
    for row in log:
        fails = row.kind == "question" and row.index not in beforehand
        if row.index in t.story and (fails or (row.kind == "breaker" and row.what != "52a open")):
            at: Row | None = row
            while at is not None and at.index not in way:
                way.add(at.index)
                at = t.cause_of(at, all=True)
    seen: set[Link] = set()
    for i in sorted(way):
        effect = log[i]
        name = _subject(t, effect)
        if name not in subjects or i in beforehand:
            continue
        cause = t.cause_of(effect, all=True)
        while cause is not None and cause.kind != "fault" and _subject(t, cause) not in subjects:
            cause = t.cause_of(cause, all=True)
        if cause is None:
            continue
        source = _subject(t, cause)
        link = Link(source, t.since_us(cause), name, t.since_us(effect), cause.what.startswith("52a"))
        if source != name and link not in seen:
            seen.add(link)
            yield link


def _station(case: Case, name: str) -> str:
    """Where a component stands: by the plant, its failure data, or the nearest output it leads to."""
    plant, scheme = case.program.plant, case.program.scheme
    if name in plant.device:
        return plant.device[name].station
    if name in plant.source:
        return plant.source[name].station
    if name in scheme.component and name not in scheme.block:
        return scheme.component[name].station
    if name not in case.index:
        return ""
    start = case.index[name]
    queue, seen = deque([start]), {start}
    while queue:
        i = queue.popleft()
        block = scheme.block[case.names[i]]
        if isinstance(block, Gate):
            if block.contact is not None and block.contact.station:
                return block.contact.station
            hosts = (scheme.component[a.component] for a in block.unless)
            here = sorted({c.station for c in hosts if c.kind in _HOSTS and c.station})
            if len(here) == 1:
                return here[0]
        for c in case.consumers[i]:
            if c not in seen:
                seen.add(c)
                queue.append(c)
    return ""


_HOSTS = (ComponentKind.RELAY, ComponentKind.DC, ComponentKind.LOCKOUT, ComponentKind.COIL)
