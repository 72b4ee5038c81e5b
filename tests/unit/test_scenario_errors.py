"""Bad scenario files: each is refused in full, at its line and path, with what was expected.

Every row states a file of ``tests/data/bad``, the file the mistake stands in (where it is an
imported one), its line and path, a part of the message, and how many mistakes there are in all.
"""

from __future__ import annotations

from pathlib import Path

import pytest

from schemesim.errors import InputError, Problem
from schemesim.scenario import load_scenario

BAD_FILES = Path(__file__).resolve().parents[1] / "data" / "bad"

BAD: tuple[tuple[str, str, int | None, str, str, int], ...] = (
    ("alias_bomb", "", 2, "b[0]", "the value itself, written out", 21),
    ("bad_name", "", 4, "plant.stations[0].name", "text without '@'", 1),
    ("base_in_a_circle", "", 15, "policies.plain.base", "no circle", 2),
    ("coil_without_dc", "", 15, "policies.plain.coil_dc", "a DC domain for each coil", 1),
    ("cores_on_a_breaker", "", 15, "plant.devices[0]", "cores on a CT only", 1),
    ("cycles_without_frequency", "", 17, "policies.plain.times.lockout_cycles", "frequency_hz at the top", 1),
    ("deep", "", 2, "plant" + 39 * "[0]", "at most 40 levels", 1),
    ("device_to_itself", "", 14, "plant.devices[0].b", "two different sections", 1),
    ("device_to_nowhere", "", 14, "plant.devices[0].b", "the name of a section", 1),
    ("duplicate_across_kinds", "", 12, "plant.feeders[0].name", "not used twice (first on line 11)", 1),
    ("duplicate_bay", "", 11, "plant.stations[1].bays[1]", "not used twice (first on line 10", 1),
    ("duplicate_core", "", 9, "plant.stations[1].cores", "none named twice", 1),
    ("duplicate_key", "", 17, "policy", "each key once (first on line 16)", 1),
    ("duplicate_name", "", 12, "plant.lines[1].name", "not used twice (first on line 11)", 1),
    ("duplicate_run", "", 19, "runs[1].name", "not used twice (first on line 18)", 1),
    ("duplicate_set_label", "", 15, "policies.plain.sets", "labels not used twice", 1),
    ("empty", "", 1, "", "a scenario", 1),
    ("empty_section", "", 17, "runs", "a list (leave the key out", 1),
    ("epsilon_zero", "", 18, "study.epsilon", "a number from 1e-12 to 0.5", 1),
    ("feeder_joined_to_nothing", "", 12, "plant.feeders[1]", "a bay that leads to it", 1),
    ("fraction_for_whole_number", "", 18, "study.seed", "a whole number", 1),
    ("frequency_negative", "", 18, "fault_frequencies.elements.L1", "a number from 0", 1),
    ("import_bad_cell", "cell.csv", 3, "[1].length", "write 30 alone", 1),
    ("import_binary", "binary.csv", 2, "", "UTF-8 text", 1),
    ("import_duplicate", "twice.csv", 3, "[1].name", "not used twice (first on line 2)", 1),
    ("import_long_row", "row.csv", 2, "", "2 cells", 1),
    ("import_missing", "nowhere.csv", None, "", "a readable text file", 1),
    ("import_nul", "nul.csv", 2, "", "printable text", 1),
    ("import_open_quote", "quote.csv", 2, "", "quotes closed", 1),
    ("import_outside", "", 10, "plant.imports.lines", "in the scenario's folder or below", 1),
    ("import_unknown_column", "column.csv", 1, "", "did you mean 'length'?", 1),
    ("import_unknown_list", "", 11, "plant.imports.line", "did you mean 'lines'?", 1),
    ("infinite_time", "", 16, "policies.plain.reaches.zone_2_delay_ms", "a time from 0", 1),
    ("key_of_another_layout", "", 9, "plant.stations[1].coupler_closed", "no such key for the layout single_bus", 1),
    ("later_version", "", 1, "schemesim", "the version of the file format", 1),
    ("limit_in_seconds", "", 18, "limits.limit_ms", "0.15 s is 150 ms", 1),
    ("line_ends_at_one_place", "", 10, "plant.lines[0]", "one at 0, one at 1", 1),
    ("line_without_length", "", 10, "plant.lines[0].length", "a number over 0", 1),
    ("list_for_mapping", "", 14, "policies", "a mapping of keys to values", 1),
    ("long_number", "", 10, "plant.lines[0].length", "at most 18 digits", 1),
    ("mapping_for_list", "", 10, "plant.lines", "a list", 1),
    ("missing_key", "", 10, "plant.lines[0].length", "this key, which is required", 1),
    ("missing_plant_key", "", 4, "plant.stations[0].layout", "this key, which is required", 1),
    ("missing_version", "", 1, "schemesim", "this key, which is required", 1),
    ("mode_of_another_kind", "", 19, "failure_data.modes.dc.does_not_open", "a failure mode: lost", 1),
    ("modes_over_one", "", 19, "failure_data.modes.channel", "sum to 1 or less", 1),
    ("ms_and_cycles", "", 19, "policies.plain.times.lockout_cycles", "either lockout_ms or lockout_cycles", 1),
    ("name_of_a_built_in_policy", "", 14, "policies.single_set", "other than those built in", 1),
    ("name_too_long", "", 2, "name", "at most 200 characters", 1),
    ("nan_time", "", 18, "policies.plain.times.breaker.interrupting_ms", "a time from 0", 1),
    ("negative_in_sample", "", 17, "policies.plain.times.lockout_ms.sample[1]", "a time from 0", 1),
    ("negative_time", "", 17, "policies.plain.times.lockout_ms", "a time from 0", 1),
    ("no_core", "", 6, "plant.stations[0].bays[0]", "one of its cores", 9),
    ("no_ct", "", 15, "plant.devices[0]", "a CT beside the breaker", 3),
    ("no_source", "", 3, "plant", "at least one source", 1),
    ("no_vt_winding", "", 7, "plant.stations[1]", "a VT on 'L1'", 1),
    ("not_a_mapping", "", 1, "", "a mapping with the key schemesim", 1),
    ("not_text", "", 2, "", "UTF-8 text", 1),
    ("number_for_name", "", 12, "plant.feeders[0].name", 'put quotes around it: "1"', 1),
    ("number_for_truth_value", "", 16, "policies.plain.lockout", "true or false", 1),
    ("number_with_unit", "", 10, "plant.lines[0].length", "write 30 alone", 1),
    ("override_over_one", "", 19, "failure_data.overrides[0]", "sum to 1 or less", 1),
    ("pattern_fits_nothing", "", 19, "failure_data.overrides[0].pattern", "did you mean 'Birch/DC 1'?", 1),
    ("position_beyond", "", 18, "runs[0].fault", "a position from 0 to 1", 1),
    ("position_of_no_line", "", 18, "runs[0].fault", "'F1' is no line", 1),
    ("positions_none", "", 18, "study.positions", "at least 1 item", 1),
    ("probability_nan", "", 20, "failure_data.common_causes[0].probability", "a number from 0 to 1", 1),
    ("probability_negative", "", 18, "failure_data.relay_beta", "a number from 0 to 1", 1),
    ("probability_over_one", "", 19, "failure_data.modes.dc.lost", "3 % is 0.03", 1),
    ("rate_coverage_over_one", "", 19, "failure_data.rates[0].coverage", "a number from 0 to 1", 1),
    ("rate_negative", "", 19, "failure_data.rates[0].rate_per_yr", "a number from 0", 1),
    ("rate_never_tested", "", 19, "failure_data.rates[0]", "failures stay hidden without a test", 1),
    ("rate_of_another_kind", "", 19, "failure_data.rates[0].mode", "a failure mode of a dc: lost", 1),
    ("rate_of_nothing", "", 19, "failure_data.rates[0]", "a rate_per_yr, or a probability on_demand", 1),
    ("rate_pattern_fits_nothing", "", 19, "failure_data.rates[0].pattern", "a pattern that fits a relay", 1),
    ("rate_test_longer_than_interval", "", 19, "failure_data.rates[0].test_duration_h", "the interval of 8.76 h", 1),
    ("rates_over_one", "", 19, "failure_data.rates", "sum to 1 or less", 1),
    ("rates_over_one_somewhere", "", 20, "failure_data.rates[1]", "sum to 1 or less", 1),
    ("ring_of_one", "", 9, "plant.stations[1].bays", "two or more in a ring", 1),
    ("run_without_fault", "", 18, "runs[0]", "either fault (a location) or no_fault", 1),
    ("seconds_for_ms", "", 17, "policies.plain.breaker_failure.times.timer_ms", "0.15 s is 150 ms", 1),
    ("selection_of_no_bay", "", 9, "plant.stations[1].selection.F2", "the name of a bay", 1),
    ("selection_of_third_bus", "", 9, "plant.stations[1].selection.F1", "a number from 1 to 2", 1),
    ("tag", "", 1, "schemesim", "no tag", 1),
    ("text_for_number", "", 10, "plant.lines[0].length", "a number over 0", 1),
    ("time_too_long", "", 18, "study.horizon_ms", "at most 1e+09 ms", 1),
    ("too_many_bus_sections", "", 9, "plant.stations[1].sections", "from 2 to 50", 1),
    ("trap_clock", "", 16, "policies.plain.times.lockout_ms", "a clock time is text", 1),
    ("trap_comma", "", 12, "plant.feeders[0].load_mw", "a decimal point, not a comma", 1),
    ("trap_exponent_text", "", 18, "failure_data.relay_beta", "a number from 0 to 1", 1),
    ("trap_leading_zero", "", 12, "plant.feeders[0].load_mw", "without leading zeros", 1),
    ("trap_missing_space", "", 16, "policies.plain", "a colon and a space", 1),
    ("trap_no", "", 16, "policies.plain.lockout", "write false, without quotes", 1),
    ("trap_no_as_name", "", 12, "plant.feeders[0].name", 'put quotes around it: "false"', 1),
    ("trap_percent", "", 18, "failure_data.relay_beta", "3 % is 0.03", 1),
    ("trap_quoted_number", "", 12, "plant.feeders[0].load_mw", "write it without quotes", 1),
    ("trap_tab", "", 15, "policies", "no tab", 1),
    ("trials_too_many", "", 18, "study.trials", "from 1 to 100000000", 1),
    ("truth_value_for_number", "", 12, "plant.feeders[0].load_mw", "a truth value is no number", 1),
    ("uniform_backwards", "", 17, "policies.plain.times.lockout_ms.uniform", "low, high in rising order", 1),
    ("unknown_component", "", 20, 'runs[0].failures["Birch/L1/relay 3"]', "did you mean 'Birch/L1/relay 1'?", 1),
    ("unknown_dispatch", "", 18, "study.dispatch", "the plant has none", 1),
    ("unknown_distribution", "", 17, "policies.plain.times.lockout_ms.unifrom", "did you mean 'uniform'?", 1),
    ("unknown_element", "", 19, "fault_frequencies.elements.L2", "the name of a section", 1),
    ("unknown_exception", "", 18, 'exceptions["Birch.B2"]', "did you mean 'Birch.B1'?", 1),
    ("unknown_key_policy", "", 16, "policies.plain.brekaer_failure", "did you mean 'breaker_failure'?", 1),
    ("unknown_key_station", "", 6, "plant.stations[0].voltage", "a known key: bays", 1),
    ("unknown_key_time", "", 16, "policies.plain.times.breaker.interrupting", "did you mean 'interrupting_ms'?", 1),
    ("unknown_key_top", "", 16, "polcy", "did you mean 'policy'?", 1),
    ("unknown_kind_of_component", "", 19, "failure_data.modes.relays", "did you mean 'relay'?", 1),
    ("unknown_layout", "", 8, "plant.stations[1].layout", "did you mean 'single_bus'?", 1),
    ("unknown_mode", "", 21, 'runs[0].failures["Birch/L1/relay 1"]', "did you mean 'failure_to_operate'?", 1),
    ("unknown_policy", "", 16, "policy", "did you mean 'plain'?", 1),
    ("unknown_section", "", 6, "plant.stations[0].bays[0]", "the name of a section", 1),
    ("votes_over_sets", "", 16, "policies.plain.votes", "a whole number from 1 to 1", 1),
    ("voltages_that_differ", "", 7, "plant.stations[0].bays[1]", "one voltage on both its sides", 1),
)

