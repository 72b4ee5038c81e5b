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
    from schemesim.engine.answers import (
        DrawnAnswers as DrawnAnswers,
    )
    from schemesim.engine.answers import (
        FixedAnswers as FixedAnswers,
    )
    from schemesim.engine.answers import (
        ForcedAnswers as ForcedAnswers,
    )
    from schemesim.engine.case import (
        Case as Case,
    )
    from schemesim.engine.case import (
        bind as bind,
    )
    from schemesim.engine.event import run_event as run_event
    from schemesim.engine.outcome import (
        Outcome as Outcome,
    )
    from schemesim.engine.outcome import (
        Run as Run,
    )
    from schemesim.engine.outcome import (
        Status as Status,
    )
    from schemesim.engine.program import (
        Program as Program,
    )
    from schemesim.engine.program import (
        compile_scheme as compile_scheme,
    )
    from schemesim.engine.sensing import (
        LogicalSensing as LogicalSensing,
    )
    from schemesim.engine.sensing import (
        NoFault as NoFault,
    )
    from schemesim.engine.times import DelayTimes as DelayTimes
    from schemesim.errors import (
        InputError as InputError,
    )
    from schemesim.errors import (
        RunError as RunError,
    )
    from schemesim.errors import (
        SchemesimError as SchemesimError,
    )
    from schemesim.plant.coverage import coverage_audit as coverage_audit
    from schemesim.plant.layouts import (
        Bay as Bay,
    )
    from schemesim.plant.layouts import (
        CtPlacement as CtPlacement,
    )
    from schemesim.plant.layouts import (
        breaker_and_a_half as breaker_and_a_half,
    )
    from schemesim.plant.layouts import (
        double_bus as double_bus,
    )
    from schemesim.plant.layouts import (
        feeder as feeder,
    )
    from schemesim.plant.layouts import (
        generator as generator,
    )
    from schemesim.plant.layouts import (
        infeed as infeed,
    )
    from schemesim.plant.layouts import (
        line as line,
    )
    from schemesim.plant.layouts import (
        ring as ring,
    )
    from schemesim.plant.layouts import (
        sectionalised_bus as sectionalised_bus,
    )
    from schemesim.plant.layouts import (
        single_bus as single_bus,
    )
    from schemesim.plant.layouts import (
        transformer as transformer,
    )
    from schemesim.plant.model import (
        Device as Device,
    )
    from schemesim.plant.model import (
        DeviceKind as DeviceKind,
    )
    from schemesim.plant.model import (
        Dispatch as Dispatch,
    )
    from schemesim.plant.model import (
        Location as Location,
    )
    from schemesim.plant.model import (
        Plant as Plant,
    )
    from schemesim.plant.model import (
        PlantBuilder as PlantBuilder,
    )
    from schemesim.plant.model import (
        Section as Section,
    )
    from schemesim.plant.model import (
        SectionKind as SectionKind,
    )
    from schemesim.plant.model import (
        Source as Source,
    )
    from schemesim.plant.model import (
        VoltageTransformer as VoltageTransformer,
    )
    from schemesim.plant.terminals import (
        Terminal as Terminal,
    )
    from schemesim.plant.terminals import (
        protected_object as protected_object,
    )
    from schemesim.plant.zones import (
        duty as duty,
    )
    from schemesim.plant.zones import (
        isolation_zones as isolation_zones,
    )
    from schemesim.plant.zones import (
        merged_elements as merged_elements,
    )
    from schemesim.plant.zones import (
        zone_graph as zone_graph,
    )
    from schemesim.report.pictures import plot_timeline as plot_timeline
    from schemesim.report.timeline import (
        replay as replay,
    )
    from schemesim.report.timeline import (
        timeline as timeline,
    )
    from schemesim.scenario import (
        Scenario as Scenario,
    )
    from schemesim.scenario import (
        load_scenario as load_scenario,
    )
    from schemesim.scenario import (
        save_scenario as save_scenario,
    )
    from schemesim.scheme.build import SchemeBuilder as SchemeBuilder
    from schemesim.scheme.conditions import (
        Current as Current,
    )
    from schemesim.scheme.conditions import (
        External as External,
    )
    from schemesim.scheme.conditions import (
        InZone as InZone,
    )
    from schemesim.scheme.conditions import (
        Reach as Reach,
    )
    from schemesim.scheme.delays import (
        Fixed as Fixed,
    )
    from schemesim.scheme.delays import (
        fixed_ms as fixed_ms,
    )
    from schemesim.scheme.dress import dress as dress
    from schemesim.scheme.failure_data import (
        FailureData as FailureData,
    )
    from schemesim.scheme.failure_data import (
        Override as Override,
    )
    from schemesim.scheme.model import (
        Ask as Ask,
    )
    from schemesim.scheme.model import (
        Breaker as Breaker,
    )
    from schemesim.scheme.model import (
        CommonCause as CommonCause,
    )
    from schemesim.scheme.model import (
        Component as Component,
    )
    from schemesim.scheme.model import (
        ComponentKind as ComponentKind,
    )
    from schemesim.scheme.model import (
        Contact as Contact,
    )
    from schemesim.scheme.model import (
        FailureMode as FailureMode,
    )
    from schemesim.scheme.model import (
        Gate as Gate,
    )
    from schemesim.scheme.model import (
        Latch as Latch,
    )
    from schemesim.scheme.model import (
        Not as Not,
    )
    from schemesim.scheme.model import (
        Role as Role,
    )
    from schemesim.scheme.model import (
        Scheme as Scheme,
    )
    from schemesim.scheme.model import (
        Sense as Sense,
    )
    from schemesim.scheme.model import (
        Timer as Timer,
    )
    from schemesim.scheme.policy import (
        BreakerFailurePolicy as BreakerFailurePolicy,
    )
    from schemesim.scheme.policy import (
        LineScheme as LineScheme,
    )
    from schemesim.scheme.policy import (
        LocalBackup as LocalBackup,
    )
    from schemesim.scheme.policy import (
        Policy as Policy,
    )
    from schemesim.scheme.policy import (
        ProtectionSet as ProtectionSet,
    )
    from schemesim.scheme.policy import (
        Reaches as Reaches,
    )
    from schemesim.scheme.policy import (
        Start as Start,
    )
    from schemesim.scheme.policy import (
        duplicate_chain as duplicate_chain,
    )
    from schemesim.scheme.policy import (
        duplicate_relay as duplicate_relay,
    )
    from schemesim.scheme.policy import (
        single_set as single_set,
    )
    from schemesim.study.brackets import Bracket as Bracket
    from schemesim.study.comparison import compare as compare
    from schemesim.study.dependability import (
        outputs_of as outputs_of,
    )
    from schemesim.study.dependability import (
        study_dependability as study_dependability,
    )
    from schemesim.study.importance import importance as importance
    from schemesim.study.injection import inject as inject
    from schemesim.study.intervals import (
        clopper_pearson as clopper_pearson,
    )
    from schemesim.study.intervals import (
        wilson as wilson,
    )
    from schemesim.study.locations import (
        iter_locations as iter_locations,
    )
    from schemesim.study.locations import (
        study_locations as study_locations,
    )
    from schemesim.study.measures import (
        breakers_distribution as breakers_distribution,
    )
    from schemesim.study.measures import (
        breakers_excess as breakers_excess,
    )
    from schemesim.study.measures import (
        breakers_mean as breakers_mean,
    )
    from schemesim.study.measures import (
        clearing_time as clearing_time,
    )
    from schemesim.study.measures import (
        p_by_main as p_by_main,
    )
    from schemesim.study.measures import (
        p_by_role as p_by_role,
    )
    from schemesim.study.measures import (
        p_cleared as p_cleared,
    )
    from schemesim.study.measures import (
        p_selective as p_selective,
    )
    from schemesim.study.measures import (
        p_within_limit as p_within_limit,
    )
    from schemesim.study.montecarlo import simulate as simulate
    from schemesim.study.no_fault import study_no_fault as study_no_fault
    from schemesim.study.races import races as races
    from schemesim.study.tree import (
        Narrow as Narrow,
    )
    from schemesim.study.tree import (
        Tree as Tree,
    )
    from schemesim.study.tree import (
        explore as explore,
    )
    from schemesim.study.weak_points import (
        minimal_sets as minimal_sets,
    )
    from schemesim.study.weak_points import (
        single_points as single_points,
    )

