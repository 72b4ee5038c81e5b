"""Writing plain data so that it reads back the same, and never half a file."""

from __future__ import annotations

import os
import re
import stat
from pathlib import Path
from typing import Any

import pytest
import yaml
from hypothesis import given, settings
from hypothesis import strategies as st

from schemesim.errors import InputError
from schemesim.scenario import reading
from schemesim.scenario.locate import Data
from schemesim.scenario.reading import MAX_BYTES, read_text, read_tree
from schemesim.scenario.writing import write_file, write_text

LOADERS = [yaml.SafeLoader, *([yaml.CSafeLoader] if yaml.__with_libyaml__ else [])]


@pytest.fixture(params=LOADERS, ids=lambda loader: str(loader.__name__))
def _each_parser(request: pytest.FixtureRequest, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(reading, "_loader", lambda: request.param)


TRICKY = [
    *[
        "no",
        "Yes",
        "on",
        "OFF",
        "y",
        "N",
        "True",
        "FALSE",
        "Null",
        "NULL",
        "~",
        "",
        "inf",
        "nan",
        "none",
        "e5",
    ],
    *["1", "-0", "+7", "1.", ".5", "1e-3", "5e-324", ".inf", ".nan", "12:30", "017", "0o17", "0x1F", "1_000"],
    *["2024-01-01", "2024-01-01 10:00:00", "=", "<<", ".", "a:b", "a#b", "999999999999999999999", "1e999"],
    *[
        "null",
        "true",
        " x",
        "x ",
        "a: b",
        "#c",
        "a #c",
        "- a",
        "-",
        "?",
        "? a",
        ":",
        "a:",
        "!x",
        "&x",
        "*x",
        "%x",
    ],
    *[
        "@x",
        "`x",
        "|",
        ">",
        "[",
        "]",
        "{",
        "}",
        ",",
        "'",
        '"',
        "'a'",
        '"a"',
        "\\",
        "\\n",
        "---",
        "...",
        "--- a",
    ],
    *[
        "a\nb",
        "a\nb\n",
        "a\n\nb\n\n",
        "\na",
        " a\nb",
        "a\n b",
        "a \nb",
        "a\n\tb",
        "---\n---",
        "#a\n#b",
        "\n",
        "a\r\nb",
    ],
    *[
        "\t",
        "\0",
        "\x1b",
        "\x7f",
        "\x85",
        "\xa0",
        "\u2028",
        "\u2029",
        "\ufeff",
        "\ufffe",
        "\U0010ffff",
        "é",
        "\U0001f600",
    ],
    *["x" * 3000, "x y " * 500, "é" * 700, "CB1 (north)", "a/b", "a, b", "no such"],
]


def _same(left: Data, right: Data) -> bool:
    """Equal in value, type, order of keys and sign of zero."""
    return repr(left) == repr(right)


@pytest.mark.usefixtures("_each_parser")
@pytest.mark.parametrize("text", TRICKY, ids=lambda text: repr(text[:20]))
def test_a_tricky_text_survives_writing_as_value_key_and_item(text: str) -> None:
    shapes: list[Data] = [
        text,
        {"a": text},
        {text: text, "z": [text]},
        [text, "b"],
        [[text], {text: {text: 1}}],
        {"a": {text: [[]]}},
    ]
    for data in shapes:
        assert _same(read_text(write_text(data), "f").data, data)


_LEAVES = st.one_of(
    st.none(),
    st.booleans(),
    st.integers(-(10**18) + 1, 10**18 - 1),
    st.floats(),
    st.text(st.characters(codec="utf-8"), max_size=12),
    st.text("ab \n\t:#-'\"[]{},&*!|>%@`\\~0123456789.eE+_\r\u2028", max_size=8),
    st.sampled_from(TRICKY),
)
_KEYS = st.one_of(st.text(st.characters(codec="utf-8"), max_size=8), st.sampled_from(TRICKY))
_DATA: st.SearchStrategy[Data] = st.recursive(
    _LEAVES,
    lambda inner: st.one_of(st.lists(inner, max_size=4), st.dictionaries(_KEYS, inner, max_size=4)),
    max_leaves=15,
)


@settings(max_examples=400, deadline=None)
@given(_DATA)
def test_what_is_written_reads_back_the_same(data: Data) -> None:
    text = write_text(data)
    for loader in LOADERS:
        with pytest.MonkeyPatch.context() as patch:
            patch.setattr(reading, "_loader", lambda loader=loader: loader)
            again = read_text(text, "f").data
        assert _same(again, data)
        assert write_text(again) == text


def test_what_an_older_reader_would_misread_is_quoted() -> None:
    words = [
        "no",
        "Yes",
        "on",
        "OFF",
        "y",
        "N",
        "null",
        "true",
        "1e-3",
        "12:30",
        "017",
        "0o17",
        "1_000",
        "2024-01-01",
    ]
    written = write_text(list(words))
    assert re.findall('"(.*?)"', written) == words
    assert yaml.safe_load(written) == words


def test_writing_is_block_style_in_the_given_order() -> None:
    data: Data = {
        "b": 1,
        "a": {"x": [1, 2.5], "e": [], "m": {}},
        "l": [{"k": 1e-7, "t": "p\nq\n"}, [["s"], None]],
    }
    assert write_text(data) == (
        "b: 1\na:\n  x: [1, 2.5]\n  e: []\n  m: {}\nl:\n"
        "  - k: 1e-07\n    t: |\n      p\n      q\n  -\n    - [s]\n    - null\n".replace(
            "  -\n    - [s]", "  - - [s]"
        )
    )


def _cycle() -> Any:
    data: list[Any] = []
    data.append(data)
    return data


def _wide() -> Any:
    data: Any = [1]
    for _ in range(30):
        data = [data] * 9
    return data


@pytest.mark.parametrize(
    ("data", "message"),
    [
        ({"a": {1: 2}}, "at a: key: got 1, expected a text as key"),
        ({"a": [(1, 2)]}, r"at a\[0\]: data: got \(1, 2\)"),
        ({"a": b"x"}, "at a: data: got b'x'"),
        ({"a": 10**18}, "at a: number: .* 18 digits"),
        ({"a": -(10**5000)}, "at a: number: .* 18 digits"),
        ({"a": "\ud800"}, "surrogate"),
        (_cycle(), "levels"),
        (_wide(), "keys and values"),
        (["x" * MAX_BYTES], "bytes when written"),
    ],
    ids=["key", "tuple", "bytes", "int", "huge int", "surrogate", "cycle", "wide", "long"],
)
def test_what_could_not_be_read_back_is_not_written(tmp_path: Path, data: Any, message: str) -> None:
    with pytest.raises(InputError, match=message):
        write_file(tmp_path / "out.yaml", data)
    assert list(tmp_path.iterdir()) == []


def test_a_file_is_written_whole(tmp_path: Path) -> None:
    path = tmp_path / "out.yaml"
    write_file(path, {"a": "no"})
    assert read_tree(path).data == {"a": "no"}
    path.chmod(0o640)
    link = tmp_path / "link.yaml"
    link.symlink_to(path)
    write_file(link, {"a": 2})
    assert path.read_bytes() == b"a: 2\n"
    assert link.is_symlink()
    assert stat.S_IMODE(path.stat().st_mode) == 0o640
    assert sorted(tmp_path.iterdir()) == [link, path]


@pytest.mark.parametrize("step", ["fsync", "replace"])
def test_a_failure_while_writing_leaves_the_old_file(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, step: str
) -> None:
    path = tmp_path / "out.yaml"
    path.write_text("a: 1\n")

    def full(*_: object) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, step, full)
    with pytest.raises(InputError, match="No space left on device"):
        write_file(path, {"a": 2})
    assert path.read_bytes() == b"a: 1\n"
    assert list(tmp_path.iterdir()) == [path]


def test_a_place_that_cannot_be_written_is_refused(tmp_path: Path) -> None:
    for path in (tmp_path, tmp_path / "none" / "out.yaml", tmp_path / "a\0b", tmp_path / ("x" * 300)):
        with pytest.raises(InputError) as caught:
            write_file(path, {"a": 1})
        assert caught.value.problems[0].file == str(path)
    assert list(tmp_path.iterdir()) == []
