"""The report page in a real browser: Debian's Chromium, without a window, driven over its own protocol.

Packages ``chromium`` and ``chromium-driver`` must be there; ``-m "not browser"`` leaves these tests out.
"""

from __future__ import annotations

import shutil
from collections.abc import Iterator
from pathlib import Path

import pytest
from selenium.webdriver import Chrome, ChromeOptions
from selenium.webdriver.chrome.service import Service

from schemesim.scenario import load_scenario
from schemesim.scenario.reporting import report_scenario
from tests.browser.page_checks import CHECKS

ROOT = Path(__file__).resolve().parents[2]
PROGRAMS = {"chromium": "/usr/bin/chromium", "chromium-driver": "/usr/bin/chromedriver"}
FLAGS = (
    "--headless",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-dev-shm-usage",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--window-size=1280,900",
)

pytestmark = pytest.mark.browser


@pytest.fixture(scope="module")
def driver(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Chrome]:
    missing = [package for package, program in PROGRAMS.items() if shutil.which(program) is None]
    if missing:
        pytest.fail(
            f"the browser is missing: apt-get install -y {' '.join(missing)}; "
            'or leave these tests out: python -m pytest -m "not browser"'
        )
    options = ChromeOptions()
    options.binary_location = PROGRAMS["chromium"]
    for flag in (*FLAGS, f"--user-data-dir={tmp_path_factory.mktemp('profile')}"):
        options.add_argument(flag)
    options.set_capability("goog:loggingPrefs", {"browser": "ALL"})
    browser = Chrome(options=options, service=Service(PROGRAMS["chromium-driver"]))
    try:
        yield browser
    finally:
        browser.quit()


@pytest.fixture(scope="module")
def page(tmp_path_factory: pytest.TempPathFactory) -> Path:
    scenario = load_scenario(ROOT / "tests" / "data" / "small.yaml")
    few = [at for at in scenario.frequencies if at.section in ("L1", "F1", "Alder.B1", "G1")]
    assert len(few) >= 4
    return report_scenario(scenario, locations=few, max_cases=3).save(tmp_path_factory.mktemp("page") / "small.html")


@pytest.mark.parametrize("name", CHECKS)
def test_the_page(driver: Chrome, page: Path, name: str) -> None:
    assert CHECKS[name](driver, page.as_uri()) == []


BROKEN = {
    "a script that stops": ('"use strict";', '"use strict"; throw new Error("broken");', "loads"),
    "a picture from the network": ("<main", '<img alt="x" src="https://example.invalid/x.png"><main', "loads"),
    "no safety note": ("never replace a qualified", "replace a qualified", "loads"),
    "rows that do not move": ("table.tBodies[0].append(...keyed", "[].concat(...keyed", "sorts"),
    "an order that is not told": ('down ? "descending" : "ascending"', '"none"', "sorts"),
    "a filter that hides nothing": ("row.hidden = !fits;", "", "filters"),
    "a panel that stays shut": ("panel.hidden = false;", "", "opens"),
    "a sequence without its picture": (
        'label(one("case-body")',
        'one("case-body").querySelector("svg").remove(); label(one("case-body")',
        "opens",
    ),
    "nothing on paper": ("@media print {", "@media print { main { display: none; }", "prints"),
    "a line wider than a phone": ("<main", '<p style="width: 900px">wide</p><main', "narrow"),
    "a field without a name": ("<label>Show rows with <input", "<label>Show</label><label><input", "accessible"),
    "no main part": ('<main id="main" tabindex="-1">', '<div id="main" tabindex="-1">', "accessible"),
    "pale text": ("--quiet: #50565c", "--quiet: #b0b6bc", "contrast"),
    "a stop out of turn": ('id="filter"', 'id="filter" tabindex="3"', "keyboard"),
    "a focus that cannot be seen": ("outline: 3px solid var(--focus)", "outline: none", "keyboard"),
}  # fmt: skip
"""What is broken: the text replaced, what with, and the check that must find it."""


@pytest.mark.parametrize("name", BROKEN)
def test_a_broken_page_is_found(driver: Chrome, page: Path, tmp_path: Path, name: str) -> None:
    old, new, check = BROKEN[name]
    text = page.read_text(encoding="utf-8")
    assert old in text
    broken = tmp_path / "broken.html"
    broken.write_text(text.replace(old, new), encoding="utf-8")
    assert CHECKS[check](driver, broken.as_uri()) != []
