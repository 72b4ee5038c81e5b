"""Loading and saving of scenarios."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path as FilePath

from pydantic import ValidationError

from schemesim.errors import InputError, Problem
from schemesim.scenario.convert import parts_of, scenario_of
from schemesim.scenario.document import document_of
from schemesim.scenario.dressed import check_dressed, schemes_of
from schemesim.scenario.imports import import_tables
from schemesim.scenario.locate import Data, Place, Tree
from schemesim.scenario.model import Scenario
from schemesim.scenario.names import check_names
from schemesim.scenario.notes import Notes
from schemesim.scenario.problems import problems_of
from schemesim.scenario.reading import MAX_PROBLEMS, read_text, read_tree
from schemesim.scenario.schema import ScenarioIn
from schemesim.scenario.writing import write_file, write_text


def load_scenario(path: FilePath | str) -> Scenario:
    """The scenario of a YAML file, checked through and through.

    Parameters
    ----------
    path : path or str
        The file; what it imports stands in its folder or below.

    Returns
    -------
    Scenario

    Raises
    ------
    InputError
        With every mistake that can be told, each with file, line, path and what was
        expected: of the text, of the schema, of names, of the plant, and of every policy
        once the plant is dressed by it.
    """
    return _scenario(read_tree(path), FilePath(path).parent)


def scenario_from_text(text: str, file: str = "scenario", folder: FilePath | str | None = None) -> Scenario:
    """The scenario of YAML text.

    Parameters
    ----------
    text : str
    file : str
        Name used in messages.
    folder : path, str or None
        Where files it imports stand; None: it may import none.

    Raises
    ------
    InputError
        As :func:`load_scenario`.

    Examples
    --------
    >>> scenario = scenario_from_text('''
    ... schemesim: 1
    ... plant:
    ...   stations: [{name: Alder, layout: single_bus, bays: [G1, F1]}]
    ...   generators: [{name: G1, station: Alder}]
    ...   feeders: [{name: F1, station: Alder, load_mw: 20}]
    ... policy: single_set
    ... ''')
    >>> scenario.plant.breakers
    ('Alder.F1.CB', 'Alder.G1.CB')
    """
    return _scenario(read_text(text, file), None if folder is None else FilePath(folder))


def scenario_text(scenario: Scenario) -> str:
    """A scenario as YAML text that reads back as an equal one.

    The words of the file it was read from are kept (not its comments), what it imported is
    written out. A scenario that was changed since, or never was a file, is written in
    full, the plant as lists.

    Raises
    ------
    InputError
        For what a file cannot say, such as a probability as a fraction, and for policies that do not fit the
        plant or its exceptions, with which it could not be read again.
    """
    return write_text(_document(scenario))


def save_scenario(scenario: Scenario, path: FilePath | str) -> None:
    """Save a scenario, whole or not at all; see :func:`scenario_text`.

    Raises
    ------
    InputError
        For what a file cannot say, or a place that cannot be written.
    """
    write_file(path, _document(scenario))


def _document(scenario: Scenario) -> Data:
    if scenario.document is not None:
        notes, read = _read(Tree(scenario.document, "scenario", {(): Place(1, 1)}), None)
        if read == scenario and not notes.problems:
            return scenario.document
    _, wrong = schemes_of(scenario)
    if wrong:  # what could not be loaded again is not written
        raise InputError(list(wrong))
    return document_of(scenario)


def _scenario(tree: Tree, folder: FilePath | None) -> Scenario:
    notes, scenario = _read(tree, folder)
    if scenario is not None:
        check_dressed(notes, scenario)
    if notes.problems or scenario is None:
        raise InputError(_once(notes.problems))
    return scenario


def _read(tree: Tree, folder: FilePath | None) -> tuple[Notes, Scenario | None]:
    problems: list[Problem] = []
    if not isinstance(tree.data, dict):
        problems.append(tree.problem((), "file", tree.data, "a mapping with the key schemesim: 1"))
        raise InputError(problems)
    tree = import_tables(tree, folder, problems)
    names = check_names(tree, problems)
    said: ScenarioIn | None = None
    try:
        said = ScenarioIn.model_validate(tree.data)
    except ValidationError as error:
        problems.extend(problems_of(error, tree, ScenarioIn))
    notes = Notes(tree, names)
    notes.problems = problems
    if problems:
        _look_further(notes)
    if said is None or problems:
        return notes, None
    scenario = scenario_of(notes, said)
    return notes, None if scenario is None else replace(scenario, document=tree.data)


def _look_further(notes: Notes) -> None:
    """Note what else is wrong in the sections of a file that fit the schema, though others do not."""
    data = notes.tree.data
    bad = {_section(p.path) for p in notes.problems}
    if not isinstance(data, dict) or "schemesim" in bad or "" in bad:
        return
    good = {key: value for key, value in data.items() if key not in bad}
    try:
        said = ScenarioIn.model_validate({"plant": {}, **good})
    except ValidationError:
        return
    parts_of(notes, said, frozenset(bad | (set() if "plant" in good else {"plant"})))


def _section(path: str) -> str:
    return path.replace("[", ".").partition(".")[0]


def _once(problems: list[Problem]) -> list[Problem]:
    """Each mistake once, in the order of files and lines."""
    seen: dict[tuple[object, ...], Problem] = {}
    for p in problems:
        seen.setdefault((p.file, p.line, p.path, p.subject, p.expectation), p)
    found = sorted(seen.values(), key=lambda p: (p.file, p.line or 0))
    more = len(found) - MAX_PROBLEMS
    if more > 0:
        found[MAX_PROBLEMS:] = [Problem("file", f"{more} more mistakes", "none", file=found[-1].file)]
    return found
