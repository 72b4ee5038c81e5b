"""A protection scheme logic simulator.

Which sets of protection, which back-up, which breaker-failure timer: ``schemesim``
plays every fault and every failure that matters on a plant, and tells the clearing
sequence, the odds with a certain bracket, and what a further duplicate would buy.

Results support and never replace a qualified engineer's review, local codes and the
equipment's own documentation.

Names are loaded when first used, so importing the package costs little.

Examples
--------
>>> import schemesim as ss
>>> b = ss.PlantBuilder()
>>> ss.generator(b, "G1", station="Alder")
>>> ss.feeder(b, "F1", station="Alder", load_mw=10)
>>> ss.single_bus(b, "Alder", [ss.Bay("G1", "G1"), ss.Bay("F1", "F1")])
>>> plant = b.build()
>>> program = ss.compile_scheme(plant, ss.dress(plant, ss.single_set()))
>>> case = ss.bind(program, ss.Location("F1"), ss.LogicalSensing())
>>> ss.run_event(case, ss.FixedAnswers(program)).outcome.t_clear_us
70000
"""

from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from schemesim.engine.answers import DrawnAnswers, FixedAnswers, ForcedAnswers
    from schemesim.engine.case import Case, bind
    from schemesim.engine.electrical import ElectricalSensing
    from schemesim.engine.event import run_event
    from schemesim.engine.outcome import Outcome, Run, Status
    from schemesim.engine.program import Program, compile_scheme
    from schemesim.engine.sensing import LogicalSensing, NoFault
    from schemesim.engine.times import DelayTimes
    from schemesim.errors import InputError, RunError, SchemesimError
    from schemesim.plant.coverage import coverage_audit
    from schemesim.plant.ct_positions import ct_frequencies, with_ct
    from schemesim.plant.layouts import (
        Bay,
        CtPlacement,
        breaker_and_a_half,
        double_bus,
        feeder,
        generator,
        infeed,
        line,
        ring,
        sectionalised_bus,
        single_bus,
        transformer,
    )
    from schemesim.plant.model import (
        Device,
        DeviceKind,
        Dispatch,
        Location,
        Plant,
        PlantBuilder,
        Section,
        SectionKind,
        Source,
        VoltageTransformer,
    )
    from schemesim.plant.net_case import FaultType, ShuntFault
    from schemesim.plant.net_data import Coupling, LineImpedance, SourceImpedance, TransformerImpedance
    from schemesim.plant.net_faults import network_of
    from schemesim.plant.net_import import plant_of_pandapower
    from schemesim.plant.net_tables import plant_of_tables
    from schemesim.plant.terminals import Terminal, protected_object
    from schemesim.plant.zones import duty, isolation_zones, merged_elements, zone_graph
    from schemesim.report.compared import plot_timelines
    from schemesim.report.grid_layout import neighbourhood
    from schemesim.report.one_line import plot_one_line
    from schemesim.report.page import HtmlPage
    from schemesim.report.pictures import plot_timeline
    from schemesim.report.timeline import Timeline, replay, timeline
    from schemesim.scenario import Scenario, load_scenario, save_scenario
    from schemesim.scenario.campaigns import campaign_in, campaign_scenario, export_campaign
    from schemesim.scenario.deciding import decide
    from schemesim.scenario.equipment import load_equipment
    from schemesim.scenario.equipment_list import equipment_list
    from schemesim.scenario.model import Limits, StudySettings
    from schemesim.scenario.relay_schedule import RelaySchedule, load_relay_schedule, relay_schedule
    from schemesim.scenario.reporting import report_scenario
    from schemesim.scenario.testing import intervals_scenario, misoperations_scenario
    from schemesim.scenario.timers import dial_scenario, importance_scenario, timer_scenario
    from schemesim.scenario.weak import outages_scenario, register_scenario
    from schemesim.scheme.build import BreakerTimes, SchemeBuilder
    from schemesim.scheme.conditions import Current, External, InZone, Reach
    from schemesim.scheme.curves import Curve, standard_curve
    from schemesim.scheme.delays import Fixed, fixed_ms
    from schemesim.scheme.distributions import LogNormal, Normal, Triangular, Uniform
    from schemesim.scheme.dress import dress
    from schemesim.scheme.extend import extend
    from schemesim.scheme.failure_data import FailureData, Override
    from schemesim.scheme.functions import BreakerFailureTimes, ElementTimes
    from schemesim.scheme.independence import independence
    from schemesim.scheme.model import (
        Ask,
        Breaker,
        CommonCause,
        Component,
        ComponentKind,
        Contact,
        FailureMode,
        Gate,
        Latch,
        Not,
        Role,
        Scheme,
        Sense,
        Timer,
    )
    from schemesim.scheme.phasor_distance import Distance
    from schemesim.scheme.phasor_elements import Biased, Looking, Overcurrent, Voltage
    from schemesim.scheme.policy import (
        BreakerFailurePolicy,
        LineScheme,
        LocalBackup,
        Policy,
        PolicyTimes,
        ProtectionSet,
        Reaches,
        Start,
        duplicate_chain,
        duplicate_relay,
        single_set,
    )
    from schemesim.scheme.redundancy import iec_61508_pfd, redundant
    from schemesim.scheme.settings import Setting, Settings
    from schemesim.scheme.settings_grading import graded
    from schemesim.scheme.settings_rules import SettingRules, settings_for
    from schemesim.scheme.starting_values import load_starting_values
    from schemesim.scheme.trip_comparison import compare_trip_matrix
    from schemesim.scheme.trip_matrix import trip_matrix
    from schemesim.scheme.unavailability import RateData, RateRule, optimal_interval_yr, unavailability
    from schemesim.show.curves import plot_time_current
    from schemesim.show.tables import readable
    from schemesim.study.brackets import Bracket
    from schemesim.study.campaign import Campaign
    from schemesim.study.campaign_replay import find_trials, replay_trial
    from schemesim.study.campaign_run import load_campaign, run_campaign
    from schemesim.study.comparison import compare
    from schemesim.study.coordination import coordination
    from schemesim.study.dependability import outputs_of, study_dependability
    from schemesim.study.dials import dial_policies, study_dial
    from schemesim.study.edits import Edit, Recipe
    from schemesim.study.element_audit import audit_elements
    from schemesim.study.footnote import Monitored
    from schemesim.study.frontier import frontier, next_best
    from schemesim.study.importance import importance
    from schemesim.study.importance_study import study_importance
    from schemesim.study.injection import inject
    from schemesim.study.intervals import clopper_pearson, wilson
    from schemesim.study.locations import iter_locations, study_locations
    from schemesim.study.measures import (
        breakers_distribution,
        breakers_excess,
        breakers_mean,
        clearing_time,
        p_by_main,
        p_by_role,
        p_cleared,
        p_selective,
        p_within_limit,
    )
    from schemesim.study.misoperations import misoperation, study_misoperations
    from schemesim.study.money import CostRule, Costs, Money, Values
    from schemesim.study.montecarlo import simulate
    from schemesim.study.no_fault import study_no_fault
    from schemesim.study.outages import planned_outages, study_outages
    from schemesim.study.precision import Precision
    from schemesim.study.proof_intervals import TestCosts, study_test_intervals
    from schemesim.study.races import races
    from schemesim.study.register import Register, register
    from schemesim.study.register_changes import compare_registers
    from schemesim.study.risk import Explorer
    from schemesim.study.sensitivity import uncertainty
    from schemesim.study.stratified import simulate_stratified
    from schemesim.study.timer_study import Weights, study_timers
    from schemesim.study.tree import Narrow, Tree, explore
    from schemesim.study.variants import study_variants
    from schemesim.study.weak_points import minimal_sets, single_points

