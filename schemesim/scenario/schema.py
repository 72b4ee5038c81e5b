"""The schema of a scenario file (pydantic), version 1; ``scenarios/FORMAT.md`` describes it to the user.

Every key and the kind of its value. What a value means together with others (names that
refer to something, sums of probabilities, the plant as a whole) is checked afterwards.
"""
# ruff: noqa: RUF012 - pydantic copies the default of a field for each object

from __future__ import annotations

from enum import StrEnum
from typing import Annotated, Any

from pydantic import BeforeValidator, Field, PlainValidator

from schemesim.plant.bays import CORES, WINDINGS, CtPlacement
from schemesim.plant.model import DeviceKind, SectionKind
from schemesim.plant.net_case import FaultType
from schemesim.scenario.impedances import ImpedancesIn
from schemesim.scenario.maintenance import MaintenanceIn
from schemesim.scenario.money import MoneyIn
from schemesim.scenario.parts import Part, PolicyIn
from schemesim.scenario.rates import OverIn, RateIn
from schemesim.scenario.scalars import (
    Flag,
    Name,
    NotNegative,
    OverZero,
    Rate,
    Share,
    Station,
    Text,
    choice,
    no,
    number,
    take_limit_ms,
    take_text,
    whole,
)
from schemesim.scenario.sensed import SensingKind
from schemesim.scheme.unavailability import Over

VERSION = 1
"""Version of the file format, under the key ``schemesim``."""

MAX_ITEMS = 20_000
"""Most items of one list of the plant."""
MAX_BAYS = 200
MAX_LABELS = 20
MAX_RUNS = 1000
MAX_POLICIES = 100
MAX_POSITIONS = 99


class Layout(StrEnum):
    """Station layouts."""

    SINGLE_BUS = "single_bus"
    SECTIONALISED_BUS = "sectionalised_bus"
    DOUBLE_BUS = "double_bus"
    RING = "ring"
    BREAKER_AND_A_HALF = "breaker_and_a_half"


Labels = Annotated[list[Name], Field(max_length=MAX_LABELS)]
Ct = Annotated[Any, PlainValidator(choice(CtPlacement))]
Modes = dict[str, Share]
Limit = Annotated[float | None, PlainValidator(take_limit_ms)]


MANY = Field(max_length=MAX_ITEMS)
"""Bounds of a list that may be long."""


def _bay(value: object) -> object:
    return {"to": value} if isinstance(value, str) else value


def _fault(value: object) -> str:
    text = take_text(value)
    section, at, position = text.partition("@")
    if not section or section != section.strip():
        no(value, "a section, or a section and a position: L1@0.25")
    if at:
        try:
            good = 0.0 <= float(position) <= 1.0 and "_" not in position
        except ValueError:
            good = False
        if not good:
            no(value, "a position from 0 to 1 after the @: L1@0.25")
    return text


def _version(value: object) -> int:
    if type(value) is not int or value != VERSION:
        no(value, f"{VERSION}, the version of the file format that can be read")
    return VERSION


class BayIn(Part):
    """A bay; a text alone is the element it leads to. Its name is the element's by default."""

    to: Name
    name: Name = ""
    at: Share = 0.0
    ct: Ct = None
    breaker: Flag = True


class StationIn(Part):
    name: Name
    layout: Annotated[Layout, PlainValidator(choice(Layout))]
    bays: Annotated[list[Annotated[BayIn, BeforeValidator(_bay)]], Field(max_length=MAX_BAYS)]
    kv: NotNegative = 0.0
    ct: Ct = CtPlacement.BOTH
    cores: Labels = list(CORES)
    windings: Labels = list(WINDINGS)
    sections: Annotated[int, PlainValidator(whole(2, 50))] = 2
    selection: dict[str, Annotated[int, PlainValidator(whole(1, 50))]] = {}
    coupler_closed: Flag = True


class LineIn(Part):
    name: Name
    length: OverZero
    kv: NotNegative = 0.0
    load_mw: NotNegative = 0.0


class TransformerIn(Part):
    name: Name
    station: Station = ""
    kv: NotNegative = 0.0
    length: NotNegative = 0.0


class GeneratorIn(Part):
    name: Name
    station: Station = ""
    kv: NotNegative = 0.0
    trips: Flag = True
    impedance_pu: Annotated[float | None, PlainValidator(number(0))] = None


class FeederIn(Part):
    name: Name
    load_mw: NotNegative
    station: Station = ""
    kv: NotNegative = 0.0
    length: NotNegative = 0.0


class InfeedIn(Part):
    name: Name
    section: Name
    station: Station = ""
    feeds_own_zone: Flag = False
    impedance_pu: Annotated[float | None, PlainValidator(number(0))] = None


class SectionIn(Part):
    name: Name
    kind: Annotated[SectionKind, PlainValidator(choice(SectionKind))]
    station: Station = ""
    kv: NotNegative = 0.0
    length: NotNegative = 0.0
    load_mw: NotNegative = 0.0


class DeviceIn(Part):
    name: Name
    kind: Annotated[DeviceKind, PlainValidator(choice(DeviceKind))]
    a: Name
    b: Name
    a_at: Share = 0.0
    b_at: Share = 0.0
    station: Station = ""
    closed: Flag = True
    cores: Labels = []


