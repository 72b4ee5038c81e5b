"""The house: its public names, what lies at its top level, README's two commands, and a light import."""

from __future__ import annotations

import inspect
import subprocess
import sys
from importlib import resources
from pathlib import Path

import schemesim

ROOT = Path(__file__).resolve().parents[2]

# Every public name of the library, and nothing else. A name is added or taken away here and there.
PUBLIC: list[str] = [
    "Ask",
    "Bay",
    "Biased",
    "Bracket",
    "Breaker",
    "BreakerFailurePolicy",
    "BreakerFailureTimes",
    "BreakerTimes",
    "Campaign",
    "Case",
    "CommonCause",
    "Component",
    "ComponentKind",
    "Contact",
    "CostRule",
    "Costs",
    "Coupling",
    "CtPlacement",
    "Current",
    "Curve",
    "DelayTimes",
    "Device",
    "DeviceKind",
    "Dispatch",
    "Distance",
    "DrawnAnswers",
    "Edit",
    "ElectricalSensing",
    "ElementTimes",
    "Explorer",
    "External",
    "FailureData",
    "FailureMode",
    "FaultType",
    "Fixed",
    "FixedAnswers",
    "ForcedAnswers",
    "Gate",
    "HtmlPage",
    "InZone",
    "InputError",
    "Latch",
    "Limits",
    "LineImpedance",
    "LineScheme",
    "LocalBackup",
    "Location",
    "LogNormal",
    "LogicalSensing",
    "Looking",
    "Money",
    "Monitored",
    "Narrow",
    "NoFault",
    "Normal",
    "Not",
    "Outcome",
    "Overcurrent",
    "Override",
    "Plant",
    "PlantBuilder",
    "Policy",
    "PolicyTimes",
    "Precision",
    "Program",
    "ProtectionSet",
    "RateData",
    "RateRule",
    "Reach",
    "Reaches",
    "Recipe",
    "Register",
    "RelaySchedule",
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
    "Setting",
    "SettingRules",
    "Settings",
    "ShuntFault",
    "Source",
    "SourceImpedance",
    "Start",
    "Status",
    "StudySettings",
    "Terminal",
    "TestCosts",
    "Timeline",
    "Timer",
    "TransformerImpedance",
    "Tree",
    "Triangular",
    "Uniform",
    "Values",
    "Voltage",
    "VoltageTransformer",
    "Weights",
    "audit_elements",
    "bind",
    "breaker_and_a_half",
    "breakers_distribution",
    "breakers_excess",
    "breakers_mean",
    "campaign_in",
    "campaign_scenario",
    "clearing_time",
    "clopper_pearson",
    "compare",
    "compare_registers",
    "compare_trip_matrix",
    "compile_scheme",
    "coordination",
    "coverage_audit",
    "ct_frequencies",
    "decide",
    "dial_policies",
    "dial_scenario",
    "double_bus",
    "dress",
    "duplicate_chain",
    "duplicate_relay",
    "duty",
    "equipment_list",
    "explore",
    "export_campaign",
    "extend",
    "feeder",
    "find_trials",
    "fixed_ms",
    "frontier",
    "generator",
    "graded",
    "iec_61508_pfd",
    "importance",
    "importance_scenario",
    "independence",
    "infeed",
    "inject",
    "intervals_scenario",
    "isolation_zones",
    "iter_locations",
    "line",
    "load_campaign",
    "load_equipment",
    "load_relay_schedule",
    "load_scenario",
    "load_starting_values",
    "merged_elements",
    "minimal_sets",
    "misoperation",
    "misoperations_scenario",
    "neighbourhood",
    "network_of",
    "next_best",
    "optimal_interval_yr",
    "outages_scenario",
    "outputs_of",
    "p_by_main",
    "p_by_role",
    "p_cleared",
    "p_selective",
    "p_within_limit",
    "planned_outages",
    "plant_of_pandapower",
    "plant_of_tables",
    "plot_one_line",
    "plot_time_current",
    "plot_timeline",
    "plot_timelines",
    "protected_object",
    "races",
    "readable",
    "redundant",
    "register",
    "register_scenario",
    "relay_schedule",
    "replay",
    "replay_trial",
    "report_scenario",
    "ring",
    "run_campaign",
    "run_event",
    "save_scenario",
    "sectionalised_bus",
    "settings_for",
    "simulate",
    "simulate_stratified",
    "single_bus",
    "single_points",
    "single_set",
    "standard_curve",
    "study_dependability",
    "study_dial",
    "study_importance",
    "study_locations",
    "study_misoperations",
    "study_no_fault",
    "study_outages",
    "study_test_intervals",
    "study_timers",
    "study_variants",
    "timeline",
    "timer_scenario",
    "transformer",
    "trip_matrix",
    "unavailability",
    "uncertainty",
    "wilson",
    "with_ct",
    "zone_graph",
]

