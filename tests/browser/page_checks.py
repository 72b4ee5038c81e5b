"""What must hold of a report page in a browser: each check returns what is wrong, one line each."""

from __future__ import annotations

import base64
import re
from collections.abc import Callable, Mapping
from itertools import pairwise
from typing import Any

from selenium.webdriver import Chrome
from selenium.webdriver.common.by import By
from selenium.webdriver.common.keys import Keys
from selenium.webdriver.remote.webelement import WebElement

PHONE = 360
"""Width of a small phone in CSS pixels."""

ROWS = """return [...document.querySelectorAll('#locations-table tbody tr')].map(row => ({
  hidden: row.hidden || getComputedStyle(row).display === 'none',
  values: [...row.cells].map(cell => cell.dataset.v), tags: row.dataset.tags,
  text: [...row.cells].map(cell => cell.lastElementChild.textContent).join(' ')}))"""

CONTRAST = """
const parse = (text) => { const n = text.match(/[\\d.]+/g).map(Number); return n.length < 4 ? [...n, 1] : n; };
const light = (c) => { const f = (v) => { v /= 255; return v <= 0.04045 ? v / 12.92 : ((v + 0.055) / 1.055) ** 2.4; };
  return 0.2126 * f(c[0]) + 0.7152 * f(c[1]) + 0.0722 * f(c[2]); };
const behind = (e) => { for (; e; e = e.parentElement) { const c = parse(getComputedStyle(e).backgroundColor);
  if (c[3] === 1) return c; } return [255, 255, 255, 1]; };
const wrong = [];
let seen = 0;
const walk = document.createTreeWalker(document.body, NodeFilter.SHOW_TEXT);
while (walk.nextNode()) {
  const e = walk.currentNode.parentElement;
  if (!walk.currentNode.data.trim() || !e.checkVisibility() || e.closest('script,style,template,svg')) continue;
  const style = getComputedStyle(e), a = light(parse(style.color)), b = light(behind(e));
  const ratio = (Math.max(a, b) + 0.05) / (Math.min(a, b) + 0.05);
  const size = parseFloat(style.fontSize), large = size >= 24 || (size >= 18.66 && Number(style.fontWeight) >= 700);
  seen += 1;
  if (ratio < (large ? 3 : 4.5))
    wrong.push(`${e.tagName} ${walk.currentNode.data.trim().slice(0, 30)}: ${ratio.toFixed(2)}`);
}
return [seen, wrong];
"""

FOCUSABLE = """return [...document.querySelectorAll('a[href],button,input,select,summary,[tabindex="0"]')]
  .filter(e => e.checkVisibility() && !e.closest('template'))"""


def loads(driver: Chrome, url: str) -> list[str]:
    """No error on the console, nothing asked of a network, all parts there."""
    driver.get(url)
    log = driver.get_log("browser")  # type: ignore[no-untyped-call]  # carries no types
    wrong = [f"console: {entry['message']}" for entry in log]
    asked = driver.execute_script("return performance.getEntriesByType('resource').map(e => e.name)")
    wrong += [f"asked for {name}" for name in asked if not name.startswith("data:")]
    if not driver.title:
        wrong.append("no title")
    for part in ("summary", "plant", "locations", "cases", "register", "assumptions", "settings"):
        if not driver.find_elements(By.CSS_SELECTOR, f"#{part} h2"):
            wrong.append(f"no part {part}")
    if len(driver.find_elements(By.CSS_SELECTOR, "#plant svg")) < 1:
        wrong.append("no one-line diagram")
    notes = [e.text for e in driver.find_elements(By.CSS_SELECTOR, "[role=note]")]
    if not any("never replace a qualified engineer's review" in text for text in notes):
        wrong.append("no safety note")
    return wrong


def sorts(driver: Chrome, url: str) -> list[str]:
    """Each heading sorts its column both ways and says so; no row is lost."""
    driver.get(url)
    wrong = []
    rows = driver.execute_script(ROWS)
    headings = driver.find_elements(By.CSS_SELECTOR, "#locations-table thead th")
    buttons = driver.find_elements(By.CSS_SELECTOR, "#locations-table button.sort")
    if len(buttons) < 8:
        wrong.append(f"{len(buttons)} headings sort")
    for button in buttons:
        column = int(button.get_attribute("data-column") or -1)
        for way in ("ascending", "descending"):
            button.click()
            found = [row["values"][column] for row in driver.execute_script(ROWS)]
            if sorted(found) != sorted(row["values"][column] for row in rows):
                wrong.append(f"column {column}: rows lost")
            expected = sorted(found, key=_sort_key, reverse=way == "descending")
            if [_sort_key(x) for x in found] != [_sort_key(x) for x in expected]:
                wrong.append(f"column {column}: not {way}")
            if headings[column].get_attribute("aria-sort") != way:
                wrong.append(f"column {column}: does not say that it is {way}")
    return wrong