__version__ = "0.1.0"

_HOME = {
    "Ask": "schemesim.scheme.model",
    "Bay": "schemesim.plant.layouts",
    "Bracket": "schemesim.study.brackets",
    "Breaker": "schemesim.scheme.model",
    "BreakerFailurePolicy": "schemesim.scheme.policy",
    "Case": "schemesim.engine.case",
    "CommonCause": "schemesim.scheme.model",
    "Component": "schemesim.scheme.model",
    "ComponentKind": "schemesim.scheme.model",
    "Contact": "schemesim.scheme.model",
    "CtPlacement": "schemesim.plant.layouts",
    "Current": "schemesim.scheme.conditions",
    "DelayTimes": "schemesim.engine.times",
    "Device": "schemesim.plant.model",
    "DeviceKind": "schemesim.plant.model",
    "Dispatch": "schemesim.plant.model",
    "DrawnAnswers": "schemesim.engine.answers",
    "External": "schemesim.scheme.conditions",
    "FailureData": "schemesim.scheme.failure_data",
    "FailureMode": "schemesim.scheme.model",
    "Fixed": "schemesim.scheme.delays",
    "FixedAnswers": "schemesim.engine.answers",
    "ForcedAnswers": "schemesim.engine.answers",
    "Gate": "schemesim.scheme.model",
    "InZone": "schemesim.scheme.conditions",
    "InputError": "schemesim.errors",
    "Latch": "schemesim.scheme.model",
    "LineScheme": "schemesim.scheme.policy",
    "LocalBackup": "schemesim.scheme.policy",
    "Location": "schemesim.plant.model",
    "LogicalSensing": "schemesim.engine.sensing",
    "Narrow": "schemesim.study.tree",
    "NoFault": "schemesim.engine.sensing",
    "Not": "schemesim.scheme.model",
    "Outcome": "schemesim.engine.outcome",
    "Override": "schemesim.scheme.failure_data",
    "Plant": "schemesim.plant.model",
    "PlantBuilder": "schemesim.plant.model",
    "Policy": "schemesim.scheme.policy",
    "Program": "schemesim.engine.program",
    "ProtectionSet": "schemesim.scheme.policy",
    "Reach": "schemesim.scheme.conditions",
    "Reaches": "schemesim.scheme.policy",
    "Role": "schemesim.scheme.model",
    "Run": "schemesim.engine.outcome",
    "RunError": "schemesim.errors",
    "Scenario": "schemesim.scenario",
    "Scheme": "schemesim.scheme.model",
    "SchemeBuilder": "schemesim.scheme.build",
    "SchemesimError": "schemesim.errors",
    "Section": "schemesim.plant.model",
    "SectionKind": "schemesim.plant.model",
    "Sense": "schemesim.scheme.model",
    "Source": "schemesim.plant.model",
    "Start": "schemesim.scheme.policy",
    "Status": "schemesim.engine.outcome",
    "Terminal": "schemesim.plant.terminals",
    "Timer": "schemesim.scheme.model",
    "Tree": "schemesim.study.tree",
    "VoltageTransformer": "schemesim.plant.model",
    "bind": "schemesim.engine.case",
    "breaker_and_a_half": "schemesim.plant.layouts",
    "breakers_distribution": "schemesim.study.measures",
    "breakers_excess": "schemesim.study.measures",
    "breakers_mean": "schemesim.study.measures",
    "clearing_time": "schemesim.study.measures",
    "clopper_pearson": "schemesim.study.intervals",
    "compare": "schemesim.study.comparison",
    "compile_scheme": "schemesim.engine.program",
    "coverage_audit": "schemesim.plant.coverage",
    "double_bus": "schemesim.plant.layouts",
    "dress": "schemesim.scheme.dress",
    "duplicate_chain": "schemesim.scheme.policy",
    "duplicate_relay": "schemesim.scheme.policy",
    "duty": "schemesim.plant.zones",
    "explore": "schemesim.study.tree",
    "feeder": "schemesim.plant.layouts",
    "fixed_ms": "schemesim.scheme.delays",
    "generator": "schemesim.plant.layouts",
    "importance": "schemesim.study.importance",
    "infeed": "schemesim.plant.layouts",
    "inject": "schemesim.study.injection",
    "isolation_zones": "schemesim.plant.zones",
    "iter_locations": "schemesim.study.locations",
    "line": "schemesim.plant.layouts",
    "load_scenario": "schemesim.scenario",
    "merged_elements": "schemesim.plant.zones",
    "minimal_sets": "schemesim.study.weak_points",
    "outputs_of": "schemesim.study.dependability",
    "p_by_main": "schemesim.study.measures",
    "p_by_role": "schemesim.study.measures",
    "p_cleared": "schemesim.study.measures",
    "p_selective": "schemesim.study.measures",
    "p_within_limit": "schemesim.study.measures",
    "plot_timeline": "schemesim.report.pictures",
    "protected_object": "schemesim.plant.terminals",
    "races": "schemesim.study.races",
    "replay": "schemesim.report.timeline",
    "ring": "schemesim.plant.layouts",
    "run_event": "schemesim.engine.event",
    "save_scenario": "schemesim.scenario",
    "sectionalised_bus": "schemesim.plant.layouts",
    "simulate": "schemesim.study.montecarlo",
    "single_bus": "schemesim.plant.layouts",
    "single_points": "schemesim.study.weak_points",
    "single_set": "schemesim.scheme.policy",
    "study_dependability": "schemesim.study.dependability",
    "study_locations": "schemesim.study.locations",
    "study_no_fault": "schemesim.study.no_fault",
    "timeline": "schemesim.report.timeline",
    "transformer": "schemesim.plant.layouts",
    "wilson": "schemesim.study.intervals",
    "zone_graph": "schemesim.plant.zones",
}