SEVERAL = (
    (9, "plant.stations[1].bays[1]", "the name of a section"),
    (10, "plant.lines[0].length", "is it 'lenght' here?"),
    (10, "plant.lines[0].lenght", "did you mean 'length'?"),
    (12, "plant.feeders[0].load_mw", "a number of 0 or more"),
    (16, "policy", "did you mean 'plain'?"),
)


def problems_in(name: str) -> tuple[Problem, ...]:
    with pytest.raises(InputError) as caught:
        load_scenario(BAD_FILES / f"{name}.yaml")
    return caught.value.problems


@pytest.mark.parametrize(("name", "file", "line", "path", "phrase", "count"), BAD, ids=[row[0] for row in BAD])
def test_bad_file_is_refused_where_it_is_wrong(
    name: str, file: str, line: int | None, path: str, phrase: str, count: int
) -> None:
    problems = problems_in(name)
    where = str(BAD_FILES / (file or f"{name}.yaml"))
    assert any(
        (p.file, p.line, p.path) == (where, line, path) and phrase in str(p) for p in problems
    ), [str(p) for p in problems]
    assert len(problems) == count


def test_all_mistakes_of_a_file_come_at_once() -> None:
    problems = problems_in("several_at_once")
    assert [(p.line, p.path) for p in problems] == [(line, path) for line, path, _ in SEVERAL]
    for problem, (_, _, phrase) in zip(problems, SEVERAL, strict=True):
        assert phrase in str(problem)


