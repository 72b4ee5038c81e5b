"""The probabilities of a scheme's failures at a time of the test interval, and trees weighed anew by them."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace
from fnmatch import fnmatchcase
from fractions import Fraction

from schemesim.engine.program import Program, Question
from schemesim.errors import reject
from schemesim.scheme.failure_data import FailureData
from schemesim.scheme.model import Component, ComponentKind, FailureMode, Probability, Scheme
from schemesim.scheme.unavailability import RateData, RateRule, unavailability
from schemesim.study.brackets import round_up
from schemesim.study.odds import Odds, add
from schemesim.study.tree import Leaf, Tree


@dataclass(frozen=True, slots=True)
class Tested:
    """A component of the class, the rules of its modes, and its place among those that stand in for each other."""

    component: str
    rules: tuple[RateRule, ...]
    rank: int
    of: int

    @property
    def staggered(self) -> bool:
        """Whether it is tested by turns with the others of its group."""
        return any(r.staggered for r in self.rules)

    def age(self, phase: float, staggered: bool | None) -> float:
        """Share of the interval since its test, at a phase over 0, at most 1, of the interval."""
        turns = self.staggered if staggered is None else staggered
        if not turns:
            return phase
        share = (phase + self.rank / self.of) % 1
        return share if share > 1e-12 else 1.0


def class_of(scheme: Scheme, data: FailureData, kind: ComponentKind, pattern: str) -> tuple[Tested, ...]:
    """Components of a kind, and of a name pattern, with a mode that is given by a rate and is hidden until a test.

    Those whose names differ in the last word only (``Alder/L1/relay 1`` and ``relay 2``) stand in for each other.

    Raises
    ------
    InputError
        If there is none.
    """
    rules: dict[str, tuple[RateRule, ...]] = {}
    groups: dict[str, list[str]] = {}
    for c in scheme.components:
        if c.kind is kind and fnmatchcase(c.name, pattern) and c.name not in scheme.out_of_service:
            found = (data.rule_of(c.name, kind, mode) for mode, _ in c.modes)
            mine = tuple(r for r in found if r is not None and r.data.test_interval_yr is not None)
            if mine:
                rules[c.name] = mine
                groups.setdefault(c.name.rpartition(" ")[0] or c.name, []).append(c.name)
    if not rules:
        expected = f"a pattern that fits a {kind} whose failures are given by a rate and a test interval"
        raise reject("class of components", pattern, expected)
    return tuple(
        Tested(name, rules[name], rank, len(names))
        for _, names in sorted(groups.items())
        for rank, name in enumerate(sorted(names))
    )


def probability_at(data: RateData, interval_yr: float, age: float | None) -> float:
    """Probability of a mode at an age (a share of the interval), or its mean over the interval."""
    there = data.with_interval(interval_yr)
    parts = unavailability(there)
    return parts.mean if age is None else min(1.0, there.hidden_at(age * interval_yr) + parts.steady)


def at_time(
    scheme: Scheme,
    data: FailureData,
    tested: Iterable[Tested],
    interval_yr: float,
    phase: float | None,
    staggered: bool | None = None,
) -> Scheme:
    """The scheme with the class tested at an interval, at a phase of it (None: the mean over it).

    A common cause of a beta factor is as old as the member tested last, since it is found then; of each member
    the share that is not common keeps its own age.
    """
    of = {t.component: t for t in tested}

    def whole(c: Component, phase: float | None) -> dict[FailureMode, Probability]:
        found: dict[FailureMode, Probability] = dict(data.component(c.name, c.kind, c.station).modes)
        item = of.get(c.name)
        for r in item.rules if item else ():
            age = None if phase is None or item is None else item.age(phase, staggered)
            found[r.mode] = probability_at(r.data, interval_yr, age)
        return found

    modes = {c.name: whole(c, phase) for c in scheme.components}
    means = {c.name: whole(c, None) for c in scheme.components} if scheme.common_causes else {}
    given = {c.name for c in data.common_causes}
    causes = []
    for cause in scheme.common_causes:  # the others are the beta factor's, of the least of their members
        if cause.name not in given:
            shared = data.relay_beta * min(modes[a.component].get(a.mode, 0.0) for a in cause.members)
            cause = replace(cause, probability=shared)
            least = data.relay_beta * min(means[a.component].get(a.mode, 0.0) for a in cause.members)
            for a in cause.members if least else ():
                modes[a.component][a.mode] *= 1 - least / means[a.component][a.mode]
        causes.append(cause)
    components = tuple(replace(c, modes=tuple(sorted(modes[c.name].items()))) for c in scheme.components)
    return replace(scheme, components=components, common_causes=tuple(causes))


def questions_at(program: Program, scheme: Scheme) -> tuple[Question, ...]:
    """The questions of a program with the probabilities of a scheme that differs in nothing else."""
    causes = {c.name: c.probability for c in scheme.common_causes}
    out = []
    for q in program.questions:
        p = scheme.component[q.component].probability(FailureMode(q.mode)) if q.component else causes[q.mode]
        out.append(replace(q, probability=p))
    return tuple(out)


def weighed(tree: Tree, program: Program, questions: tuple[Question, ...]) -> Tree:
    """The same leaves with other probabilities: what they do not hold is the mass unexplored.

    Which outcome a leaf leads to does not depend on probabilities, so nothing is run again.
    """
    odds = Odds(replace(program, questions=questions), tree.given)
    leaves = []
    for leaf in tree.leaves:
        mass: Probability = odds.one
        known: dict[int, bool] = {}
        for q, answer in leaf.asked:
            if q not in tree.given:
                yes, no = odds.of(q, odds.refused(q, known))
                mass = mass * (yes if answer else no)
            known[q] = answer
        leaves.append(Leaf(leaf.asked, mass, leaf.end))
    groups: list[list[Probability]] = [[] for _ in tree.ends]
    for leaf in leaves:
        groups[leaf.end].append(leaf.probability)
    found = replace(tree, questions=questions, leaves=tuple(leaves), masses=tuple(add(g) for g in groups))
    left = max(Fraction(1) - Fraction(found.floor(add(leaf.probability for leaf in leaves))), Fraction(0))
    exact = not isinstance(odds.one, float)
    return replace(found, unexplored=left if exact else round_up(left))