__all__ = [
    "Ask",
    "Bay",
    "Bracket",
    "Breaker",
    "BreakerFailurePolicy",
    "Case",
    "CommonCause",
    "Component",
    "ComponentKind",
    "Contact",
    "CtPlacement",
    "Current",
    "DelayTimes",
    "Device",
    "DeviceKind",
    "Dispatch",
    "DrawnAnswers",
    "External",
    "FailureData",
    "FailureMode",
    "Fixed",
    "FixedAnswers",
    "ForcedAnswers",
    "Gate",
    "InZone",
    "InputError",
    "Latch",
    "LineScheme",
    "LocalBackup",
    "Location",
    "LogicalSensing",
    "Narrow",
    "NoFault",
    "Not",
    "Outcome",
    "Override",
    "Plant",
    "PlantBuilder",
    "Policy",
    "Program",
    "ProtectionSet",
    "Reach",
    "Reaches",
    "Role",
    "Run",
    "RunError",
    "Scenario",
    "Scheme",
    "SchemeBuilder",
    "SchemesimError",
    "Section",
    "SectionKind",
    "Sense",
    "Source",
    "Start",
    "Status",
    "Terminal",
    "Timer",
    "Tree",
    "VoltageTransformer",
    "bind",
    "breaker_and_a_half",
    "breakers_distribution",
    "breakers_excess",
    "breakers_mean",
    "clearing_time",
    "clopper_pearson",
    "compare",
    "compile_scheme",
    "coverage_audit",
    "double_bus",
    "dress",
    "duplicate_chain",
    "duplicate_relay",
    "duty",
    "explore",
    "feeder",
    "fixed_ms",
    "generator",
    "importance",
    "infeed",
    "inject",
    "isolation_zones",
    "iter_locations",
    "line",
    "load_scenario",
    "merged_elements",
    "minimal_sets",
    "outputs_of",
    "p_by_main",
    "p_by_role",
    "p_cleared",
    "p_selective",
    "p_within_limit",
    "plot_timeline",
    "protected_object",
    "races",
    "replay",
    "ring",
    "run_event",
    "save_scenario",
    "sectionalised_bus",
    "simulate",
    "single_bus",
    "single_points",
    "single_set",
    "study_dependability",
    "study_locations",
    "study_no_fault",
    "timeline",
    "transformer",
    "wilson",
    "zone_graph",
]


def __getattr__(name: str) -> object:
    """Load a public name from its home when it is first used."""
    if name not in _HOME:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    value: object = getattr(import_module(_HOME[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    """Public names, for completion."""
    return sorted([*globals(), *__all__])
