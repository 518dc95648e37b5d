"""The page in a real browser: Debian's Chromium, driven by selenium. One browser for the whole module.

What it must pass is a small check of our own, after the Web Content Accessibility Guidelines 2.2, level AA (contrast
1.4.3 and 1.4.11, headings and tables 1.3.1, texts for pictures 1.1.1, keyboard 2.1.1, reflow 1.4.10, language 3.1.1).
"""

from __future__ import annotations

import json
import shutil
import tempfile
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pandas as pd
import pytest
from club_log import club_overview, overview_of, small_log
from hostile_names import HOSTILE

from journeys.questions.overview import Overview
from journeys.show.html.page import summary_html

CHROMIUM, DRIVER = shutil.which("chromium"), shutil.which("chromedriver")
pytestmark = [
    pytest.mark.optional,
    pytest.mark.skipif(CHROMIUM is None or DRIVER is None, reason="optional engine missing: chromium, chromium-driver"),
]
OPTIONS = (
    "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
    "--disable-background-networking", "--disable-component-update", "--disable-sync", "--disable-dev-shm-usage",
)  # fmt: skip
WIDTHS = (360, 1280)

TOO_WIDE = "return document.documentElement.scrollWidth - document.documentElement.clientWidth"

# What stands out of the screen, unless in a box of its own that scrolls.
OUTSIDE = """
const wide = document.documentElement.clientWidth;
return [...document.querySelectorAll('body *')].filter(one => {
  if (one.closest('.box') && !one.matches('.box') || one.closest('svg') || one.matches('.skip')) return false;
  const place = one.getBoundingClientRect();
  return place.width > 0 && (place.right > wide + 1 || place.left < -1);
}).map(one => one.outerHTML.slice(0, 120));
"""

# Contrast of every text with what is painted behind it, and of every mark in a picture with the page.
CONTRAST = """
const numbers = colour => colour.match(/[\\d.]+/g).map(Number);
const light = ([r, g, b]) => { const [x, y, z] = [r, g, b].map(v => v / 255)
  .map(v => v <= 0.04045 ? v / 12.92 : ((v + 0.055) / 1.055) ** 2.4); return 0.2126 * x + 0.7152 * y + 0.0722 * z; };
const ratio = (a, b) => { const [x, y] = [light(a), light(b)].sort((p, q) => q - p); return (x + 0.05) / (y + 0.05); };
const behind = one => { for (let at = one; at; at = at.parentElement) {
  const c = numbers(getComputedStyle(at).backgroundColor); if (c.length < 4 || c[3] > 0.99) return c; }
  return [255, 255, 255]; };
const texts = [...document.querySelectorAll('body *')].filter(one => [...one.childNodes].some(
  child => child.nodeType === 3 && child.data.trim()) && !one.matches('title, desc'));
const marks = [...document.querySelectorAll('svg circle, svg .curve, svg .seen, svg .mark, svg .span, svg .axis')];
return [
  ...texts.map(one => [one.closest('svg') ? getComputedStyle(one).fill : getComputedStyle(one).color, one, 4.5]),
  ...marks.map(one => { const s = getComputedStyle(one); return [s.stroke === 'none' ? s.fill : s.stroke, one, 3.0]; }),
].map(([colour, one, least]) => [ratio(numbers(colour), behind(one)), least, one.outerHTML.slice(0, 100)])
 .filter(([got, least]) => got < least).concat([[texts.length, marks.length, 'counted']]);
"""

# Language, landmarks, headings, texts of pictures, tables, and what the keyboard must reach.
FAULTS = """
const faults = [], all = kind => [...document.querySelectorAll(kind)];
const say = (ok, what) => { if (!ok) faults.push(what); };
say(document.documentElement.lang === 'en', 'language');
say(document.title.trim().length > 0, 'title');
say(all('main').length === 1 && all('header').length === 1 && all('nav[aria-label]').length === 1, 'landmarks');
say(all('h1').length === 1, 'one h1');
let last = 0;
all('h1,h2,h3,h4,h5,h6').forEach(one => { const level = Number(one.tagName[1]);
  say(level <= last + 1, 'skipped: ' + one.textContent); say(one.textContent.trim(), 'empty heading'); last = level; });
all('svg').forEach(one => { say(one.getAttribute('role') === 'img', 'role of a picture');
  ['aria-labelledby', 'aria-describedby'].forEach(name => {
    const told = document.getElementById(one.getAttribute(name));
    say(told && told.textContent.trim(), name + ' of a picture'); }); });
all('table').forEach(one => { say(one.caption && one.caption.textContent.trim(), 'caption');
  say([...one.querySelectorAll('th')].every(th => ['row', 'col'].includes(th.scope)), 'scope');
  say(one.tHead && [...one.tHead.rows[0].cells].every(th => th.textContent.trim()), 'empty head');
  say(new Set([...one.rows].map(row => row.cells.length)).size === 1, 'ragged table'); });
all('.box').forEach(one => say(one.tabIndex === 0 && one.getAttribute('role') === 'region'
  && one.getAttribute('aria-label'), 'box for the keyboard'));
all('a[href^="#"]').forEach(one => say(document.getElementById(one.hash.slice(1)), 'link to nowhere'));
const ids = all('[id]').map(one => one.id);
say(new Set(ids).size === ids.length, 'ids twice');
return faults;
"""

