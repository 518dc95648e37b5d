"""The page: its sections, that its numbers are those of summary.csv, and that names from the data stay text."""

from __future__ import annotations

import re
import time
from collections import Counter
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from club_log import club_fit, club_overview, overview_of, small_log
from hostile_names import HOSTILE

import journeys as jn
from journeys.questions.overview import Overview
from journeys.show.html.page import summary_html
from journeys.show.html.svg import Axis, axis_over
from journeys.show.page import summary_markdown
from journeys.show.rows import change
from journeys.show.sections import sections
from journeys.show.words import amount_with_interval, percent, share_with_interval

# Findings, lines of which some are sums of counts, and words with numbers in them.
NOT_ESTIMATES = {
    "What was left out or looked odd", "From the plain count to the expected share", "Checks of the model",
}  # fmt: skip
VOID = {"meta", "link", "br", "wbr", "line", "circle", "path", "polygon"}


class Page(HTMLParser):
    """What stands on a page: elements, texts, and tables as rows of cells, by their caption."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.open: list[str] = []
        self.elements: list[tuple[str, dict[str, str | None]]] = []
        self.tables: dict[str, list[list[str]]] = {}
        self.headings: list[str] = []
        self.words = ""
        self._caption, self._rows = "", [[""]]
        self.feed(text)
        assert not self.open, f"never closed: {self.open}"

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.elements.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)
        if tag == "table":
            self._caption, self._rows = "", []
        if tag == "tr":
            self._rows.append([])
        if tag in ("td", "th"):
            self._rows[-1].append("")
        if tag == "h2":
            self.headings.append("")

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.elements.append((tag, dict(attrs)))

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag
        if tag == "table":
            self.tables[self._caption] = self._rows

    def handle_data(self, data: str) -> None:
        self.words += data
        if "caption" in self.open:
            self._caption += data
        if "td" in self.open or "th" in self.open:
            self._rows[-1][-1] += data
        if "h2" in self.open:
            self.headings[-1] += data


def of(tag: str, page: Page) -> list[dict[str, str | None]]:
    return [attributes for name, attributes in page.elements if name == tag]


@pytest.fixture(scope="module")
def club_page() -> Page:
    return Page(summary_html(club_overview()))


@pytest.fixture(scope="module")
def touched() -> Overview:
    """A log with touchpoints, money nobody asked for, and few people."""
    log = small_log(240)
    basket = log[log["what"] == "visit"].iloc[::2].assign(what="basket")
    log = pd.concat([log, basket.assign(when=basket["when"] + pd.Timedelta(minutes=5))])
    return overview_of(log, touchpoints=["visit", "basket"], stages=["visit", "look"])


def test_the_sections_are_those_of_the_markdown_page(club_page: Page) -> None:
    titles = re.findall(r"^## (.*)$", summary_markdown(club_overview()), flags=re.MULTILINE)
    assert club_page.headings == titles
    assert len(titles) == 17
    links = [one["href"] for one in of("a", club_page)]
    ids = {one["id"] for _, one in club_page.elements if "id" in one}
    assert {link.removeprefix("#") for link in links if link} <= ids


def test_nothing_comes_from_elsewhere_and_nothing_runs(club_page: Page) -> None:
    text = summary_html(club_overview())
    assert not re.search(r"https?:|//[a-z]|url\(|@import|<script|\son\w+=", text)
    assert {name for name, _ in club_page.elements}.isdisjoint({"script", "img", "iframe", "object", "form"})
    (policy,) = [one["content"] for one in of("meta", club_page) if one.get("http-equiv")]
    assert policy is not None
    assert "default-src 'none'" in policy
    assert len(text.encode()) < 1_000_000


def test_tables_have_captions_heads_and_a_box_that_can_be_reached(club_page: Page) -> None:
    boxes = [one for one in of("div", club_page) if "box" in str(one.get("class"))]
    assert len(boxes) == len(of("table", club_page)) == len(of("caption", club_page)) > 10
    assert all(one["tabindex"] == "0" and one["role"] == "region" and one["aria-label"] for one in boxes)
    assert {one.get("scope") for one in of("th", club_page)} == {"col", "row"}


def test_pictures_say_in_words_what_they_show(club_page: Page) -> None:
    pictures = of("svg", club_page)
    ids = [one["id"] for _, one in club_page.elements if "id" in one]
    assert len(ids) == len(set(ids))
    assert len(pictures) >= 8
    for one in pictures:
        assert one["role"] == "img"
        assert {one["aria-labelledby"], one["aria-describedby"]} <= set(ids)
    told = club_page.words
    assert re.search(r"basket 52, interval 50\.1 to 53\.8", told)
    assert "half by day 22.3 (21.7–22.8)" in told


def shown(row: pd.Series) -> set[str]:
    """Every way in which a row of summary.csv may stand on the page."""
    numbers = [row[name] for name in ("estimate", "low", "high")]
    hundred = {name: 100 * row[name] for name in ("estimate", "low", "high")}
    ways = {percent(row["estimate"]), f"{row['estimate']:,.0f}", change(row), change(hundred)}
    for flag in ("", "too few"):
        ways |= {share_with_interval(*numbers, flag), share_with_interval(*numbers, flag).replace(" %", "")}
    ways.add(amount_with_interval(*numbers))
    if all(np.isfinite(numbers)):
        ways.add(f"{numbers[0]:,.0f} ({numbers[1]:,.0f}–{numbers[2]:,.0f})")
    if "order_held" in row and np.isfinite(row["order_held"]):
        ways |= {f"{row['order_held']:.0f} of 100", percent(row["share_in_log"])}
    counted = {"n_absences": ",.0f", "p_value_corrected": ".2g"}
    return ways | {format(row[name], how) for name, how in counted.items() if name in row}


@pytest.mark.parametrize("which", ["club", "touched"])
def test_every_number_of_the_tables_stands_in_summary_csv(which: str, touched: Overview, tmp_path: Path) -> None:
    overview = club_overview() if which == "club" else touched
    jn.write_report(overview.fit, tmp_path)
    page = Page((tmp_path / "summary.html").read_text(encoding="utf-8"))
    frame = pd.read_csv(tmp_path / "summary.csv")
    assert len(frame) == len(overview.to_frame())
    known = {text for _, row in frame.iterrows() for text in shown(row)}
    counts = frame[frame["section"] == "counts"]
    n, of_all = counts["estimate"].tolist(), counts.set_index("measure")["estimate"]["journeys"]
    known |= {percent(one / of_all) for one in n} | {percent(1 - one / of_all) for one in n}
    decided = of_all - counts.set_index("measure")["estimate"]["undecided"]
    joined = counts.set_index("outcome")["estimate"]["joined"]
    known |= {percent(joined / decided)}
    told = 0
    for caption, (_, *rows) in page.tables.items():
        if caption in NOT_ESTIMATES:
            continue
        for row in rows:
            numbers = [cell for cell in row[1:] if re.fullmatch(r"[+−]?\d.*|some never do", cell)]
            numbers = [cell for cell in numbers if "followed" not in cell]
            of_groups = numbers[:1] if caption in ("Conversion by district", "Conversion by cohort") else []
            for cell in numbers[len(of_groups) :]:
                assert cell in known, (caption, row, cell)
                told += 1
    assert told > (250 if which == "club" else 40)


def test_groups_are_those_of_groups_csv(tmp_path: Path) -> None:
    jn.write_report(club_fit(), tmp_path)
    page = Page((tmp_path / "summary.html").read_text(encoding="utf-8"))
    groups = pd.read_csv(tmp_path / "groups.csv")
    for column in ("district", "cohort"):
        mine = groups[groups["group_column"] == column]
        _, *rows = page.tables[f"Conversion by {column}"]
        assert [row[0] for row in rows] == mine["group"].tolist()
        assert [row[1] for row in rows] == [f"{n:,}" for n in mine["n_journeys"]]


def test_touchpoints_and_stages_have_their_sections(touched: Overview) -> None:
    page = Page(summary_html(touched))
    assert {"Touchpoints", "Stages"} <= set(page.headings)
    assert "association, not cause" in page.words
    assert "an upper limit of what could be lost" in page.words
    heads = page.tables["Of those who convert, who passed here, and what adds up"][0]
    assert heads[:3] == ["touchpoint", "passed here, by the model", "by the log"]


def test_long_names_may_be_broken_where_their_parts_meet_and_sentences_at_blanks_only() -> None:
    text = summary_html(club_overview())
    assert "friend_<wbr>invitation" in text
    assert "<wbr>" not in "".join(re.findall(r"a conversion is seen at once.{60}|>2024-1[^<]*<.", text))
    assert not re.search(r"\s<wbr>|<wbr>\s", text)


def test_columns_in_which_nothing_stands_are_left_out(club_page: Page) -> None:
    assert club_page.tables["Journeys by how they end"][0][-1] == "expected in the end"
    assert club_page.tables["Conversion by cohort"][0][-1] == "note"


def test_the_curve_goes_through_the_shares_of_the_table() -> None:
    overview = club_overview()
    assert overview.curve is not None
    frame = overview.conversion.to_frame()
    mine = frame[(frame["basis"] == "model") & frame["horizon"].isin(["14d", "30d", "90d"])]
    again = overview.curve.to_frame([14, 30, 90])
    for name in ("estimate", "low", "high"):
        np.testing.assert_allclose(again[name], mine[name], rtol=1e-12)
    (picture,) = [part for section in sections(overview) for part in section.parts if type(part).__name__ == "Curve"]
    half = frame.set_index("measure")["estimate"]["median_days"]
    assert picture.median == half
    at = np.interp(half, picture.time, picture.share)
    assert at == pytest.approx(100 * frame[frame["horizon"] == "in the end"]["estimate"].iloc[0] / 2, rel=2e-3)


def test_dots_stand_where_their_numbers_are() -> None:
    text = summary_html(club_overview())
    (found,) = re.findall(r"Expected in the end, of all who come in\. .*?</svg>", text, re.DOTALL)
    axis = [float(x) for x in re.findall(r'<text x="([\d.]+)"[^>]*class="faint">\d', found)]
    marks = [float(x) for x in re.findall(r'class="faint">(\d+)<', found)]
    frame = club_overview().endings.to_frame()
    shares = 100 * frame[frame["start_state"] == "entry"]["estimate"].to_numpy()
    drawn = np.interp([float(x) for x in re.findall(r'<circle cx="([\d.]+)"', found)], axis, marks)
    np.testing.assert_allclose(drawn, shares, atol=0.1)


def test_flagged_numbers_are_hollow_and_the_caption_says_so() -> None:
    text = summary_html(club_overview())
    (cohorts,) = re.findall(r"Expected in the end, by cohort\. .*?</svg>", text, re.DOTALL)
    assert "hollow: see the note" in cohorts
    assert cohorts.count('class="dot hollow"') == 1
    assert "followed for 29 days" in cohorts
    (districts,) = re.findall(r"Expected in the end, by district\. .*?</svg>", text, re.DOTALL)
    assert "hollow" not in districts


def test_a_log_without_a_silence_has_a_page() -> None:
    page = Page(summary_html(overview_of(small_log(), silence=None)))
    assert "Who comes back" not in page.headings
    assert not re.search(r"\b(inf|nan|None)\b", page.words)


def test_checks_stand_on_the_page_as_in_the_frame(club_page: Page) -> None:
    frame = club_overview().checks.to_frame()
    _, *rows = club_page.tables["Checks of the model"]
    assert [row[1] for row in rows] == frame["verdict"].tolist()
    assert [row[2] for row in rows] == frame["compared"].tolist()
    p_values = frame["p_value_corrected"]
    told = p_values.map("{:.2g}".format).mask(p_values < 0.001, "under 0.001").mask(p_values.isna(), "")
    assert [row[3] for row in rows] == told.tolist()
    about = [f" ({one})" if one else "" for one in frame["about"]]
    assert [row[0] for row in rows] == (frame["check_name"] + about).tolist()


@pytest.mark.parametrize("kind", HOSTILE)
def test_hostile_names_are_text(kind: str) -> None:
    name = HOSTILE[kind]
    overview = overview_of(small_log(visit=name, won=name + "!"), converted=[name + "!"])
    text = summary_html(overview)
    page, plain = Page(text), Page(summary_html(overview_of(small_log())))
    # states stand in the order of their names, so the elements are the same in another order
    tags, theirs = (Counter(name for name, _ in one.elements if name != "wbr") for one in (page, plain))
    assert tags == theirs
    assert {name for _, one in page.elements for name in one} == {name for _, one in plain.elements for name in one}
    if kind != "long":
        seen = "".join(char if char.isprintable() else " " for char in name)
        assert seen in page.words
    else:
        assert "wwww… (10,000 characters, " in page.words
        assert len(text) < 200_000


def test_the_page_of_the_demo_is_made_quickly() -> None:
    overview = club_overview()
    start = time.process_time()
    summary_html(overview)
    assert time.process_time() - start < 1.5


def test_axes_end_at_round_numbers() -> None:
    axis = axis_over([0.123, 0.457], 0.0, 100.0, from_zero=True)
    assert (axis.low, axis.high) == (0.0, 0.5)
    assert axis.ticks() == pytest.approx([0.0, 0.1, 0.2, 0.3, 0.4, 0.5])
    assert axis_over([-0.4, 0.2], 0.0, 1.0, from_zero=True).low < 0
    assert axis_over([5.0, 5.0], 0.0, 1.0, from_zero=False).low < 5.0
    assert axis_over([], 0.0, 1.0, from_zero=True).high == 1.0
    assert Axis(0.0, 10.0, 0.0, 100.0).at(99.0) == 100.0
