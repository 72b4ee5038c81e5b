"""Dress a whole plant with protection by policy, in one call.

For every bus, line, transformer, generator and feeder the CTs that bound it are found
from the plant, and the functions of its policy are composed on them. What trips what is
derived from the isolation zones and never declared.
"""

from __future__ import annotations

from collections.abc import Mapping

from schemesim.errors import reject
from schemesim.plant.coverage import default_objects
from schemesim.plant.model import Plant, SectionKind
from schemesim.scheme.backup import dress_breaker_failure, dress_end_faults, dress_local_backup
from schemesim.scheme.bays import check_exceptions, feed_coils, with_bays
from schemesim.scheme.build import SchemeBuilder
from schemesim.scheme.elements import Element, dress_line, dress_unit, element_of
from schemesim.scheme.failure_data import FailureData
from schemesim.scheme.model import Scheme
from schemesim.scheme.policy import Policy


def dress(
    plant: Plant,
    policy: Policy,
    data: FailureData | None = None,
    *,
    exceptions: Mapping[str, Policy] | None = None,
    out_of_service: frozenset[str] = frozenset(),
    breakers_say: bool = True,
) -> Scheme:
    """The scheme of a plant under a policy.

    Parameters
    ----------
    plant : Plant
    policy : Policy
        What every element gets.
    data : FailureData or None
        Failure data; orders of magnitude by default.
    exceptions : mapping of name to Policy, or None
        Another policy for an element (bus, line, transformer, generator, feeder); for a
        breaker: its breaker failure, its times and, where it differs from ``policy``, the DC
        domain of its coils; or for a bay ``station/element``: a unit, or one end of a line,
        with the breakers there. The ends of a line have to have the same sets, schemes,
        channels, votes, reaches and times of relays.
    out_of_service : frozenset of str
        Components out for work.
    breakers_say : bool
        Whether an exception for a breaker says which DC domain feeds its coils; else all
        policies that trip it have to agree.

    Returns
    -------
    Scheme

    Raises
    ------
    InputError
        With every mistake: a CT, core or winding that a function needs and that is not
        there, an exception for something that is not in the plant.

    Examples
    --------
    >>> from schemesim.plant.layouts import Bay, feeder, generator, single_bus
    >>> from schemesim.plant.model import PlantBuilder
    >>> b = PlantBuilder()
    >>> generator(b, "G1", station="Alder")
    >>> feeder(b, "F1", station="Alder", load_mw=10)
    >>> single_bus(b, "Alder", [Bay("G1", "G1"), Bay("F1", "F1")])
    >>> scheme = dress(b.build(), Policy())
    >>> scheme.contacts["Alder/F1/1 50 trip"].function
    '50'
    """
    if not isinstance(plant, Plant):
        raise reject("plant", plant, "a Plant, as PlantBuilder.build() makes it; the policy comes second")
    for name, item in {"policy": policy, **(exceptions or {})}.items():
        if not isinstance(item, Policy):
            raise reject(f"policy for {name!r}", item, "a Policy, such as duplicate_chain() makes")
    b = SchemeBuilder(plant, data, out_of_service)
    special = dict(exceptions or {})
    elements: list[Element] = []
    objects = default_objects(plant)
    for o in objects:
        element = element_of(b, o, special.get(o.element, policy))
        if element is not None:
            elements.append(element)
    check_exceptions(b, [o.element for o in objects], elements, special)
    elements = with_bays(b, elements, special)
    feeds = feed_coils(b, elements, special, policy, breakers_say=breakers_say)
    for e in elements:
        if e.kind is SectionKind.LINE:
            dress_line(b, e)
        else:
            dress_unit(b, e)
        dress_local_backup(b, e)
    b.breaker_times = {name: p.times.breaker for name, p in feeds.items()}
    of_target = feeds if breakers_say else {}
    dress_end_faults(b, elements, feeds, of_target)
    dress_breaker_failure(b, elements, feeds, of_target)
    return b.build()