__version__ = "0.1.0"

_HOMES = {
    "schemesim.scheme.curves": "Curve standard_curve",
    "schemesim.scheme.phasor_elements": "Biased Looking Overcurrent Voltage",
    "schemesim.scheme.phasor_distance": "Distance",
    "schemesim.scheme.settings": "Setting Settings",
    "schemesim.scheme.settings_rules": "SettingRules settings_for",
    "schemesim.scheme.settings_grading": "graded",
    "schemesim.engine.electrical": "ElectricalSensing",
    "schemesim.study.element_audit": "audit_elements",
    "schemesim.study.coordination": "coordination",
    "schemesim.errors": "InputError RunError SchemesimError",
    "schemesim.plant.model": (
        "Device DeviceKind Dispatch Location Plant PlantBuilder Section SectionKind Source VoltageTransformer"
    ),
    "schemesim.plant.layouts": (
        "Bay CtPlacement breaker_and_a_half double_bus feeder generator infeed line ring sectionalised_bus "
        "single_bus transformer"
    ),
    "schemesim.plant.zones": "duty isolation_zones merged_elements zone_graph",
    "schemesim.plant.net_case": "FaultType ShuntFault",
    "schemesim.plant.net_data": "Coupling LineImpedance SourceImpedance TransformerImpedance",
    "schemesim.plant.net_faults": "network_of",
    "schemesim.plant.net_import": "plant_of_pandapower",
    "schemesim.plant.net_tables": "plant_of_tables",
    "schemesim.plant.terminals": "Terminal protected_object",
    "schemesim.plant.coverage": "coverage_audit",
    "schemesim.plant.ct_positions": "ct_frequencies with_ct",
    "schemesim.scheme.delays": "Fixed fixed_ms",
    "schemesim.scheme.model": (
        "Ask Breaker CommonCause Component ComponentKind Contact FailureMode Gate Latch Not Role Scheme Sense "
        "Timer"
    ),
    "schemesim.scheme.conditions": "Current External InZone Reach",
    "schemesim.scheme.failure_data": "FailureData Override",
    "schemesim.scheme.policy": (
        "BreakerFailurePolicy LineScheme LocalBackup Policy PolicyTimes ProtectionSet Reaches Start "
        "duplicate_chain duplicate_relay single_set"
    ),
    "schemesim.scheme.build": "BreakerTimes SchemeBuilder",
    "schemesim.scheme.functions": "BreakerFailureTimes ElementTimes",
    "schemesim.scheme.distributions": "LogNormal Normal Triangular Uniform",
    "schemesim.scheme.dress": "dress",
    "schemesim.scheme.extend": "extend",
    "schemesim.engine.program": "Program compile_scheme",
    "schemesim.engine.sensing": "LogicalSensing NoFault",
    "schemesim.engine.case": "Case bind",
    "schemesim.engine.answers": "DrawnAnswers FixedAnswers ForcedAnswers",
    "schemesim.engine.event": "run_event",
    "schemesim.engine.outcome": "Outcome Run Status",
    "schemesim.engine.times": "DelayTimes",
    "schemesim.study.brackets": "Bracket",
    "schemesim.study.tree": "Narrow Tree explore",
    "schemesim.study.measures": (
        "breakers_distribution breakers_excess breakers_mean clearing_time p_by_main p_by_role p_cleared "
        "p_selective p_within_limit"
    ),
    "schemesim.study.weak_points": "minimal_sets single_points",
    "schemesim.study.importance": "importance",
    "schemesim.study.races": "races",
    "schemesim.study.dependability": "outputs_of study_dependability",
    "schemesim.study.injection": "inject",
    "schemesim.study.montecarlo": "simulate",
    "schemesim.study.precision": "Precision",
    "schemesim.study.stratified": "simulate_stratified",
    "schemesim.study.campaign": "Campaign",
    "schemesim.study.campaign_replay": "find_trials replay_trial",
    "schemesim.study.campaign_run": "load_campaign run_campaign",
    "schemesim.scenario.campaigns": "campaign_in campaign_scenario export_campaign",
    "schemesim.study.no_fault": "study_no_fault",
    "schemesim.study.locations": "iter_locations study_locations",
    "schemesim.study.comparison": "compare",
    "schemesim.study.intervals": "clopper_pearson wilson",
    "schemesim.study.money": "CostRule Costs Money Values",
    "schemesim.study.edits": "Edit Recipe",
    "schemesim.study.risk": "Explorer",
    "schemesim.study.variants": "study_variants",
    "schemesim.study.frontier": "frontier next_best",
    "schemesim.study.sensitivity": "uncertainty",
    "schemesim.report.timeline": "Timeline replay timeline",
    "schemesim.report.page": "HtmlPage",
    "schemesim.report.pictures": "plot_timeline",
    "schemesim.report.compared": "plot_timelines",
    "schemesim.report.one_line": "plot_one_line",
    "schemesim.report.grid_layout": "neighbourhood",
    "schemesim.show.curves": "plot_time_current",
    "schemesim.show.tables": "readable",
    "schemesim.scenario": "Scenario load_scenario save_scenario",
    "schemesim.scenario.deciding": "decide",
    "schemesim.scenario.model": "Limits StudySettings",
    "schemesim.scheme.trip_matrix": "trip_matrix",
    "schemesim.scheme.trip_comparison": "compare_trip_matrix",
    "schemesim.scheme.independence": "independence",
    "schemesim.study.register": "Register register",
    "schemesim.study.register_changes": "compare_registers",
    "schemesim.study.footnote": "Monitored",
    "schemesim.study.outages": "planned_outages study_outages",
    "schemesim.scenario.weak": "outages_scenario register_scenario",
    "schemesim.scheme.unavailability": "RateData RateRule optimal_interval_yr unavailability",
    "schemesim.scheme.redundancy": "iec_61508_pfd redundant",
    "schemesim.scheme.starting_values": "load_starting_values",
    "schemesim.study.proof_intervals": "TestCosts study_test_intervals",
    "schemesim.study.misoperations": "misoperation study_misoperations",
    "schemesim.scenario.equipment": "load_equipment",
    "schemesim.scenario.equipment_list": "equipment_list",
    "schemesim.scenario.relay_schedule": "RelaySchedule load_relay_schedule relay_schedule",
    "schemesim.scenario.reporting": "report_scenario",
    "schemesim.scenario.testing": "intervals_scenario misoperations_scenario",
    "schemesim.study.timer_study": "Weights study_timers",
    "schemesim.study.dials": "dial_policies study_dial",
    "schemesim.study.importance_study": "study_importance",
    "schemesim.scenario.timers": "dial_scenario importance_scenario timer_scenario",
}

