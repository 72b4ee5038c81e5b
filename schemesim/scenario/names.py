"""Names in a scenario file: each given once, and every reference to one that is there.

Works on the plain data, whatever else may be wrong with the file, so that a misspelt
name is reported together with every other mistake.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, field

from schemesim.errors import Problem, nearest
from schemesim.scenario.locate import Data, Path, Tree
from schemesim.scenario.problems import ITEM
from schemesim.scheme.policy import Policy, duplicate_chain, duplicate_relay, single_set

BUILT_IN: Mapping[str, Policy] = {
    "single_set": single_set(),
    "duplicate_relay": duplicate_relay(),
    "duplicate_chain": duplicate_chain(),
}
"""Policies that need no definition in the file."""

_SECTIONS = ("lines", "transformers", "generators", "feeders", "sections")
_NAMED = (*_SECTIONS, "infeeds", "sources", "devices", "voltage_transformers")


@dataclass
class Names:
    """Names a file defines, each with the path of the item that has it.

    ``stations`` make further names that begin with theirs; ``open_ended`` tells that some
    item has no readable name, so that a reference that leads nowhere proves nothing.
    """

    sections: dict[str, Path] = field(default_factory=dict)
    sources: dict[str, Path] = field(default_factory=dict)
    others: dict[str, Path] = field(default_factory=dict)
    stations: dict[str, Path] = field(default_factory=dict)
    bays: dict[str, Path] = field(default_factory=dict)
    policies: dict[str, Path] = field(default_factory=dict)
    dispatches: dict[str, Path] = field(default_factory=dict)
    causes: dict[str, Path] = field(default_factory=dict)
    open_ended: bool = False

    def of_plant(self) -> dict[str, Path]:
        """Every name of the plant given in so many words."""
        return {**self.stations, **self.others, **self.sources, **self.sections}

    def made(self, name: str) -> bool:
        """Whether a name may be one that a station makes."""
        return any(name.startswith(f"{station}.") for station in self.stations)

    def place(self, name: str) -> Path | None:
        """Where something stands, or what makes it."""
        for known in (self.of_plant(), self.policies, self.causes, self.dispatches):
            if name in known:
                return known[name]
        if name.endswith(".unit") and name[:-5] in self.sections:
            return self.sections[name[:-5]]
        makers = {**self.stations, **self.bays}
        best = max((m for m in makers if name.startswith(f"{m}.") or name == m), key=len, default=None)
        return None if best is None else makers[best]


def check_names(tree: Tree, problems: list[Problem]) -> Names:
    """Collect the names of a file; names given twice and references that lead nowhere are noted.

    Where ``problems`` came up already, lists may be missing from the tree.
    """
    missing = bool(problems)
    names = _collect(tree, problems)
    names.open_ended |= missing
    _Checker(tree, names, problems).check()
    return names


def items(tree: Tree, *path: str) -> Iterator[tuple[Path, dict[str, Data]]]:
    """Mappings in the list at a path, whatever is there."""
    found = at(tree.data, path)
    if isinstance(found, list):
        for i, item in enumerate(found):
            if isinstance(item, dict):
                yield (*path, i), item


def pairs(tree: Tree, *path: str | int) -> Iterator[tuple[Path, str, Data]]:
    """Keys and values of the mapping at a path, whatever is there."""
    found = at(tree.data, path)
    if isinstance(found, dict):
        for key, value in found.items():
            yield (*path, key), key, value


def at(data: Data, path: Iterable[str | int]) -> Data:
    """The value at a path, or None."""
    for part in path:
        if isinstance(data, dict) and isinstance(part, str):
            data = data.get(part)
        elif isinstance(data, list) and isinstance(part, int) and part < len(data):
            data = data[part]
        else:
            return None
    return data


def _collect(tree: Tree, problems: list[Problem]) -> Names:
    names = Names()
    plant: dict[str, Path] = {}

    def take(into: dict[str, Path], seen: dict[str, Path], path: Path, name: Data, what: str) -> None:
        if not isinstance(name, str):
            names.open_ended = True
            return
        if name in seen:
            line = tree.line((*seen[name], "name"))
            tip = f"first on line {line}" if line is not None else ""
            problems.append(
                tree.problem((*path, "name"), f"name of a {what}", name, "a name not used twice", tip=tip)
            )
        seen.setdefault(name, path)
        into.setdefault(name, path)

    for table in _NAMED:
        given = at(tree.data, ("plant", table))
        if given is not None and not (isinstance(given, list) and all(isinstance(x, dict) for x in given)):
            names.open_ended = True
        into = names.sections if table in _SECTIONS else names.others
        into = names.sources if table in ("infeeds", "sources") else into
        for path, item in items(tree, "plant", table):
            take(into, plant, path, item.get("name"), ITEM[table])
            name = item.get("name")
            if table == "generators" and isinstance(name, str):
                names.sources.setdefault(f"{name}.unit", path)
    for path, station in items(tree, "plant", "stations"):
        take(names.stations, names.stations, path, station.get("name"), "station")
        seen: dict[str, Path] = {}
        bays = station.get("bays")
        for i, bay in enumerate(bays if isinstance(bays, list) else []):
            here: Path = (*path, "bays", i)
            name = _bay_name(bay)
            if isinstance(name, str):
                if name in seen:
                    line = tree.line(seen[name])
                    tip = f"first on line {line}; give it a name of its own"
                    problems.append(tree.problem(here, "name of a bay", name, "a name not used twice", tip=tip))
                seen.setdefault(name, here)
                names.bays.setdefault(f"{station.get('name')}.{name}", here)
    for into, where in (
        (names.dispatches, ("plant", "dispatches")),
        (names.causes, ("failure_data", "common_causes")),
        ({}, ("runs",)),
    ):
        for path, item in items(tree, *where):
            take(into, into, path, item.get("name"), ITEM[where[-1]])
    for path, name, _ in pairs(tree, "policies"):
        names.policies[name] = path
        if name in BUILT_IN:
            problems.append(
                tree.problem(path, "policy", name, "a name other than those built in", of_key=True)
            )
    return names


def _bay_name(bay: Data) -> Data:
    return bay.get("name", bay.get("to")) if isinstance(bay, dict) else bay


class _Checker:
    """Follows every reference."""

    def __init__(self, tree: Tree, names: Names, problems: list[Problem]) -> None:
        self.tree, self.names, self.problems = tree, names, problems

    def check(self) -> None:
        """Note every reference that leads nowhere."""
        n, tree = self.names, self.tree
        sections, sources = n.sections, n.sources
        for path, item in items(tree, "plant", "devices"):
            for end in ("a", "b"):
                self._one((*path, end), item.get(end), sections, "the name of a section")
            a, b = item.get("a"), item.get("b")
            if isinstance(a, str) and a == b:
                self._note((*path, "b"), f"device {item.get('name')!r}", f"{a} to {b}", "two different sections")
        for table in ("infeeds", "sources", "voltage_transformers"):
            for path, item in items(tree, "plant", table):
                self._one((*path, "section"), item.get("section"), sections, "the name of a section")
        for path, station in items(tree, "plant", "stations"):
            self._station(path, station, sections)
        for path, _ in items(tree, "plant", "dispatches"):
            self._list((*path, "out"), sources, "the name of a source")
        self._policies()
        for path, key, _ in pairs(tree, "fault_frequencies", "elements"):
            self._one(path, key.partition("@")[0], sections, "the name of a section", of_key=True)
        self._dispatch(("study", "dispatch"))
        for path, run in items(tree, "runs"):
            fault = run.get("fault")
            if isinstance(fault, str) and "@" not in fault[:1]:
                self._one((*path, "fault"), fault.partition("@")[0], sections, "the name of a section")
            self._dispatch((*path, "dispatch"))
            self._policy((*path, "policy"), run.get("policy"))
            if isinstance(run.get("common_causes"), list):
                self._list((*path, "common_causes"), n.causes, "the name of a common cause", makes=True)

    def _station(self, path: Path, station: Mapping[str, Data], sections: Mapping[str, Path]) -> None:
        bays = station.get("bays")
        known: set[str] = set()
        for i, bay in enumerate(bays if isinstance(bays, list) else []):
            to, name = (bay.get("to"), _bay_name(bay)) if isinstance(bay, dict) else (bay, bay)
            here = (*path, "bays", i, "to") if isinstance(bay, dict) else (*path, "bays", i)
            self._one(here, to, sections, "the name of a section")
            if isinstance(name, str):
                known.add(name)
        for here, key, _ in pairs(self.tree, *path, "selection"):
            if key not in known:
                self._note(here, "selection", key, "the name of a bay", nearest(key, known), of_key=True)

    def _policies(self) -> None:
        for path, _, value in pairs(self.tree, "policies"):
            if isinstance(value, dict):
                self._policy((*path, "base"), value.get("base"))
        self._policy(("policy",), at(self.tree.data, ("policy",)))
        for path, key, value in pairs(self.tree, "exceptions"):
            known = {**self.names.sections, **self.names.others}
            if key.partition("/")[2] not in self.names.sections:  # a bay's station is checked later
                expected = "the name of an element, a breaker or a bay (station/element)"
                self._one(path, key, known, expected, of_key=True)
            self._policy(path, value)

    def _policy(self, path: Path, value: Data) -> None:
        known = [*self.names.policies, *BUILT_IN]
        if isinstance(value, str) and value not in known:
            self._note(path, str(path[-1]), value, f"the name of a policy: {', '.join(known)}", nearest(value, known))

    def _dispatch(self, path: Path) -> None:
        value = at(self.tree.data, path)
        known = self.names.dispatches
        if isinstance(value, str) and value not in known and not self.names.open_ended:
            expected = f"the name of a dispatch: {', '.join(known)}" if known else "no dispatch; the plant has none"
            self._note(path, "dispatch", value, expected, nearest(value, known))

    def _list(self, path: Path, known: Mapping[str, Path], expected: str, *, makes: bool = False) -> None:
        values = at(self.tree.data, path)
        for i, value in enumerate(values if isinstance(values, list) else []):
            if not (makes and isinstance(value, str) and value.endswith(" relays")):
                self._one((*path, i), value, known, expected)

    def _one(
        self, path: Path, value: Data, known: Mapping[str, Path], expected: str, *, of_key: bool = False
    ) -> None:
        n = self.names
        if not isinstance(value, str) or value in known or n.open_ended or n.made(value):
            return
        what = str(path[-2]) if of_key else ITEM.get(str(path[-1]), str(path[-1]))
        if isinstance(path[-1], int):
            what = next(str(p) for p in reversed(path) if isinstance(p, str))
        self._note(path, what, value, expected, nearest(value, known), of_key=of_key)

    def _note(
        self, path: Path, subject: str, value: object, expected: str, tip: str = "", *, of_key: bool = False
    ) -> None:
        self.problems.append(self.tree.problem(path, subject, value, expected, tip=tip, of_key=of_key))