TOP_LEVEL = {
    "DEVELOPERS.md",
    "LICENSE",
    "README.md",
    "notebooks",
    "pyproject.toml",
    "scenarios",
    "schemesim",
    "tests",
}
LEFT_BY_TOOLS = {"__pycache__", "build", "dist", "schemesim.egg-info"}

HEAVY = ("matplotlib", "pandas", "pydantic", "scipy", "simpy", "yaml")


def public_names() -> list[str]:
    return list(vars(schemesim).get("__all__", ()))


def top_level_entries() -> set[str]:
    """What the project keeps at its top level: as git has it, or, in a bare copy, as the folder lists it."""
    if not (ROOT / ".git").exists():
        return {path.name for path in ROOT.iterdir()} - LEFT_BY_TOOLS
    listing = subprocess.run(
        ["git", "ls-files", "-z"], cwd=ROOT, check=True, capture_output=True, text=True, timeout=60
    )
    return {name.split("/")[0] for name in listing.stdout.split("\0") if name}


def first_fenced_block(text: str) -> list[str]:
    """The non-empty lines of the first block between two lines that begin with three backticks."""
    lines = text.splitlines()
    fences = [number for number, line in enumerate(lines) if line.startswith("```")]
    assert len(fences) >= 2, "no fenced block"
    return [line for line in lines[fences[0] + 1 : fences[1]] if line.strip()]


def has_docstring(thing: object) -> bool:
    """Whether a class or function says what it is in its own words (not a dataclass's made-up signature)."""
    doc = (getattr(thing, "__doc__", None) or "").strip()
    return bool(doc) and not doc.startswith(f"{getattr(thing, '__name__', '')}(")


def test_types_are_shipped() -> None:
    assert resources.files("schemesim").joinpath("py.typed").is_file()


def test_public_names_are_the_listed_ones() -> None:
    assert public_names() == PUBLIC


def test_public_names_are_sorted_and_unique() -> None:
    names = public_names()
    assert names == sorted(set(names))


def test_public_names_resolve_to_documented_things_of_the_library() -> None:
    missing = [name for name in public_names() if not hasattr(schemesim, name)]
    assert missing == []
    things = {name: getattr(schemesim, name) for name in public_names() if name != "__version__"}
    foreign = [
        name
        for name, thing in things.items()
        if not (inspect.isclass(thing) or inspect.isroutine(thing)) or not thing.__module__.startswith("schemesim.")
    ]
    assert foreign == []
    assert [name for name, thing in things.items() if not has_docstring(thing)] == []


def test_top_level_holds_only_what_belongs_there() -> None:
    entries = {name for name in top_level_entries() if not name.startswith(".")}
    assert {"LICENSE", "pyproject.toml", "schemesim"} <= entries
    assert entries - TOP_LEVEL == set()


def test_readme_begins_with_the_two_commands() -> None:
    commands = first_fenced_block((ROOT / "README.md").read_text(encoding="utf-8"))
    assert len(commands) == 2
    assert "-m schemesim" in commands[0]
    assert "-m pytest" in commands[1]


def test_the_check_script_is_a_sound_program() -> None:
    script = ROOT / ".ci" / "run"
    assert script.stat().st_mode & 0o111
    subprocess.run(["bash", "-n", str(script)], check=True, timeout=60)


def test_import_is_light() -> None:
    code = f"import sys, schemesim; print(*sorted(set({HEAVY!r}) & set(sys.modules)))"
    run = subprocess.run(
        [sys.executable, "-c", code], cwd=ROOT, check=True, capture_output=True, text=True, timeout=120
    )
    assert run.stdout.split() == []