def _sort_key(text: str) -> tuple[int, float, str]:
    try:
        return (0, float(text), "")
    except ValueError:
        return (1, 0.0, text)


def filters(driver: Chrome, url: str) -> list[str]:
    """Words and a choice leave the rows that fit, the count says how many; without them all are back."""
    driver.get(url)
    wrong = []
    rows = driver.execute_script(ROWS)
    word = rows[-1]["values"][0]
    expected = sum(word in row["text"].lower() for row in rows)
    field = driver.find_element(By.ID, "filter")
    field.send_keys(word)
    shown = [row for row in driver.execute_script(ROWS) if not row["hidden"]]
    if len(shown) != expected or len(shown) == len(rows) or not all(word in row["text"].lower() for row in shown):
        wrong.append(f"{len(shown)} rows shown for {word!r}, expected {expected} of {len(rows)}")
    if driver.find_element(By.ID, "count").text != f"{len(shown)} of {len(rows)} locations":
        wrong.append("the count is another")
    field.clear()
    field.send_keys(" ", Keys.BACKSPACE)
    grade = next(row["tags"].split()[0] for row in rows if row["tags"])
    driver.find_element(By.CSS_SELECTOR, f"#grade option[value={grade}]").click()
    fitting = [grade in row["tags"].split() for row in rows]
    if [not row["hidden"] for row in driver.execute_script(ROWS)] != fitting:
        wrong.append(f"rows shown for {grade} are others than those")
    driver.find_element(By.CSS_SELECTOR, "#grade option").click()
    if any(row["hidden"] for row in driver.execute_script(ROWS)):
        wrong.append("rows stay hidden")
    return wrong


def opens(driver: Chrome, url: str) -> list[str]:
    """A click on a listed case, and on that of a row, opens its picture and its table; Escape closes it."""
    driver.get(url)
    wrong = []
    panel = driver.find_element(By.ID, "case")
    if panel.is_displayed():
        wrong.append("a sequence is open at first")
    for selector in ("button.case", "#locations-table button.open"):
        button = driver.find_element(By.CSS_SELECTOR, selector)
        number = button.get_attribute("data-case")
        button.click()
        title = driver.execute_script("return document.getElementById(`case-${arguments[0]}`).dataset.title", number)
        if not panel.is_displayed():
            wrong.append(f"{selector}: nothing opened")
            continue
        if driver.find_element(By.ID, "case-title").text != title:
            wrong.append(f"{selector}: another sequence opened")
        pictures = driver.find_elements(By.CSS_SELECTOR, "#case svg[role=img]")
        if len(pictures) != 1 or pictures[0].size["height"] < 100:
            wrong.append(f"{selector}: {len(pictures)} pictures")
        if len(driver.find_elements(By.CSS_SELECTOR, "#case tbody tr")) < 3:
            wrong.append(f"{selector}: no sequence of rows")
        if _focus(driver).get_attribute("id") != "case-title":
            wrong.append(f"{selector}: the focus stays behind")
        _focus(driver).send_keys(Keys.ESCAPE)
        if panel.is_displayed() or _focus(driver) != button:
            wrong.append(f"{selector}: Escape does not lead back")
    return wrong


def prints(driver: Chrome, url: str) -> list[str]:
    """The page prints to PDF, on sheets that hold its tables."""
    driver.get(url)
    made: Any = driver.execute_cdp_cmd("Page.printToPDF", {"preferCSSPageSize": True})
    data = base64.b64decode(made["data"])
    wrong = [] if data.startswith(b"%PDF-") and data.rstrip().endswith(b"%%EOF") else ["no PDF"]
    sheets = len(re.findall(rb"/Type\s*/Page\b", data))
    wrong += [] if sheets >= 3 else [f"{sheets} sheets"]
    landscape = re.findall(rb"/MediaBox\s*\[0 0 ([\d.]+) ([\d.]+)\]", data)
    wrong += [f"sheet of {w.decode()} by {h.decode()}" for w, h in landscape if float(w) <= float(h)]
    return wrong