class SourceIn(Part):
    name: Name
    section: Name
    station: Station = ""
    trips: Flag = False
    feeds_own_zone: Flag = True
    impedance_pu: Annotated[float | None, PlainValidator(number(0))] = None


class VtIn(Part):
    name: Name
    section: Name
    station: Station = ""
    windings: Labels = ["1"]


class DispatchIn(Part):
    name: Name
    out: Annotated[list[Name], MANY]


class PlantIn(Part):
    length_unit: Name = "km"
    stations: Annotated[list[StationIn], Field(max_length=5000)] = []
    lines: Annotated[list[LineIn], MANY] = []
    transformers: Annotated[list[TransformerIn], MANY] = []
    generators: Annotated[list[GeneratorIn], MANY] = []
    feeders: Annotated[list[FeederIn], MANY] = []
    infeeds: Annotated[list[InfeedIn], MANY] = []
    sections: Annotated[list[SectionIn], MANY] = []
    devices: Annotated[list[DeviceIn], MANY] = []
    sources: Annotated[list[SourceIn], MANY] = []
    voltage_transformers: Annotated[list[VtIn], MANY] = []
    dispatches: Annotated[list[DispatchIn], Field(max_length=100)] = []
    impedances: ImpedancesIn = ImpedancesIn()


TABLES: dict[str, type[Part]] = {
    "lines": LineIn,
    "transformers": TransformerIn,
    "generators": GeneratorIn,
    "feeders": FeederIn,
    "infeeds": InfeedIn,
    "sections": SectionIn,
    "devices": DeviceIn,
    "sources": SourceIn,
    "voltage_transformers": VtIn,
}
"""Lists of the plant that may also come from CSV files, with the schema of a row."""


class OverrideIn(Part):
    pattern: Name
    modes: Modes = {}
    no_fault_per_yr: Rate = 0.0


class CauseIn(Part):
    name: Name
    probability: Share
    members: dict[str, Name]


class FailureDataIn(Part):
    start_from_defaults: Flag = True
    modes: dict[str, Modes] = {}
    no_fault_per_yr: dict[str, Rate] = {}
    overrides: Annotated[list[OverrideIn], MANY] = []
    relay_beta: Share = 0.0
    common_causes: Annotated[list[CauseIn], MANY] = []
    rates: Annotated[list[RateIn], MANY] = []
    rates_over: OverIn = Over.MEAN


class FrequenciesIn(Part):
    per_length_per_yr: Rate = 0.0
    by_kind: dict[str, Rate] = {}
    elements: dict[str, Rate] = {}


class KvLimitIn(Part):
    kv: NotNegative
    limit_ms: Limit


class LimitsIn(Part):
    limit_ms: Limit = None
    by_kv: Annotated[list[KvLimitIn], Field(max_length=100)] = []
    backup_ms: Limit = None
    zone_2_ms: Limit = None


class StudyIn(Part):
    epsilon: Annotated[float, PlainValidator(number(1e-12, 0.5))] = 0.0
    horizon_ms: Limit = None
    positions: Annotated[list[Share], Field(min_length=1, max_length=MAX_POSITIONS)] = []
    dispatch: Name = ""
    seed: Annotated[int, PlainValidator(whole(0, 2**53))] = 0
    trials: Annotated[int, PlainValidator(whole(1, 100_000_000))] = 0
    restore_h: NotNegative = 0.0
    sensing: Annotated[SensingKind, PlainValidator(choice(SensingKind))] = SensingKind.LOGICAL
    fault: Annotated[FaultType, PlainValidator(choice(FaultType))] = FaultType.LLL
    fault_ohm: NotNegative = 0.0


class RunIn(Part):
    name: Name
    fault: Annotated[str, PlainValidator(_fault)] = ""
    no_fault: Name = ""
    failures: dict[str, Name] = {}
    common_causes: Annotated[list[Name], Field(max_length=100)] = []
    out_of_service: Annotated[list[Name], MANY] = []
    policy: Name = ""
    dispatch: Name = ""
    expect: Text = ""


class ScenarioIn(Part):
    """The whole file."""

    schemesim: Annotated[int, PlainValidator(_version)]
    plant: PlantIn
    name: Name = ""
    description: Text = ""
    frequency_hz: Annotated[float, PlainValidator(number(1, 1000))] = 0.0
    policies: Annotated[dict[str, PolicyIn], Field(max_length=MAX_POLICIES)] = {}  # type: ignore[valid-type]  # made from the dataclass
    policy: Name = ""
    exceptions: dict[str, Name] = {}
    failure_data: FailureDataIn = FailureDataIn()
    out_of_service: Annotated[list[Name], MANY] = []
    fault_frequencies: FrequenciesIn = FrequenciesIn()
    limits: LimitsIn = LimitsIn()
    study: StudyIn = StudyIn()
    runs: Annotated[list[RunIn], Field(max_length=MAX_RUNS)] = []
    money: MoneyIn = MoneyIn()
    maintenance: MaintenanceIn = MaintenanceIn()