# Parts of words, dates, and numbers with their percent sign that stand on two lines though one would hold them.
BROKEN = """
const found = [], one = document.createRange();
const walker = document.createTreeWalker(document.body, NodeFilter.SHOW_TEXT,
  text => text.parentElement.closest('svg, pre') ? NodeFilter.FILTER_REJECT : NodeFilter.FILTER_ACCEPT);
while (walker.nextNode()) {
  const text = walker.currentNode;
  const box = text.parentElement.closest('th, td, p, li, dt, dd, h1, h2, caption, figcaption');
  for (const part of text.data.matchAll(/[\\d,.]+(?:[–-][\\d,.–-]+)+\\)?|[\\d.,]+\\s%|[\\p{L}\\d]+/gu)) {
    one.setStart(text, part.index); one.setEnd(text, part.index + part[0].length);
    const lines = [...one.getClientRects()].filter(line => line.width > 0);
    const width = lines.reduce((sum, line) => sum + line.width, 0);
    const tops = new Set(lines.map(line => Math.round(line.top)));
    if (tops.size > 1 && box && width < box.clientWidth - 32) found.push(part[0] + ' in ' + text.data.slice(0, 60)); } }
return found;
"""


@pytest.fixture(scope="module")
def browser() -> Iterator[Any]:
    from selenium import webdriver
    from selenium.webdriver.chrome.service import Service

    with tempfile.TemporaryDirectory() as profile:
        options = webdriver.ChromeOptions()
        options.binary_location = str(CHROMIUM)
        for one in (*OPTIONS, f"--user-data-dir={profile}"):
            options.add_argument(one)
        options.set_capability("goog:loggingPrefs", {"browser": "ALL", "performance": "ALL"})
        driver = webdriver.Chrome(options=options, service=Service(str(DRIVER)))
        yield driver
        driver.quit()


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("pages")


@pytest.fixture(scope="module")
def touched() -> Overview:
    log = small_log(240)
    basket = log[log["what"] == "visit"].iloc[::2].assign(what="basket")
    log = pd.concat([log, basket.assign(when=basket["when"] + pd.Timedelta(minutes=5))])
    return overview_of(log, touchpoints=["visit", "basket"], stages=["visit", "look"])


@pytest.fixture
def see(browser: Any, folder: Path) -> Callable[..., None]:
    """Open a page at a width, light or dark."""

    def opened(text: str, name: str, width: int = 1280, scheme: str = "light") -> None:
        path = folder / f"{name}.html"
        path.write_bytes(text.encode("utf-8", "replace"))
        features = [{"name": "prefers-color-scheme", "value": scheme}]
        browser.execute_cdp_cmd("Emulation.setEmulatedMedia", {"features": features})
        size = {"width": width, "height": 800, "deviceScaleFactor": 1, "mobile": width < 500}
        browser.execute_cdp_cmd("Emulation.setDeviceMetricsOverride", size)
        for kind in ("browser", "performance"):
            browser.get_log(kind)
        browser.get(path.as_uri())

    return opened


def requests(browser: Any) -> list[str]:
    """Return the addresses that were asked for since the page was opened."""
    events = [json.loads(entry["message"])["message"] for entry in browser.get_log("performance")]
    return [event["params"]["request"]["url"] for event in events if event["method"] == "Network.requestWillBeSent"]


@pytest.mark.parametrize("width", WIDTHS)
@pytest.mark.parametrize("which", ["club", "touched"])
def test_the_page_opens_fits_and_asks_for_nothing(
    browser: Any, see: Callable[..., None], touched: Overview, which: str, width: int
) -> None:
    see(summary_html(club_overview() if which == "club" else touched), which, width)
    assert browser.get_log("browser") == []
    asked = requests(browser)
    assert [url for url in asked if not url.startswith("data:")] == [browser.current_url]
    assert browser.execute_script(TOO_WIDE) == 0
    assert browser.execute_script(OUTSIDE) == []
    assert browser.execute_script(BROKEN) == []


@pytest.mark.parametrize("scheme", ["light", "dark"])
@pytest.mark.parametrize("which", ["club", "touched"])
def test_texts_and_marks_stand_out(
    browser: Any, see: Callable[..., None], touched: Overview, which: str, scheme: str
) -> None:
    see(summary_html(club_overview() if which == "club" else touched), which, scheme=scheme)
    paper = browser.execute_script("return getComputedStyle(document.body).backgroundColor")
    assert paper == {"light": "rgb(255, 255, 255)", "dark": "rgb(21, 24, 28)"}[scheme]
    *faint, (texts, marks, _) = browser.execute_script(CONTRAST)
    assert faint == []
    assert texts > 100
    assert marks > 8