def narrow(driver: Chrome, url: str) -> list[str]:
    """On a phone nothing sticks out, text can be read, and cells carry their headings."""
    size = {"width": PHONE, "height": 740, "deviceScaleFactor": 2, "mobile": True}
    driver.execute_cdp_cmd("Emulation.setDeviceMetricsOverride", size)
    try:
        driver.get(url)
        driver.find_element(By.CSS_SELECTOR, "button.case").click()
        width = driver.execute_script("return document.documentElement.scrollWidth")
        wrong = [] if width <= PHONE else [f"{width} pixels wide"]
        small = driver.execute_script(
            "return [...document.querySelectorAll('p,td,th,dt,dd,button,label,summary')]"
            ".filter(e => e.checkVisibility() && e.textContent.trim())"
            ".filter(e => parseFloat(getComputedStyle(e).fontSize) < 12).map(e => e.outerHTML)"
        )
        wrong += [f"small text: {html[:60]}" for html in small]
        labels = driver.find_elements(By.CSS_SELECTOR, "#locations-table tbody tr:first-child .l")
        if not labels or not all(e.is_displayed() for e in labels):
            wrong.append("cells without their headings")
        return wrong
    finally:
        driver.execute_cdp_cmd("Emulation.clearDeviceMetricsOverride", {})


NAMED = frozenset(
    {"button", "link", "searchbox", "textbox", "combobox", "table", "image", "img", "region", "navigation"}
)


def accessible(driver: Chrome, url: str) -> list[str]:
    """Landmarks, headings in order, names of everything that needs one, as the browser itself computes them."""
    driver.get(url)
    driver.find_element(By.CSS_SELECTOR, "button.case").click()
    tree: Any = driver.execute_cdp_cmd("Accessibility.getFullAXTree", {})
    nodes = [n for n in tree["nodes"] if not n.get("ignored")]
    roles = [n["role"]["value"] for n in nodes]
    wrong = [f"no {role}" for role in ("banner", "navigation", "main", "contentinfo", "search") if role not in roles]
    wrong += [
        f"a {n['role']['value']} without a name"
        for n in nodes
        if n["role"]["value"] in NAMED and not n.get("name", {}).get("value", "").strip()
    ]
    if not driver.execute_script("return document.documentElement.lang"):
        wrong.append("no language")
    levels = driver.execute_script(
        "return [...document.querySelectorAll('h1,h2,h3,h4')].filter(e => e.checkVisibility()).map(e => +e.tagName[1])"
    )
    if levels[:1] != [1] or levels.count(1) != 1:
        wrong.append("not one main heading")
    wrong += [f"heading {b} after {a}" for a, b in pairwise(levels) if b > a + 1]
    twice = driver.execute_script(
        "const ids = [...document.querySelectorAll('[id]')].map(e => e.id);"
        "return ids.filter((id, i) => ids.indexOf(id) !== i)"
    )
    wrong += [f"id twice: {name}" for name in twice]
    return wrong


def contrast(driver: Chrome, url: str) -> list[str]:
    """Text against what is behind it: 4.5 to 1, or 3 to 1 where it is large (WCAG 2, 1.4.3)."""
    driver.get(url)
    driver.execute_script("for (const e of document.querySelectorAll('details')) e.open = true")
    driver.find_element(By.CSS_SELECTOR, "button.case").click()
    seen, wrong = driver.execute_script(CONTRAST)
    return [*(["hardly any text"] if seen < 100 else []), *wrong]


def keyboard(driver: Chrome, url: str) -> list[str]:
    """Tab reaches everything in the order of the page, the focus can be seen, Enter works."""
    driver.get(url)
    expected: list[WebElement] = driver.execute_script(FOCUSABLE)
    found: list[WebElement] = []
    wrong: list[str] = []
    for _ in expected:
        _focus(driver).send_keys(Keys.TAB)
        here = _focus(driver)
        found.append(here)
        outline = driver.execute_script("return getComputedStyle(arguments[0]).outlineStyle", here)
        if outline == "none":
            wrong.append(f"no sign of the focus on {(here.get_attribute('outerHTML') or '')[:60]}")
    if found != expected:
        n = next((i for i, (a, b) in enumerate(zip(found, expected, strict=True)) if a != b), 0)
        html = [(x[n].get_attribute("outerHTML") or "")[:60] for x in (found, expected)]
        wrong.append(f"stop {n + 1} of Tab is {html[0]}, expected {html[1]}")
    heading = driver.find_element(By.CSS_SELECTOR, "#locations-table button.sort")
    heading.send_keys(Keys.ENTER)
    if driver.find_element(By.CSS_SELECTOR, "#locations-table th").get_attribute("aria-sort") != "ascending":
        wrong.append("Enter does not sort")
    driver.find_element(By.CSS_SELECTOR, "button.case").send_keys(Keys.ENTER)
    if not driver.find_element(By.ID, "case").is_displayed():
        wrong.append("Enter does not open")
    return wrong


def _focus(driver: Chrome) -> WebElement:
    return driver.switch_to.active_element


Check = Callable[[Chrome, str], list[str]]
CHECKS: Mapping[str, Check] = {
    check.__name__: check
    for check in (loads, sorts, filters, opens, prints, narrow, accessible, contrast, keyboard)
}
