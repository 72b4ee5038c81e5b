"""Which rows of a log matter for reading, and what stood together behind a gate."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Set

from schemesim.engine.case import Case
from schemesim.engine.outcome import Row, Run
from schemesim.engine.program import Kind
from schemesim.scheme.model import ComponentKind, Gate, Latch, Timer

_SWITCHES = {
    "sense": {"picks up": True, "drops out": False},
    "timer": {"operates": True, "resets": False},
    "latch": {"seals in": True, "is reset": False},
    "gate": {"operates": True, "resets": False},
    "trip output": {"operates": True, "resets": False},
    "breaker": {"52a closed": True, "52a open": False},
}
_TELLING = {
    "fault": frozenset({"begins", "cleared", "fed again"}),
    "question": frozenset({"yes"}),
    "trip output": frozenset({"operates", "prevented"}),
    "gate": frozenset({"prevented"}),
    "latch": frozenset({"seals in"}),
    "timer": frozenset({"operates", "stopped before operating"}),
    "breaker": frozenset(
        {"committed to open", "opens", "opens but does not interrupt", "does not open", "closing", "closes"}
    ),
    "run": frozenset({"ends at the horizon with something pending"}),
}
_DECISIVE = ("fault", "question", "breaker", "run")
_PLAIN = ("sense", "timer", "latch", "trip output", *_DECISIVE)
_IN_BETWEEN = ("starts", "starts to reset")


def select(case: Case, run: Run) -> tuple[frozenset[int], tuple[int, ...]]:
    """Rows that tell the story, and rows kept for reading."""
    log, beside = run.log, support(case, run)
    happened = {q for q, yes in run.asked if yes}
    telling = [r for r in log if r.what in _TELLING.get(r.kind, ()) and not _is_aside(case, r, happened)]
    first = {output_of(r.subject): r.index for r in reversed(telling) if r.what == "prevented"}
    telling = [r for r in telling if r.what != "prevented" or first[output_of(r.subject)] == r.index]
    way = _ancestors(log, (r for r in telling if r.kind in _DECISIVE), beside)
    behind = _ancestors(log, (r for r in telling if r.kind != "timer"), beside)
    story = way | {i for i in behind if log[i].kind in _PLAIN and log[i].what not in _IN_BETWEEN}
    timers = {r.subject for r in telling if r.kind == "timer"}
    elements = {log[i].subject for i in story if log[i].kind == "sense"}
    later = {
        r.index
        for r in log
        if (r.subject in timers and r.what == "starts") or (r.subject in elements and r.what == "drops out")
    }
    kept = story | {r.index for r in telling} | later
    return frozenset(story), tuple(sorted(kept))


def output_of(gate: str) -> str:
    """The output that a gate leads to, where one part of it is in time and the other late.

    Examples
    --------
    >>> output_of("Elm/L1/1 21-2 trip: in time")
    'Elm/L1/1 21-2 trip'
    """
    for end in (": in time", ": late", " in time", " late"):
        gate = gate.removesuffix(end)
    return gate


def _is_aside(case: Case, row: Row, happened: Set[int]) -> bool:
    """What tells nothing by itself: a seal-in that resets again, a timer that only holds, or counts not."""
    block = case.program.scheme.block.get(row.subject)
    if isinstance(block, Latch):
        return block.reset is not None
    return isinstance(block, Timer) and (
        only_holds(case, row.subject) or is_channel(case, row.subject) or _is_idle(case, row.subject, happened)
    )


def only_holds(case: Case, name: str) -> bool:
    """Whether a timer passes its signal on at once, and only holds it when it falls."""
    block = case.program.scheme.block.get(name)
    return isinstance(block, Timer) and block.pick_up.is_fixed and block.pick_up.nominal_us == 0


def is_channel(case: Case, name: str) -> bool:
    """Whether a timer is the time a signal takes over a channel: what comes after it may fail with the channel."""
    components = case.program.scheme.component
    return isinstance(case.program.scheme.block.get(name), Timer) and any(
        components[a.component].kind is ComponentKind.CHANNEL
        for g in _gates_behind(case, name)
        for a in (*g.unless, *g.given)
    )


def _is_idle(case: Case, name: str, happened: Set[int]) -> bool:
    """Whether a timer would count only under a failure that has not happened."""
    gates = [case.index[g.name] for g in _gates_behind(case, name)]
    return bool(gates) and all(
        case.given[g] and not any(q in happened for a in case.given[g] for q in case.asks[a]) for g in gates
    )


def _gates_behind(case: Case, name: str) -> list[Gate]:
    """The gates that read a timer, directly or through further timers."""
    found: list[Gate] = []
    stack, seen = [case.index[name]], {case.index[name]}
    while stack:
        for c in case.consumers[stack.pop()]:
            block = case.program.scheme.block[case.names[c]]
            if isinstance(block, Gate):
                found.append(block)
            elif isinstance(block, Timer) and c not in seen:
                seen.add(c)
                stack.append(c)
    return found


def _ancestors(log: tuple[Row, ...], rows: Iterable[Row], beside: Mapping[int, tuple[int, ...]]) -> set[int]:
    """The rows themselves, and all that led to them."""
    seen: set[int] = set()
    stack = [r.index for r in rows]
    while stack:
        i = stack.pop()
        if i < 0 or i in seen:
            continue
        seen.add(i)
        stack.append(log[i].cause)
        stack.extend(beside.get(i, ()))
    return seen


def support(case: Case, run: Run) -> dict[int, tuple[int, ...]]:
    """For a gate that needs several things together, the rows of all that held when it operated.

    These are its inputs, and a failure that is required for it; the log names one of them only.
    """
    last: dict[int, tuple[int, bool]] = {}
    happened: dict[int, int] = {}
    asked = iter(run.asked)
    found: dict[int, tuple[int, ...]] = {}
    for row in run.log:
        if row.kind == "question":
            question, yes = next(asked)
            if yes:
                happened[question] = row.index
        state = _SWITCHES.get(row.kind, {}).get(row.what)
        block = case.index.get(row.subject)
        if state is None or block is None:
            continue
        if state and case.kind[block] is Kind.GATE and (case.k[block] > 1 or case.given[block]):
            held = [last[j][0] for j, inverted in case.inputs[block] if j in last and last[j][1] != inverted]
            required = [happened[q] for a in case.given[block] for q in case.asks[a] if q in happened]
            found[row.index] = (*held, *required)
        last[block] = row.index, state
    return found
