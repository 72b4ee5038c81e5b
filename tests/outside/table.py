"""Print the values from outside beside ours: ``python tests/outside/table.py``; exit status 1 if one is out."""

from __future__ import annotations

import sys
from collections.abc import Mapping
from collections.abc import Set as AbstractSet
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
if __name__ == "__main__":
    sys.path[0] = str(ROOT)  # the project, and not this folder

from tests.outside.records import Compared, Value  # noqa: E402  # only now can they be found
from tests.outside.suite import last_line, records  # noqa: E402

WIDTHS = (28, 50, 62, 40, 40, 10, 9)
HEAD = ("subject", "source", "value", "outside", "ours", "difference", "of tol.")


def shown(value: Value) -> str:
    """A value in one line."""
    if isinstance(value, Mapping):
        return ", ".join(f"{name} {shown(v)}" for name, v in sorted(value.items()))
    if isinstance(value, AbstractSet):
        return ", ".join(sorted(value)) or "none"
    return value if isinstance(value, str) else f"{float(value):.8g}"


def cut(text: str, width: int) -> str:
    """A cell of a width."""
    return text.ljust(width) if len(text) <= width else f"{text[: width - 1]}…"


def line(c: Compared) -> str:
    """One row."""
    r = c.record
    cells = (
        r.subject, f"{r.source} [{r.quality}]", r.what + (" *" if r.whole else ""), shown(c.value), shown(c.ours),
        f"{c.difference:.2g}", f"{c.units:.2g}" + ("" if c.fits else " OUT"),
    )  # fmt: skip
    return "  ".join(cut(text, width) for text, width in zip(cells, WIDTHS, strict=True)).rstrip()


def wide(c: Compared) -> str:
    """One row, nothing cut, cells parted by tabs."""
    r = c.record
    cells = (
        r.subject, r.source, str(r.quality), r.what, shown(c.value), shown(c.ours), f"{c.difference:g}", f"{c.units:g}",
    )  # fmt: skip
    return "\t".join(cells)


def main(arguments: list[str]) -> int:
    """Print the table; with ``--wide`` cells are not cut."""
    show = wide if "--wide" in arguments else line
    if show is line:
        print("  ".join(cut(text, width) for text, width in zip(HEAD, WIDTHS, strict=True)).rstrip())
    rows = []
    for r in records():
        rows.append(r.compared())
        print(show(rows[-1]))
    print("* a whole clearing sequence, or the odds of a whole scheme" if show is line else "")
    print(last_line(rows))
    return int(not all(c.fits for c in rows))


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