@pytest.mark.parametrize("which", ["club", "touched"])
def test_the_page_can_be_read_without_seeing_it(
    browser: Any, see: Callable[..., None], touched: Overview, which: str
) -> None:
    see(summary_html(club_overview() if which == "club" else touched), which)
    assert browser.execute_script(FAULTS) == []


def test_the_checks_find_what_they_are_for(browser: Any, see: Callable[..., None]) -> None:
    bad = (
        "<!DOCTYPE html><html><body><h2>late</h2><p style='color:#999;background:#fff'>faint</p><svg></svg>"
        "<table><tr><th>x</th></tr></table><div style='width:3000px'>wide</div>"
        "<p style='width:8em'>it is now 2025-04-29</p><p style='width:8em;word-break:break-all'>a log of missing "
        "customers</p><img src='missing.png'></body></html>"
    )
    see(bad, "bad", 360)
    wanted = {"language", "title", "landmarks", "one h1", "skipped: late", "role of a picture", "caption", "scope"}
    assert wanted <= set(browser.execute_script(FAULTS))
    assert len(browser.execute_script(OUTSIDE)) >= 1
    assert {told.partition(" in ")[0] for told in browser.execute_script(BROKEN)} == {"2025-04-29", "customers"}
    *faint, _ = browser.execute_script(CONTRAST)
    assert ["faint" in found[2] for found in faint] == [True]
    assert any("missing.png" in url for url in requests(browser))
    assert browser.get_log("browser") != []


def test_the_keyboard_reaches_the_numbers_and_scrolls_a_table(browser: Any, see: Callable[..., None]) -> None:
    from selenium.webdriver.common.keys import Keys

    see(summary_html(club_overview()), "club", 360)
    body = browser.find_element("css selector", "body")
    body.send_keys(Keys.TAB)
    first = browser.switch_to.active_element
    assert first.get_attribute("href").endswith("#numbers")
    assert browser.execute_script("return arguments[0].getBoundingClientRect().left", first) == 0
    box = browser.find_element("css selector", ".box[aria-label='Moves out of each state, in percent']")
    browser.execute_script("arguments[0].focus()", box)
    assert browser.execute_script("return arguments[0].scrollWidth > arguments[0].clientWidth", box)
    for _ in range(5):
        box.send_keys(Keys.ARROW_RIGHT)
    assert browser.execute_async_script(
        "const [box, done] = arguments; setTimeout(() => done(box.scrollLeft), 400)", box
    ) > 0  # fmt: skip
    # the names of the rows stay in view
    head = browser.find_element("css selector", ".box[aria-label='Moves out of each state, in percent'] tbody th")
    assert browser.execute_script("return Math.round(arguments[0].getBoundingClientRect().left)", head) == 16


@pytest.mark.parametrize("kind", HOSTILE)
def test_hostile_names_show_as_text(browser: Any, see: Callable[..., None], kind: str) -> None:
    name = HOSTILE[kind]
    overview = overview_of(small_log(visit=name, won=name + "!"), converted=[name + "!"])
    see(summary_html(overview), "hostile", 360)
    assert browser.get_log("browser") == []
    assert [url for url in requests(browser) if not url.startswith("data:")] == [browser.current_url]
    assert browser.execute_script(TOO_WIDE) == 0
    assert browser.execute_script(OUTSIDE) == []
    assert browser.execute_script(FAULTS) == []
    seen = "".join(char if char.isprintable() else " " for char in name)
    seen = seen if kind != "long" else f"{'w' * 24}… (10,000 characters, "
    told = browser.execute_script("return [...document.querySelectorAll('tbody th')].map(one => one.textContent)")
    assert any(cell.startswith(seen) for cell in told)
    assert browser.title.startswith("How many ")


def test_prints_on_paper_in_ink(browser: Any, see: Callable[..., None]) -> None:
    see(summary_html(club_overview()), "club", scheme="dark")
    features = [{"name": "prefers-color-scheme", "value": "dark"}]
    browser.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": "print", "features": features})
    browser.execute_cdp_cmd(
        "Emulation.setDeviceMetricsOverride", {"width": 690, "height": 1000, "deviceScaleFactor": 1, "mobile": False}
    )
    assert browser.execute_script("return getComputedStyle(document.body).backgroundColor") == "rgb(255, 255, 255)"
    assert not browser.find_element("css selector", "nav").is_displayed()
    wide = "return [...document.querySelectorAll('table')].filter(t => t.getBoundingClientRect().right > 690)"
    assert [one.get_attribute("innerText")[:40] for one in browser.execute_script(wide)] == []
    *faint, _ = browser.execute_script(CONTRAST)
    assert faint == []
    browser.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": "", "features": []})