# fmt: off
__all__ = [
    "Ask", "Bay", "Biased", "Bracket", "Breaker", "BreakerFailurePolicy", "BreakerFailureTimes", "BreakerTimes",
    "Campaign", "Case", "CommonCause", "Component", "ComponentKind", "Contact", "CostRule", "Costs", "Coupling",
    "CtPlacement", "Current", "Curve", "DelayTimes", "Device", "DeviceKind", "Dispatch", "Distance", "DrawnAnswers",
    "Edit", "ElectricalSensing", "ElementTimes", "Explorer", "External", "FailureData", "FailureMode", "FaultType",
    "Fixed", "FixedAnswers", "ForcedAnswers", "Gate", "HtmlPage", "InZone", "InputError", "Latch", "Limits",
    "LineImpedance", "LineScheme", "LocalBackup", "Location", "LogNormal", "LogicalSensing", "Looking", "Money",
    "Monitored", "Narrow", "NoFault", "Normal", "Not", "Outcome", "Overcurrent", "Override", "Plant", "PlantBuilder",
    "Policy", "PolicyTimes", "Precision", "Program", "ProtectionSet", "RateData", "RateRule", "Reach", "Reaches",
    "Recipe", "Register", "RelaySchedule", "Role", "Run", "RunError", "Scenario", "Scheme", "SchemeBuilder",
    "SchemesimError", "Section", "SectionKind", "Sense", "Setting", "SettingRules", "Settings", "ShuntFault", "Source",
    "SourceImpedance", "Start", "Status", "StudySettings", "Terminal", "TestCosts", "Timeline", "Timer",
    "TransformerImpedance", "Tree", "Triangular", "Uniform", "Values", "Voltage", "VoltageTransformer", "Weights",
    "audit_elements", "bind", "breaker_and_a_half", "breakers_distribution", "breakers_excess", "breakers_mean",
    "campaign_in", "campaign_scenario", "clearing_time", "clopper_pearson", "compare", "compare_registers",
    "compare_trip_matrix", "compile_scheme", "coordination", "coverage_audit", "ct_frequencies", "decide",
    "dial_policies",
    "dial_scenario", "double_bus", "dress", "duplicate_chain", "duplicate_relay", "duty", "equipment_list", "explore",
    "export_campaign", "extend", "feeder", "find_trials", "fixed_ms", "frontier", "generator", "graded",
    "iec_61508_pfd", "importance", "importance_scenario", "independence", "infeed", "inject", "intervals_scenario",
    "isolation_zones", "iter_locations", "line", "load_campaign", "load_equipment", "load_relay_schedule",
    "load_scenario", "load_starting_values", "merged_elements", "minimal_sets", "misoperation",
    "misoperations_scenario", "neighbourhood", "network_of", "next_best", "optimal_interval_yr", "outages_scenario",
    "outputs_of", "p_by_main", "p_by_role", "p_cleared", "p_selective", "p_within_limit", "planned_outages",
    "plant_of_pandapower", "plant_of_tables", "plot_one_line", "plot_time_current", "plot_timeline", "plot_timelines",
    "protected_object", "races", "readable", "redundant", "register", "register_scenario", "relay_schedule", "replay",
    "replay_trial", "report_scenario", "ring", "run_campaign", "run_event", "save_scenario", "sectionalised_bus",
    "settings_for", "simulate", "simulate_stratified", "single_bus", "single_points", "single_set", "standard_curve",
    "study_dependability", "study_dial", "study_importance", "study_locations", "study_misoperations", "study_no_fault",
    "study_outages", "study_test_intervals", "study_timers", "study_variants", "timeline", "timer_scenario",
    "transformer", "trip_matrix", "unavailability", "uncertainty", "wilson", "with_ct", "zone_graph",
]
# fmt: on

_HOME = {name: module for module, names in _HOMES.items() for name in names.split()}


def __getattr__(name: str) -> object:
    """Load a public name from its home when it is first used."""
    if name not in _HOME:
        from schemesim.errors import nearest  # no import at all before a name is asked for

        tip = "" if name.startswith("_") else nearest(name, __all__)
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}{tip and f' ({tip})'}")
    value: object = getattr(import_module(_HOME[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    """Public names, for completion."""
    return sorted({*globals(), *__all__})