def test_no_bad_file_is_left_out_of_the_table() -> None:
    assert {p.stem for p in BAD_FILES.glob("*.yaml")} == {row[0] for row in BAD} | {"several_at_once", "several_kinds"}


def test_messages_speak_plainly() -> None:
    jargon = ("pydantic", "model_", "validator", "Input should", "dict", "NoneType", "str_type")
    for row in BAD:
        for problem in problems_in(row[0]):
            assert not [word for word in jargon if word in problem.expectation + problem.tip], problem


def test_a_long_list_of_mistakes_is_cut_with_a_count(tmp_path: Path) -> None:
    lines = "\n".join(f"    - {{name: L{i}, length: -1}}" for i in range(150))
    file = tmp_path / "many.yaml"
    file.write_text(f"schemesim: 1\npolicy: single_set\nplant:\n  lines:\n{lines}\n", encoding="utf-8")
    with pytest.raises(InputError) as caught:
        load_scenario(file)
    assert len(caught.value.problems) == 101
    assert "50 more mistakes" in str(caught.value.problems[-1])


@pytest.mark.parametrize("kind", ["folder", "missing"])
def test_what_is_no_file_is_refused(tmp_path: Path, kind: str) -> None:
    path = tmp_path if kind == "folder" else tmp_path / "nothing.yaml"
    with pytest.raises(InputError, match="a directory" if kind == "folder" else "no such file"):
        load_scenario(path)


def test_mistakes_of_several_kinds_come_together() -> None:
    """A name, a time in seconds, probabilities that sum over 1 and a negative limit, each in a section of its own."""
    found = [(p.line, p.path) for p in problems_in("several_kinds")]
    assert found == [
        (9, "plant.stations[1].bays[1]"),
        (16, "policies.plain.reaches.zone_2_delay_ms"),
        (20, "failure_data.modes.relay"),
        (22, "limits.limit_ms"),
    ]
