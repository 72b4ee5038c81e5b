"""The one-line diagram of a plant, a station or a neighbourhood, drawn from the graph.

With a run it shows what the protection made of a fault: where it is, its isolation zone,
the protected zones that hold it, which breakers opened and when, what failed, and what was
left without a source.
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import TYPE_CHECKING

from schemesim.engine.case import Case
from schemesim.engine.outcome import Run
from schemesim.errors import nearest, reject
from schemesim.plant.coverage import default_objects
from schemesim.plant.model import Location, Plant
from schemesim.plant.zones import isolation_zones
from schemesim.report.grid_layout import arrange, check_stations
from schemesim.report.one_line_state import State
from schemesim.report.sequence import ClearingSequence
from schemesim.report.station_parts import station_names
from schemesim.scheme.model import Breaker

if TYPE_CHECKING:
    from matplotlib.axes import Axes

LABELS = ("breakers", "all", "none")


def plot_one_line(
    what: Plant | Case | ClearingSequence,
    run: Run | None = None,
    *,
    fault: Location | str | None = None,
    stations: Iterable[str] | None = None,
    isolation: str | None = None,
    protected: Iterable[str] | None = None,
    labels: str = "breakers",
    ax: Axes | None = None,
) -> Axes:
    """Draw the one-line diagram.

    Parameters
    ----------
    what : Plant, Case or timeline
        A plant as it stands, the fault of a case, or what happened in a clearing sequence.
    run : Run or None
        Of the case, where a case is given.
    fault : Location or str or None
        Where a plant alone is given: the fault to mark.
    stations : iterable of str or None
        Stations drawn; all of them by default. See :func:`~schemesim.report.grid_layout.neighbourhood`.
    isolation : {"fault", "all", "none"} or None
        Isolation zones shaded: that of the fault, every one, or none. By default that of the
        fault, or every one where there is no fault.
    protected : iterable of str or None
        Elements whose protected zones are outlined; by default those that hold the fault.
    labels : {"breakers", "all", "none"}
        Devices that bear their names.
    ax : matplotlib Axes or None
        Where to draw. None makes a figure of a fitting size, apart from pyplot.

    Returns
    -------
    matplotlib Axes

    Raises
    ------
    InputError
        For a station, a section or an element that is not there.

    Examples
    --------
    ``plot_one_line(plant, stations=neighbourhood(plant, "Alder")).figure.savefig("alder.svg")``
    """
    from schemesim.report.one_line_drawing import draw  # heavy: only when a picture is asked for

    if labels not in LABELS:
        raise reject("labels", labels, f"one of {list(LABELS)}", tip=nearest(labels, LABELS))
    case: Case | None = None
    title = ""
    if isinstance(what, ClearingSequence):
        case, run, title = what.case, what.run, f"{what.title}\n{what.ending}"
    elif isinstance(what, Case):
        case = what
    plant = what if isinstance(what, Plant) else (what if isinstance(what, Case) else what.case).program.plant
    at = _fault(plant, case, fault)
    chosen = station_names(plant) if stations is None else tuple(dict.fromkeys(stations))
    check_stations(plant, chosen)
    state = State(
        fault=at,
        openings={} if run is None else {o.breaker: o for o in run.outcome.openings},
        intended=frozenset() if case is None else case.duty.intended,
        failed={} if case is None or run is None else _failed(case, run),
        dead=frozenset() if run is None else dead_sections(plant, _opened(run), case),
        isolation=_shaded(plant, at, isolation),
        protected=_outlined(plant, at, protected),
        title=title,
    )
    return draw(plant, arrange(plant, chosen), state, labels, ax)


def _fault(plant: Plant, case: Case | None, fault: Location | str | None) -> Location | None:
    at = case.event if case is not None and isinstance(case.event, Location) else fault
    if isinstance(at, str):
        section, _, position = at.partition("@")
        try:
            at = Location(section, float(position) if position else 0.5)
        except ValueError:
            raise reject("fault", fault, "a section, or section@position with a number from 0 to 1") from None
    if at is not None and at.section not in plant.section:
        raise reject("fault", at.section, "the name of a section", tip=nearest(at.section, plant.section))
    return at


def _opened(run: Run) -> frozenset[str]:
    return frozenset(o.breaker for o in run.outcome.openings if o.interrupted)


def dead_sections(plant: Plant, opened: frozenset[str], case: Case | None = None) -> frozenset[str]:
    """Sections with a source before and none behind closed devices once some breakers are open."""

    def alive(without: frozenset[str]) -> set[str]:
        dispatch = None if case is None else case.dispatch
        todo = [s.section for s in plant.sources_in(dispatch) if s.name not in without]
        seen = set(todo)
        while todo:
            here = todo.pop()
            for d in plant.at_section[here]:
                there = d.b if d.a == here else d.a
                if d.closed and d.name not in without and there not in seen:
                    seen.add(there)
                    todo.append(there)
        return seen

    return frozenset(alive(frozenset()) - alive(opened))


def _failed(case: Case, run: Run) -> dict[str, str]:
    """What failed at a device of the plant: its own component, a coil of it, a core."""
    plant, scheme = case.program.plant, case.program.scheme
    breakers = {b.component: n for n, b in scheme.block.items() if isinstance(b, Breaker)}
    found: dict[str, str] = {}
    for q, yes in run.asked:
        question = case.questions[q]
        if yes and question.component:
            name = breakers.get(question.component, question.component)
            device = name if name in plant.device else name.partition("/")[0]
            if device in plant.device:
                part = "" if device == name else f"{name.partition('/')[2]}: "
                found[device] = part + question.mode.replace("_", " ")
    return found


def _shaded(plant: Plant, fault: Location | None, isolation: str | None) -> dict[str, int]:
    """Sections in the isolation zones shaded, with a tint that no zone beside them has."""
    kinds = ("fault", "all", "none")
    which = isolation or ("all" if fault is None else "fault")
    if which not in kinds:
        raise reject("isolation", which, f"one of {list(kinds)}", tip=nearest(which, kinds))
    zones = isolation_zones(plant)
    if which == "none" or (which == "fault" and fault is None):
        return {}
    if which == "fault" and fault is not None:
        return dict.fromkeys(zones.members[zones.of[fault.section]], 0)
    tint: dict[str, int] = {}
    for zone, border in zones.border.items():
        beside = {tint.get(other) for b in border for other in zones.sides[b]}
        tint[zone] = next(n for n in range(len(border) + 1) if n not in beside)
    return {section: tint[zone] for section, zone in zones.of.items()}


def _outlined(plant: Plant, fault: Location | None, protected: Iterable[str] | None) -> dict[str, frozenset[str]]:
    objects = default_objects(plant)
    if protected is None:
        return {o.element: o.zone for o in objects if fault is not None and fault.section in o.zone}
    by_name = {o.element: o.zone for o in objects}
    found = {}
    for name in protected:
        if name not in by_name:
            holding = next((o for o in objects if name in o.zone and name in plant.section), None)
            if holding is None:
                raise reject("protected zone", name, "the name of an element", tip=nearest(name, by_name))
            found[holding.element] = holding.zone
        else:
            found[name] = by_name[name]
    return found
