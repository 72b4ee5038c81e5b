"""The layer beneath scenario files: what YAML is taken, what is refused and where it is said to stand."""

from __future__ import annotations

import math
import os
from pathlib import Path
from typing import Any

import pytest
import yaml
from hypothesis import given, settings
from hypothesis import strategies as st

from schemesim.errors import InputError, Problem
from schemesim.scenario import reading
from schemesim.scenario.locate import Data, render_path
from schemesim.scenario.reading import MAX_BYTES, MAX_DEPTH, MAX_NODES, MAX_PROBLEMS, read_text, read_tree
from schemesim.scenario.writing import write_text

LOADERS = [yaml.SafeLoader, *([yaml.CSafeLoader] if yaml.__with_libyaml__ else [])]


@pytest.fixture(params=LOADERS, ids=lambda loader: str(loader.__name__))
def _each_parser(request: pytest.FixtureRequest, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(reading, "_loader", lambda: request.param)


def _file(tmp_path: Path, content: str | bytes) -> Path:
    path = tmp_path / "case.yaml"
    path.write_bytes(content.encode() if isinstance(content, str) else content)
    return path


def _problems(path: Path) -> tuple[Problem, ...]:
    with pytest.raises(InputError) as caught:
        read_tree(path)
    assert all(problem.file == str(path) for problem in caught.value.problems)
    return caught.value.problems


# (plain scalar, value)
SCALARS: list[tuple[str, Data]] = [
    *[(word, word) for word in ("no", "No", "NO", "yes", "Yes", "on", "ON", "off", "y", "n", "Y", "N")],
    *[(word, True) for word in ("true", "True", "TRUE")],
    *[(word, False) for word in ("false", "False", "FALSE")],
    *[(word, None) for word in ("", "~", "null", "Null", "NULL")],
    ("tRue", "tRue"),
    ("nULL", "nULL"),
    ("none", "none"),
    ("0", 0),
    ("-0", 0),
    ("7", 7),
    ("+7", 7),
    ("-12", -12),
    ("999999999999999999", 999999999999999999),
    ("1e-3", 0.001),
    ("1E3", 1000.0),
    ("1.5e+2", 150.0),
    ("1.", 1.0),
    (".5", 0.5),
    ("-.5", -0.5),
    ("0.5", 0.5),
    ("5e-324", 5e-324),
    ("0e-999", 0.0),
    (".inf", math.inf),
    ("+.inf", math.inf),
    ("-.Inf", -math.inf),
    ("12:30", "12:30"),
    ("1:2:3", "1:2:3"),
    ("017", "017"),
    ("-017", "-017"),
    ("01.5", "01.5"),
    ("0o17", "0o17"),
    ("0x1F", "0x1F"),
    ("0b11", "0b11"),
    ("1_000", "1_000"),
    ("1_0.5", "1_0.5"),
    ("2024-01-01", "2024-01-01"),
    ("2024-01-01 10:00:00", "2024-01-01 10:00:00"),
    ("=", "="),
    ("<<", "<<"),
    (".", "."),
    ("-.", "-."),
    ("e5", "e5"),
    ("1e", "1e"),
    ("inf", "inf"),
    ("nan", "nan"),
    ("٣", "٣"),  # a digit, but no decimal numeral
    ("a:b", "a:b"),
    ("a#b", "a#b"),
    ("a #b", "a"),
    ("'no'", "no"),
    ('"1"', "1"),
    ('""', ""),
    ("'~'", "~"),
    ('"\\0\\x07\\u00e9\\U0001F600"', "\0\a\u00e9\U0001f600"),
]


@pytest.mark.usefixtures("_each_parser")
@pytest.mark.parametrize(("text", "value"), SCALARS, ids=[repr(text) for text, _ in SCALARS])
def test_a_scalar_is_read_as_yaml_1_2_has_it(tmp_path: Path, text: str, value: Data) -> None:
    for content in (f"a: {text}\n", f"a:\n  {text}\n"):
        data = read_tree(_file(tmp_path, content)).data
        assert isinstance(data, dict)
        assert data["a"] == value
        assert type(data["a"]) is type(value)


def test_not_a_number_is_read_as_a_float() -> None:
    assert all(isinstance(v, float) and math.isnan(v) for v in _list("[.nan, .NaN, .NAN]"))


def _list(text: str) -> list[Any]:
    data = read_text(text, "f").data
    assert isinstance(data, list)
    return data


@pytest.mark.parametrize(
    "key", ["1", "no", "yes", "on", "1e-3", "017", "12:30", "true", "2024-01-01", "-5", "1.50"]
)
def test_a_key_is_the_text_as_written(tmp_path: Path, key: str) -> None:
    tree = read_tree(_file(tmp_path, f"buses:\n  {key}: {{kv: 138}}\n"))
    assert tree.data == {"buses": {key: {"kv": 138}}}
    assert tree.line(("buses", key, "kv")) == 2


@pytest.mark.parametrize("key", ["''", '""', '"null"', '"~"', '"<<"', '"a.b"'])
def test_a_quoted_key_is_any_text(tmp_path: Path, key: str) -> None:
    assert read_tree(_file(tmp_path, f"{key}: 1\n")).data == {key[1:-1]: 1}


@pytest.mark.parametrize(
    ("content", "data"),
    [
        (b"\xef\xbb\xbfa: 1\n", {"a": 1}),
        (b"a: 1\r\nb: 2\r\n", {"a": 1, "b": 2}),
        (b"a: 1\rb: 2\r", {"a": 1, "b": 2}),
        (b"%YAML 1.2\n---\na: 1\n...\n", {"a": 1}),
        (b"# comment only above\n--- # begin\n- 1\n", [1]),
        ("a: Überstrom \U0001f600\n".encode(), {"a": "Überstrom \U0001f600"}),
        (b"a: |\n  x\n   y\nb: >\n  x\n  y\n", {"a": "x\n y\n", "b": "x y\n"}),
        (b"a: |\n  x\n  \ty\n", {"a": "x\n\ty\n"}),
        (b"[" * MAX_DEPTH + b"]" * MAX_DEPTH, None),
        (b"null\n", None),
        (b"just words\n", "just words"),
    ],
)
def test_an_ordinary_file_is_taken(tmp_path: Path, content: bytes, data: Data) -> None:
    read = read_tree(_file(tmp_path, content)).data
    if content.startswith(b"["):
        assert str(read) == "[" * MAX_DEPTH + "]" * MAX_DEPTH
    else:
        assert read == data


# (content, line, path, subject, part of the expectation)
ONE_MISTAKE: list[tuple[str | bytes, int | None, str, str, str]] = [
    ("", 1, "", "file", "a scenario"),
    ("# nothing\n", 1, "", "file", "a scenario"),
    ("---\n", None, "", "file", "a scenario"),
    (b"a: 1\nb: \xff\n", 2, "", "file", "UTF-8"),
    (b"a: caf\xe9\n", 1, "", "file", "UTF-8"),
    ("a: 1\n".encode("utf-16"), 1, "", "file", "UTF-8"),
    (b"a: 1\n\nb: \0\n", 3, "", "character", "printable"),
    (b"\x89PNG\r\n\x1a\n\0\0", 1, "", "file", "UTF-8"),
    (b"\x7fELF\0\0\0", 1, "", "character", "printable"),
    ("a: \x85b\n", 1, "", "character", "escape"),
    ("a: x\u2028b\n", 1, "", "character", "escape"),
    ("a: x\ufeffb\n", 1, "", "character", "escape"),
    (b"a: " + b"x" * MAX_BYTES, None, "", "file", f"{MAX_BYTES} bytes"),
    ("[" * (MAX_DEPTH + 1) + "]" * (MAX_DEPTH + 1), 1, "[0]" * MAX_DEPTH, "nesting", f"{MAX_DEPTH} levels"),
    ("- " * (MAX_DEPTH + 1) + "1", 1, "[0]" * MAX_DEPTH, "nesting", f"{MAX_DEPTH} levels"),
    ("[\n" * 2000, MAX_DEPTH + 1, "[0]" * MAX_DEPTH, "nesting", f"{MAX_DEPTH} levels"),
    ("a: 1\n---\nb: 2\n", 2, "", "file", "one document"),
    ("a: 1\n...\nb: 2\n", 3, "", "syntax", "one document"),
    ("%YAML 1.1\n---\na: no\n", 1, "", "directive", "%YAML 1.2"),
    ("%YAML 2.0\n---\na: no\n", 1, "", "syntax", "%YAML 1.2"),
    ("a: !!python/object/apply:os.system ['true']\n", 1, "a", "tag", "no tag"),
    ("a:\n  - !!python/name:os.system\n", 2, "a[0]", "tag", "no tag"),
    ("a: !breaker {b: 1}\n", 1, "a", "tag", "no tag"),
    ("a: !!str 1\n", 1, "a", "tag", "no tag"),
    ("a: ! 1\n", 1, "a", "tag", "no tag"),
    ("!!map {a: 1}\n", 1, "", "tag", "no tag"),
    ("!!str a: 1\n", 1, "", "tag", "no tag"),
    ("a: !e!x 1\n", 1, "", "syntax", "no tag"),
    ("a: &x 1\n", 1, "a", "anchor", "no anchor"),
    ("a: 1\nb: *x\n", 2, "b", "alias", "written out"),
    ("a: 1\n*x : 2\n", 2, "", "alias", "written out"),
    ("a:\n  <<: {b: 1}\n", 2, "a", "key", "no merge key"),
    ("a: 1\nb: 2\na: 3\n", 3, "a", "key", "each key once"),
    ("a:\n  1: x\n  '1': y\n", 3, "a.1", "key", "each key once"),
    ("a: {b: 1, c: 2, b: 3}\n", 1, "a.b", "key", "each key once"),
    ("~: 1\n", 1, "", "key", "a text as key"),
    ("a:\n  null: 1\n", 2, "a", "key", "a text as key"),
    ("a: {: 1}\n", 1, "a", "syntax", "a key before the colon"),
    ("a: {~: 1}\n", 1, "a", "key", "a text as key"),
    ("a:\n  ?\n  : 1\n", 2, "a", "key", "a text as key"),
    ("a:\n  : 1\n", 2, "a", "syntax", "a key before the colon"),
    ("? [a, b]\n: 1\n", 1, "", "key", "a text as key"),
    ("? {a: 1}\n: 1\n", 1, "", "key", "a text as key"),
    ("a: 1\nb: 1000000000000000000\n", 2, "b", "number", "18 digits"),
    ("a: -1000000000000000000\n", 1, "a", "number", "18 digits"),
    ("a: " + "9" * 100_000, 1, "a", "number", "18 digits"),
    ("a: [1, 1e999]\n", 1, "a[1]", "number", "1.79e308"),
    ("a: -1e999\n", 1, "a", "number", "1.79e308"),
    ("a: 1e-999\n", 1, "a", "number", "5e-324"),
    ("a: 0." + "1" * 100_000, 1, "a", "number", "100 characters"),
    ("a: 1\nb:\n\tc: 1\n", 3, "", "syntax", "no tab"),
    ("a: 1\n\tb: 2\n", 2, "", "syntax", "no tab"),
    ("\ta: 1\n", 1, "", "syntax", "no tab"),
    ("-\ta: 1\n", 1, "", "syntax", "no tab"),
    ("x: 1\na: b: c\n", 2, "", "syntax", "'key: value'"),
    ("a: 1\n b: 2\n", 2, "", "syntax", "'key: value'"),
    ("a: 1\nb: 'x\n\n\n", 2, "", "syntax", "closing quote"),
    ("a: [1, 2\nb: 3\n", 2, "a", "syntax", "closing bracket"),
    ("a: @x\n", 1, "", "syntax", "quotes around"),
    ('a: "C:\\q"\n', 1, "", "syntax", "escape"),
    ('a: 1\nb: "\\U00110000"\n', 2, "", "syntax", "escape"),
    ("- 1\n-2\n", 2, "", "syntax", "space after the '-'"),
    ("- 1\na: 2\n", 2, "", "syntax", "same indentation"),
    ("a:\n    b: 1\n  c: 2\n", 3, "", "syntax", "same indentation"),
    ("a: }\n", 1, "", "syntax", "a value"),
]


@pytest.mark.usefixtures("_each_parser")
@pytest.mark.parametrize(
    ("content", "line", "path", "subject", "expectation"),
    ONE_MISTAKE,
    ids=[repr(c[0][:30]) for c in ONE_MISTAKE],
)
def test_one_mistake_is_named_with_its_place(
    tmp_path: Path, content: str | bytes, line: int | None, path: str, subject: str, expectation: str
) -> None:
    (problem,) = _problems(_file(tmp_path, content))
    assert (problem.subject, problem.path) == (subject, path)
    assert expectation in problem.expectation
    if line is not None:
        assert problem.line == line


@pytest.mark.usefixtures("_each_parser")
def test_half_a_surrogate_pair_is_refused_as_an_escape(tmp_path: Path) -> None:
    (problem,) = _problems(_file(tmp_path, 'a: "\\ud800"\n'))
    assert problem.line == 1


def test_a_raw_surrogate_is_refused() -> None:
    with pytest.raises(InputError, match="f:2: character"):
        read_text("a: 1\nb: \udc80\n", "f")


@pytest.mark.usefixtures("_each_parser")
def test_all_mistakes_come_at_once_and_in_order(tmp_path: Path) -> None:
    text = "a: &x 1\nb:\n  - 1e999\n  - !t 2\n  - {k: 1, k: 2}\n~: 3\n<<: *x\nc: [1\n"
    found = [(p.line, p.path, p.subject) for p in _problems(_file(tmp_path, text))]
    assert found[:7] == [
        (1, "a", "anchor"),
        (3, "b[0]", "number"),
        (4, "b[1]", "tag"),
        (5, "b[2].k", "key"),
        (6, "", "key"),
        (7, "", "key"),
        (7, '["<<"]', "alias"),
    ]
    assert [subject for _, _, subject in found[7:]] == ["syntax"]


def test_a_duplicate_key_names_both_lines(tmp_path: Path) -> None:
    (problem,) = _problems(_file(tmp_path, "a:\n  cb: 1\n  ct: 2\n\n  cb: 3\n"))
    assert problem.line == 5
    assert problem.tip == "first on line 2"
    assert "expected each key once (first on line 2)" in str(problem)


def test_an_alias_bomb_is_refused_without_being_expanded(tmp_path: Path) -> None:
    lines = ["a0: &a0 [x, x]", *(f"a{i}: &a{i} [{', '.join([f'*a{i - 1}'] * 9)}]" for i in range(1, 9))]
    problems = _problems(_file(tmp_path, "\n".join(lines)))
    assert sum(p.subject == "anchor" for p in problems) == 9
    assert sum(p.subject == "alias" for p in problems) == 72


def test_too_many_mistakes_end_the_reading(tmp_path: Path) -> None:
    problems = _problems(_file(tmp_path, "a: 1\n" * 5000))
    assert len(problems) == MAX_PROBLEMS + 1
    assert problems[-1].value == "too many mistakes"


def test_too_many_values_are_refused(tmp_path: Path) -> None:
    (problem,) = _problems(_file(tmp_path, "[" + "1," * MAX_NODES + "]"))
    assert str(MAX_NODES) in problem.expectation


def test_a_place_that_is_no_readable_file_is_refused(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe")
    (tmp_path / "loop").symlink_to(tmp_path / "loop")
    for path, value in (
        (tmp_path, "a directory"),
        (tmp_path / "pipe", "a pipe or device"),
        (tmp_path / "missing.yaml", "no such file"),
        (tmp_path / "a\0b", "no valid file name"),
    ):
        (problem,) = _problems(path)
        assert problem.value == value
    for path in (tmp_path / "loop", tmp_path / ("x" * 5000)):
        (problem,) = _problems(path)
        assert problem.expectation == "a readable text file"


def test_a_file_that_may_not_be_read_is_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = _file(tmp_path, "a: 1\n")

    def denied(*_: object) -> None:
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr("builtins.open", denied)
    (problem,) = _problems(path)
    assert problem.value == "Permission denied"


@pytest.mark.usefixtures("_each_parser")
def test_every_key_and_value_has_its_line(tmp_path: Path) -> None:
    text = "# head\nstations:\n  - name: A\n    bays:\n    - {ct: 1,\n       cb: 2}\n"
    text += "    note: |\n      x\n\nlast:\nend: 1\n"
    tree = read_tree(_file(tmp_path, text))
    bay = ("stations", 0, "bays", 0)
    both = {path: (tree.line(path, of_key=True), tree.line(path)) for path in tree.places}
    assert both == {
        (): (2, 2),
        ("stations",): (2, 3),
        ("stations", 0): (3, 3),
        ("stations", 0, "name"): (3, 3),
        ("stations", 0, "bays"): (4, 5),
        bay: (5, 5),
        (*bay, "ct"): (5, 5),
        (*bay, "cb"): (6, 6),
        ("stations", 0, "note"): (7, 7),
        ("last",): (10, 10),
        ("end",): (11, 11),
    }
    assert tree.line((*bay, "vt", "core")) == 5
    assert tree.known((*bay, "vt", "core")) == bay
    problem = tree.problem((*bay, "cb"), "breaker", 2, "a name", of_key=True)
    assert str(problem) == f"{tree.file}:6 at stations[0].bays[0].cb: breaker: got 2, expected a name"


@pytest.mark.parametrize(
    ("path", "text"),
    [
        ((), ""),
        (("stations", 0, "bays", 2, "ct"), "stations[0].bays[2].ct"),
        ((3, "a"), "[3].a"),
        (("buses", "1"), "buses.1"),
        (("buses", "A.CB1", "x"), 'buses["A.CB1"].x'),
        (("a b",), '["a b"]'),
        (("", 0), '[""][0]'),
        (("[0]",), '["[0]"]'),
        (("no-1/2",), "no-1/2"),
    ],
)
def test_a_path_is_rendered_without_ambiguity(path: tuple[str | int, ...], text: str) -> None:
    assert render_path(path) == text


@settings(max_examples=300, deadline=None)
@given(st.text("ab1 \n\t:#-'\"[]{},&*!|>%@?<~\\e.\r", max_size=30) | st.text(max_size=30))
def test_any_text_is_read_or_refused_in_our_own_words(text: str) -> None:
    for loader in LOADERS:
        with pytest.MonkeyPatch.context() as patch:
            patch.setattr(reading, "_loader", lambda loader=loader: loader)
            try:
                tree = read_text(text, "f")
            except InputError as error:
                problems = error.problems
            else:
                problems = ()
                assert repr(read_text(write_text(tree.data), "f").data) == repr(tree.data)
        assert all(p.expectation and p.file == "f" and p.line for p in problems)
