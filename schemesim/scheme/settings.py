"""Settings of a scheme: for every sense block the element that measures it, each value with its reason.

A scheme says what a function is for (a differential of this zone, a reach of so many
kilometres); settings say with what amperes and ohms. The scheme stays the same for every
sensing. `settings_for` chooses values by rule from the plant (`schemesim.scheme.settings_rules`);
any of them may be changed.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, fields, is_dataclass, replace
from functools import cached_property
from typing import TYPE_CHECKING, Any

from schemesim.errors import ErrorList, nearest, reject
from schemesim.plant.model import Plant
from schemesim.scheme.model import Scheme, Sense
from schemesim.scheme.phasor_elements import Element
from schemesim.show.tables import to_html

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True, slots=True)
class Choice:
    """One value chosen, and why.

    Parameters
    ----------
    what : str
        Name of the field of the element, e.g. ``"pick_up_a"``.
    value : object
    reason : str
    """

    what: str
    value: object
    reason: str


@dataclass(frozen=True, slots=True)
class Setting:
    """The element of one sense block.

    Parameters
    ----------
    block : str
        Name of the sense block.
    element : Element
    only : frozenset of str or None
        Sections of faults for which it counts (None: all). Set where the scheme asks a question of
        faults near by only, such as an over-reach.
    never : frozenset of str
        Sections of faults for which it does not count.
    choices : tuple of Choice
    missing : frozenset of str
        CTs and VTs whose signal this block is without: what a function does on a failure of theirs is
        a block of its own in the scheme (rule R5).
    """

    block: str
    element: Element
    only: frozenset[str] | None = None
    never: frozenset[str] = frozenset()
    choices: tuple[Choice, ...] = ()
    missing: frozenset[str] = frozenset()

    def counts(self, section: str) -> bool:
        """Whether it counts for faults on a section."""
        return section not in self.never and (self.only is None or section in self.only)


@dataclass(frozen=True, eq=False, repr=False)
class Settings:
    """Settings of a scheme, in the order of their blocks.

    Raises
    ------
    InputError
        If a block has two.

    Examples
    --------
    >>> from schemesim.plant.terminals import Terminal
    >>> from schemesim.scheme.phasor_elements import Overcurrent
    >>> element = Overcurrent(terminals=(Terminal("CT", "L1"),), pick_up_a=600.0)
    >>> mine = Settings((Setting("51", element),)).changed("51", pick_up_a=800.0)
    >>> mine.of["51"].element.pick_up_a, mine.of["51"].choices[-1].reason
    (800.0, 'as given')
    """

    items: tuple[Setting, ...]

    def __post_init__(self) -> None:
        errors = ErrorList()
        names = [s.block for s in self.items]
        for name in sorted({n for n in names if names.count(n) > 1} if len(set(names)) < len(names) else ()):
            errors.add("settings", name, "one setting of each block")
        errors.raise_if_any()
        object.__setattr__(self, "items", tuple(sorted(self.items, key=lambda s: s.block)))

    def __repr__(self) -> str:
        return f"Settings({len(self.items)} elements)"

    @cached_property
    def of(self) -> Mapping[str, Setting]:
        """Settings by block."""
        return {s.block: s for s in self.items}

    @cached_property
    def cts(self) -> frozenset[str]:
        """Every CT (and source) that any element stands on."""
        return frozenset(ct for s in self.items for ct in s.element.looks_at[0])

    def changed(self, block: str, **values: Any) -> Settings:
        """The same with other values of one element.

        Parameters
        ----------
        block : str
        **values
            Fields of the element, or ``element`` for another one altogether.

        Raises
        ------
        InputError
            If there is no such block or field, or a value is out of its range.
        """
        old = self.of.get(block)
        if old is None:
            raise reject("settings", block, "a block with a setting", tip=nearest(block, self.of))
        element = values.pop("element", old.element)
        if not is_dataclass(element) or isinstance(element, type):
            raise reject(f"element of {block!r}", element, "an element")
        known = [f.name for f in fields(element)]
        for name in sorted(set(values) - set(known)):
            raise reject(f"setting of {block!r}", name, f"one of {known}", tip=nearest(name, known))
        new: Any = replace(element, **values) if values else element
        told = tuple(Choice(what, value, "as given") for what, value in values.items())
        kept = tuple(c for c in old.choices if c.what not in values)
        return self.updated([replace(old, element=new, choices=(*kept, *told))])

    def updated(self, items: Iterable[Setting]) -> Settings:
        """The same with settings added, or put in the place of those of their blocks."""
        return Settings(tuple({**self.of, **{s.block: s for s in items}}.values()))

    def check(self, plant: Plant, scheme: Scheme) -> None:
        """Every block, CT and VT named has to be there.

        Raises
        ------
        InputError
            With every one that is not.
        """
        errors = ErrorList()
        senses = [b.name for b in scheme.blocks if isinstance(b, Sense)]
        known_vts = {v.name for v in plant.vts}
        carries = {*plant.device, *plant.source}
        for name in sorted(set(self.of) - set(senses)):
            errors.add("settings", name, "the name of a sense block", tip=nearest(name, senses))
        for s in self.items:
            cts, vts = s.element.looks_at
            for name in sorted(s.missing - set(cts) - set(vts)):
                errors.add(f"missing signal of {s.block!r}", name, f"one of {sorted({*cts, *vts})}")
            for what, names, known in (("CT", cts, carries), ("VT", vts, known_vts)):
                for name in sorted(set(names) - known):
                    errors.add(f"{what} of {s.block!r}", name, f"a {what} of the plant", tip=nearest(name, known))
        errors.raise_if_any()

    def table(self) -> pd.DataFrame:
        """One row for each value chosen: block, element, what, value, reason."""
        import pandas as pd

        rows = [(s.block, type(s.element).__name__, c.what, c.value, c.reason) for s in self.items for c in s.choices]
        frame = pd.DataFrame(rows, columns=["block", "element", "what", "value", "reason"], dtype=object)
        return frame.astype(dict.fromkeys(["block", "element", "what", "reason"], str))  # a number stays no impedance

    def _repr_html_(self) -> str:
        return to_html(self.table())
