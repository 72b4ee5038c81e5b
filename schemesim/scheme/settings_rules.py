"""Settings chosen by rule: reaches from line impedances, pick-ups between load and smallest fault.

Each value says why it is what it is. The rules are common practice put into figures, a
starting point to be overridden: no setting is to be applied from here without a study of the
network it is for.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace

from schemesim.errors import ErrorList
from schemesim.plant.model import Plant, Section
from schemesim.plant.net_data import LineImpedance, TransformerImpedance
from schemesim.plant.terminals import ProtectedObject, Terminal
from schemesim.scheme.conditions import Current, Direction, InZone, OutOfZone, Reach, Undervoltage
from schemesim.scheme.model import Scheme, Sense
from schemesim.scheme.phasor_distance import Distance, Shape, residual_compensation
from schemesim.scheme.phasor_elements import Biased, Either, Element, Overcurrent, Voltage
from schemesim.scheme.settings import Choice, Setting, Settings
from schemesim.scheme.settings_data import NetworkOf, PlantData


@dataclass(frozen=True, slots=True, kw_only=True)
class SettingRules:
    """Shares by which settings are chosen; all of them common practice, none of them published as such.

    Parameters
    ----------
    over_load : float
        A pick-up that must not see load, as a multiple of the greatest load.
    under_fault : float
        The same pick-up as a share of the smallest fault current, at most: that goes first.
    differential_of_load, slope : float
        Pick-up of a differential as a share of the greatest load, and its bias.
    detector_of_load : float
        Pick-up of a current detector (breaker failure) as a share of the greatest load.
    distance_least : float
        Current below which a distance element does not measure, as a share of the greatest load.
    smallest_reach : float
        Reach of an element that has to see no further than the bus behind it, as a share of the
        shortest line there.
    through : float
        Reach through a transformer as a multiple of its impedance.
    undervoltage : float
        Of the nominal voltage.
    shape : Shape
    resistance_of_reach : float
        Resistive reach of a quadrilateral as a multiple of the reach.
    drop_out : float
    """

    over_load: float = 1.3
    under_fault: float = 0.5
    differential_of_load: float = 0.3
    slope: float = 0.3
    detector_of_load: float = 0.2
    distance_least: float = 0.1
    smallest_reach: float = 0.1
    through: float = 1.1
    undervoltage: float = 0.7
    shape: Shape = Shape.MHO
    resistance_of_reach: float = 1.0
    drop_out: float = 0.95


def settings_for(
    plant: Plant,
    scheme: Scheme,
    *,
    rules: SettingRules | None = None,
    network: NetworkOf | None = None,
    max_load_a: Mapping[str, float] | None = None,
    dispatches: tuple[str | None, ...] | None = None,
) -> Settings:
    """Settings of every sense block of a scheme.

    Parameters
    ----------
    plant : Plant
        With impedances.
    scheme : Scheme
    rules : SettingRules or None
    network : NetworkOf or None
        Makes the network equations; those of :mod:`schemesim.plant.net_faults` by default.
    max_load_a : mapping of section name to amperes, or None
        Greatest load currents.
    dispatches : tuple of (str or None), or None
        States over which the smallest fault current is sought; by default all of the plant.

    Returns
    -------
    Settings
        Blocks that measure nothing (external, always true, trips without a fault) have none.

    Raises
    ------
    InputError
        If an element needs a VT, or the impedance of a line, that is not there.

    Examples
    --------
    >>> from schemesim.plant.layouts import Bay, feeder, generator, single_bus
    >>> from schemesim.plant.model import PlantBuilder
    >>> from schemesim.scheme.dress import dress
    >>> from schemesim.scheme.policy import Policy
    >>> b = PlantBuilder()
    >>> generator(b, "G1", station="Alder", kv=20.0, impedance_pu=0.2)
    >>> feeder(b, "F1", station="Alder", load_mw=10, kv=20.0)
    >>> single_bus(b, "Alder", [Bay("G1", "G1"), Bay("F1", "F1")], kv=20.0)
    >>> plant = b.build()
    >>> found = settings_for(plant, dress(plant, Policy())).of["Alder/F1/1 50"]
    >>> found.choices[0].reason
    '1.3 times the greatest load of F1: 10 MW = 289 A; 0.03 of the smallest fault current, 12500 A at F1'
    """
    if network is None:
        from schemesim.plant.net_faults import network_of  # heavy: scipy, only where currents are wanted

        network = network_of
    states = (None, *(d.name for d in plant.dispatches)) if dispatches is None else dispatches
    data = PlantData(plant, network, dict(max_load_a or {}), states)
    chooser = _Chooser(data, scheme, rules or SettingRules())
    items = [s for b in scheme.blocks if isinstance(b, Sense) and (s := chooser.setting(b)) is not None]
    chooser.errors.raise_if_any()
    return Settings(tuple(items))


@dataclass(frozen=True)
class _Chooser:
    data: PlantData
    scheme: Scheme
    rules: SettingRules
    errors: ErrorList = field(default_factory=ErrorList)

    def setting(self, block: Sense) -> Setting | None:
        """The setting of a block, or None where it measures nothing."""
        match block.condition:
            case Current(devices=devices):
                return self._detector(block.name, devices)
            case InZone(sections=sections, cts=cts):
                return self._zone(block.name, sections, cts)
            case OutOfZone(sections=sections, ct=ct):
                pick_up, why = self._differential_pick_up((self._terminal(ct),))
                element = self._overcurrent((self._terminal(ct),), pick_up)
                return Setting(block.name, element, never=sections, choices=(Choice("pick_up_a", pick_up, why),))
            case Reach() as reach:
                return self._reach(block.name, reach)
            case Undervoltage(section=section):
                return self._undervoltage(block.name, section)
            case _:
                return None

    def _terminal(self, name: str) -> Terminal:
        device = self.data.plant.device.get(name)
        return Terminal(name, device.b if device is not None else self.data.plant.source[name].section)

    def _overcurrent(self, terminals: tuple[Terminal, ...], pick_up_a: float) -> Overcurrent:
        return Overcurrent(terminals=terminals, pick_up_a=pick_up_a, drop_out=self.rules.drop_out)

    # --- current ----------------------------------------------------------------------------

    def _detector(self, block: str, devices: tuple[str, ...]) -> Setting:
        """A current detector is as sensitive as it may be: it need not tell a fault from load."""
        elements: list[Element] = []
        choices: list[Choice] = []
        for name in devices:
            load, whence = self.data.load_a(self._terminal(name))
            least = self.data.least_beside(name)
            pick_up = self.rules.detector_of_load * load
            why = f"{self.rules.detector_of_load:g} of the {whence}"
            if least is not None and pick_up > self.rules.under_fault * least[0]:
                pick_up = self.rules.under_fault * least[0]
                why = f"{self.rules.under_fault:g} of the smallest fault current, {least[0]:.0f} A at {least[1]}"
            elements.append(self._overcurrent((self._terminal(name),), pick_up))
            choices.append(Choice("pick_up_a", pick_up, why))
        element = elements[0] if len(elements) == 1 else Either(tuple(elements))
        return Setting(block, element, choices=tuple(choices))

    def _between(self, element: str, terminals: tuple[Terminal, ...]) -> tuple[float, str]:
        """A pick-up above the greatest load and below the smallest fault; the fault goes first."""
        r = self.rules
        loads = [self.data.load_a(t) for t in terminals]
        load, whence = max(loads)
        least = self.data.least_fault_of(element, [t.ct for t in terminals])
        pick_up, why = r.over_load * load, f"{r.over_load:g} times the {whence}"
        if least is not None:
            fault = f"{least[0]:.0f} A at {least[1]}"
            if pick_up > r.under_fault * least[0]:
                pick_up = r.under_fault * least[0]
                why = f"{r.under_fault:g} of the smallest fault current, {fault} ({r.over_load:g} times load is more)"
            else:
                why += f"; {pick_up / least[0]:.2f} of the smallest fault current, {fault}"
        return pick_up, why

    def _zone(self, block: str, sections: frozenset[str], cts: tuple[str, ...]) -> Setting:
        o = self.data.by_zone.get(sections)
        if " through " in block:
            whole = self._unbalanced(block, sections)
            if whole is not None:
                return whole
        if o is None:
            terminals = tuple(self._terminal(ct) for ct in cts)
            pick_up, why = self._differential_pick_up(terminals)
            elements = tuple(self._overcurrent((t,), pick_up) for t in terminals)
            element = elements[0] if len(elements) == 1 else Either(elements)
            return Setting(block, element, sections, choices=(Choice("pick_up_a", pick_up, why),))
        if len(cts) == 1 and " sees " in block:
            return self._differential(block, o, cts[0])
        mine = {t.ct: t for t in o.terminals}
        terminals = tuple(mine.get(ct) or self._terminal(ct) for ct in cts)
        pick_up, why = self._between(o.element, terminals)
        overcurrent = self._overcurrent(terminals, pick_up)
        return Setting(block, overcurrent, sections, choices=(Choice("pick_up_a", pick_up, why),))

    def _unbalanced(self, block: str, nearby: frozenset[str]) -> Setting | None:
        """A differential without the core of one CT, as the scheme asks of it for faults near by."""
        base, _, ct = block.partition(" through ")
        beside = self.scheme.block.get(f"{base} sees {ct}")
        if not isinstance(beside, Sense) or not isinstance(beside.condition, InZone):
            return None
        o = self.data.by_zone.get(beside.condition.sections)
        if o is None:
            return None
        setting = self._differential(block, o, "")
        return replace(setting, only=nearby, missing=frozenset({ct}))

    def _differential_pick_up(self, terminals: tuple[Terminal, ...]) -> tuple[float, str]:
        load, whence = max(self.data.load_a(t) for t in terminals)
        share = self.rules.differential_of_load
        return share * load, f"{share:g} of the {whence}"

    def _differential(self, block: str, o: ProtectedObject, ct: str) -> Setting:
        plant = self.data.plant
        inside = [Terminal(s.name, s.section) for s in plant.sources if s.section in o.zone]
        terminals = (*o.terminals, *inside)
        kvs = [self.data.kv_at(t) for t in terminals]
        across = len({kv for kv in kvs if kv}) > 1
        ratios = tuple(kv / kvs[0] if kv and kvs[0] else 1.0 for kv in kvs) if across else ()
        load, whence = self.data.load_a(terminals[0]) if across else max(self.data.load_a(t) for t in terminals)
        pick_up = self.rules.differential_of_load * load
        why = f"{self.rules.differential_of_load:g} of the {whence}"
        least = self.data.least_fault_of(o.element, [t.ct for t in o.terminals])
        if least is not None:
            why += f"; a single CT sees {least[0]:.0f} A at least, at {least[1]}"
        element = Biased(
            terminals=terminals, pick_up_a=pick_up, slope=self.rules.slope, drop_out=self.rules.drop_out,
            ratios=ratios, zero_sequence=not across, share_of=ct,
        )  # fmt: skip
        slope = Choice("slope", self.rules.slope, "common practice, for ratio errors and saturation")
        return Setting(block, element, choices=(Choice("pick_up_a", pick_up, why), slope))

    # --- distance and voltage ----------------------------------------------------------------

    def _reach(self, block: str, reach: Reach) -> Setting | None:
        data, plant = self.data, self.data.plant
        terminals = reach.terminals
        station, kv = data.station_of(terminals), data.kv_at(terminals[0])
        own = data.element_of(terminals)
        vt = data.vt_at(station, own, kv)
        if vt is None:
            self.errors.add(f"element {block!r} at {station!r}", "no voltage transformer", "a VT there")
            return None
        found = self._impedance(reach, own, station, kv)
        if found is None:
            self.errors.add(f"element {block!r}", f"no impedance of {own.name!r}", "an impedance of it")
            return None
        impedance, k0, why = found
        load, whence = data.load_a(terminals[0])
        least_a = self.rules.distance_least * load
        quadrilateral = self.rules.shape is Shape.QUADRILATERAL
        resistance = self.rules.resistance_of_reach * abs(impedance) if quadrilateral else 0.0
        element = Distance(
            terminals=terminals, vt=vt, reach_ohm=impedance, k0=k0, shape=self.rules.shape,
            resistance_ohm=resistance, direction=reach.direction, least_a=least_a, drop_out=self.rules.drop_out,
        )  # fmt: skip
        choices = [
            Choice("reach_ohm", impedance, why),
            Choice("least_a", least_a, f"{self.rules.distance_least:g} of the {whence}"),
        ]
        if isinstance(plant.section[own.name].impedance, LineImpedance):
            choices.append(Choice("k0", k0, f"(Z0 - Z1)/(3 Z1) of {own.name}"))
        missing = frozenset({vt}) if block.endswith(" on current") else frozenset[str]()
        return Setting(block, element, choices=tuple(choices), missing=missing)

    def _impedance(
        self, reach: Reach, own: Section, station: str, kv: float
    ) -> tuple[complex, complex, str] | None:
        """Impedance of a reach, its residual compensation, and the reason."""
        unit, z = self.data.plant.length_unit, own.impedance
        if isinstance(z, LineImpedance) and own.length > 0 and reach.reach > 0:
            share = reach.reach / own.length
            k0 = residual_compensation(z.z1, z.z0)
            return z.z1 * share, k0, f"{reach.reach:g} {unit}: {share:g} of {own.name}, {abs(z.z1):.3g} ohm"
        if isinstance(z, TransformerImpedance) and reach.reach > 0 and reach.direction is not Direction.REVERSE:
            through = z.z1[0] * kv**2 / z.mva * self.rules.through
            return through, 0j, f"{self.rules.through:g} of the impedance of {own.name} at {kv:g} kV, to see through it"
        share = self.rules.smallest_reach
        lines = self.data.lines_at(station, kv)
        known = [(abs(s.impedance.z1), s) for s in lines if isinstance(s.impedance, LineImpedance)]
        if known:
            size, line = min(known, key=lambda pair: (pair[0], pair[1].name))
            assert isinstance(line.impedance, LineImpedance)  # as chosen above
            k0 = residual_compensation(line.impedance.z1, line.impedance.z0)
            why = f"{share:g} of the shortest line at {station}, {line.name}, {size:.3g} ohm"
            return line.impedance.z1 * share, k0, f"{why}: to see the bus and no further"
        if kv > 0:
            return 1j * kv**2 / 1e4, 0j, f"0.01 pu of 100 MVA at {kv:g} kV: no line at {station}"
        return None

    def _undervoltage(self, block: str, section: str) -> Setting | None:
        plant = self.data.plant
        here = [v.name for v in plant.vts if v.section == section]
        kv = plant.section[section].kv
        if not here or not kv > 0:
            self.errors.add(f"element {block!r}", section, "a section with a VT and a nominal voltage")
            return None
        setting = self.rules.undervoltage * kv * 1e3
        why = f"{self.rules.undervoltage:g} of {kv:g} kV"
        element = Voltage(vt=here[0], setting_v=setting, drop_out=self.rules.drop_out)
        return Setting(block, element, choices=(Choice("setting_v", setting, why),))
