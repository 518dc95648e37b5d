"""The page and the text of the summary: as agreed for the demo log, and true to the numbers behind them.

With `JOURNEYS_REWRITE_GOLDEN=1` the agreed pages are written anew, to be read before they are kept.
"""

from __future__ import annotations

import os
import re
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from club_log import club_overview, overview_of, small_log

import journeys as jn
from journeys.show.belief_sections import CAUTIONS
from journeys.show.page import summary_markdown
from journeys.show.summary import summary_text, write_summary

GOLDEN = Path(__file__).parent / "golden"
SECTIONS = [
    "Why the expected share is not the plain one",
    "The log",
    "Where journeys end",
    "How long it takes",
    "Stages",
    "From each state",
    "Where journeys end, from each state",
    "What comes next",
    "Who comes back",
    "Touchpoints",
    "What one point more would do",
    "By district",
    "By cohort",
    "Whether to believe it",
    "Cautions",
    "How each number is defined",
    "Made by",
]


# Without stages, touchpoints and groups in the rules.
PLAIN_SECTIONS = [title for title in SECTIONS if title not in ("Stages", "Touchpoints") and not title.startswith("By ")]


def without_stamp(text: str) -> str:
    """The page without version and checksum, which change when neither words nor numbers do."""
    return re.sub(r"journeys [\w.]+, tally [0-9a-f]{32}", "journeys VERSION, tally CHECKSUM", text)


def section(page: str, title: str) -> str:
    (found,) = re.findall(rf"^## {title}\n\n(.*?)(?=\n## |\Z)", page, flags=re.MULTILINE | re.DOTALL)
    return str(found)


def table(text: str) -> pd.DataFrame:
    """The Markdown table in a section."""
    lines = [line.strip("|").split("|") for line in text.splitlines() if line.startswith("|")]
    cells = [[cell.strip() for cell in line] for line in lines]
    return pd.DataFrame(cells[2:], columns=cells[0])


def number(text: str) -> float:
    return float(re.match(r"[\d,.]+", text)[0].replace(",", ""))  # type: ignore[index]


# --- the demo log -----------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["summary.md", "summary.txt"])
def test_golden(name: str) -> None:
    overview = club_overview()
    text = without_stamp(summary_markdown(overview) if name.endswith("md") else summary_text(overview))
    if os.environ.get("JOURNEYS_REWRITE_GOLDEN") == "1":
        (GOLDEN / name).write_text(text, encoding="utf-8")
    assert text == (GOLDEN / name).read_text(encoding="utf-8")


def test_every_section_is_there_in_its_order() -> None:
    page = summary_markdown(club_overview())
    assert re.findall(r"^## (.*)$", page, flags=re.MULTILINE) == SECTIONS
    assert all(section(page, title).strip() for title in SECTIONS)
    assert all(f"- {caution}" in page for caution in CAUTIONS)


def test_headline_says_what_the_frame_says() -> None:
    overview = club_overview()
    frame = overview.to_frame()
    counts = frame[frame.section == "counts"]
    counts = counts.set_index(counts.outcome.fillna(counts.measure)).estimate
    end = frame[(frame.section == "time_to_convert") & (frame.horizon == "in the end")].iloc[0]
    said = re.match(
        r"joined so far ([\d,]+) of ([\d,]+) journeys of ([\d,]+) people, ([\d.]+) %; ([\d,]+) undecided yet; "
        r"expected in the end ([\d.]+) % \(([\d.]+)–([\d.]+)\)\n",
        summary_text(overview),
    )
    assert said is not None
    numbers = [float(group.replace(",", "")) for group in said.groups()]
    share = counts["joined"] / counts["journeys"]
    exact = [counts["joined"], counts["journeys"], counts["people"], 100 * share, counts["undecided"]]
    assert numbers[:5] == pytest.approx(exact, abs=0.0501)
    assert numbers[5:] == pytest.approx(100 * end[["estimate", "low", "high"]].to_numpy(dtype=float), abs=0.0501)


def test_text_and_page_tell_the_same_reconciliation() -> None:
    overview = club_overview()
    told = table(section(summary_markdown(overview), SECTIONS[0]))
    for row in told.to_dict("records"):
        for cell in row.values():
            assert cell in summary_text(overview)


def test_reconciliation_adds_up() -> None:
    overview = club_overview()
    lines = overview.reconciliation().set_index("line")
    n, of = lines["n"], lines["of"]
    plain, decided, undecided, unsure, end = lines.index
    assert of[plain] == of[undecided] == of[unsure] == overview.plain.n_journeys
    assert n[plain] == n[decided] == overview.plain.n_converted
    assert of[decided] + n[undecided] == overview.plain.n_journeys
    assert lines.estimate[plain] < lines.estimate[end] < lines.estimate[decided]
    assert np.allclose((n / of)[:4], lines.estimate[:4])


def test_journeys_by_ending_add_up_to_all() -> None:
    told = table(section(summary_markdown(club_overview()), "Where journeys end"))
    names = told["outcome"].tolist()
    assert names == ["joined", "declined", "quiet for over 30 days", "undecided yet", "all journeys"]
    n = told["journeys so far"].map(number)
    assert n[:4].sum() == n[4] == club_overview().plain.n_journeys
    expected = told["expected in the end"][:3].map(number)
    assert expected.sum() == pytest.approx(100, abs=0.15)


def test_rows_of_the_matrix_add_up_and_every_state_is_told() -> None:
    page = summary_markdown(club_overview())
    matrix = table(section(page, "What comes next")).set_index("from")
    states = ["entry", *club_overview().fit.states]
    assert matrix.index.tolist() == table(section(page, "From each state"))["from"].tolist() == states
    shares = matrix.map(lambda cell: number(cell) if cell and cell != "·" else 0.0)
    assert shares.sum(axis=1).to_numpy() == pytest.approx(100.0, abs=0.6)
    assert "lapsed" not in matrix.columns


def test_rules_on_the_page_make_the_same_rules(tmp_path: Path) -> None:
    page = summary_markdown(club_overview())
    (toml,) = re.findall(r"^```toml\n(.*?)\n```$", page, flags=re.MULTILINE | re.DOTALL)
    (tmp_path / "rules.toml").write_text(toml, encoding="utf-8")
    tally = club_overview().fit.tally
    assert tally is not None
    assert jn.JourneyRules.from_toml(tmp_path / "rules.toml") == tally.rules


def test_text_fits_a_terminal() -> None:
    lines = summary_text(club_overview()).splitlines()
    assert max(len(line) for line in lines[1:]) <= 100


def test_infinite_means_are_said_in_words_and_blank_in_files(tmp_path: Path) -> None:
    overview = club_overview()
    assert not re.search(r"\b(inf|nan|None)\b", summary_markdown(overview) + summary_text(overview), re.IGNORECASE)
    write_summary(overview, tmp_path)
    frame = pd.read_parquet(tmp_path / "summary.parquet")
    never = frame[frame.measure == "mean_unconditional"]
    assert never.estimate.isna().all()
    assert never.flag.str.contains("infinite: some never do").all()


# --- other logs -------------------------------------------------------------------------------------------


def test_without_a_silence_nobody_falls_quiet() -> None:
    overview = overview_of(small_log(), silence=None)
    page = summary_markdown(overview)
    assert "quiet for over" not in page
    assert "silences of" not in page
    assert "a loss only after the silence" not in page + summary_text(overview)
    told = table(section(page, "Where journeys end"))
    assert told["outcome"].tolist() == ["joined", "declined", "undecided yet", "all journeys"]
    n = told["journeys so far"].map(number)
    assert n[:3].sum() == n[3]
    assert 'silence = "none"' in page


def test_completed_moves_only_is_explained_with_its_states() -> None:
    page = summary_markdown(overview_of(small_log(), silence=None))
    # Somebody has waited at `look` for longer than anybody who moved on from there.
    assert re.search(r"^- completed moves only \(look\): .*a silence would mend it\.$", page, flags=re.MULTILINE)


def test_too_few_is_explained_and_bounded_on_one_side() -> None:
    page = summary_markdown(overview_of(small_log(9)))
    assert re.search(r"^- too few: too few events, or no spread in them, for an interval", page, flags=re.MULTILINE)
    assert re.search(r"\| entry \| [\d.]+ % \(under [\d.]+\) \|.*\| too few \|", section(page, "From each state"))


def test_nothing_is_explained_that_does_not_occur() -> None:
    believed = section(summary_markdown(club_overview()), "Whether to believe it")
    assert [line for line in believed.splitlines() if line.startswith("- ")] == [
        "- The log is 8.0 silences of 30 days long.",
        f"- The start of {100 * club_overview().plain.n_sure / club_overview().plain.n_journeys:.1f} % of the "
        "journeys was seen.",
        "- – stands for numbers about fewer than 10 people, and for others beside them that would tell what they are.",
        "- log and model differ: the chain does not bear out what the journeys show: trust the log's share, and not "
        "the model's effect.",
    ]


def test_end_not_seen_is_explained_with_its_states() -> None:
    frame = small_log()
    # A state that comes up in the last days only: nobody was quiet in it for 30 days.
    late = [(1000 + i, pd.Timestamp("2025-07-10T08:00:00Z") + pd.Timedelta(hours=i), "late") for i in range(40)]
    overview = overview_of(pd.concat([frame, pd.DataFrame(late, columns=list(frame))]).sort_values("when"))
    page = summary_markdown(overview)
    assert re.search(r"^- end not seen \(late\): .*upper bound\.$", page, flags=re.MULTILINE)
    assert re.search(r"^\| late \|.*end not seen \|$", section(page, "From each state"), flags=re.MULTILINE)


def test_short_log_and_journeys_begun_again_are_told() -> None:
    frame = small_log()
    again = frame.assign(when=frame["when"] + pd.Timedelta(days=4))
    page = summary_markdown(overview_of(pd.concat([frame, again]).sort_values("when"), silence="140d"))
    believed = section(page, "Whether to believe it")
    assert "1.5 silences of 140 days long; under one and a half, times are shaky." in believed
    assert re.search(r"[\d.]+ % of the journeys began after an outcome of the same person", believed)


@pytest.mark.parametrize("level", [0.8, 0.999])
def test_level_is_told(level: float) -> None:
    overview = jn.summarise(club_overview().fit, confidence_level=level)
    for text in (summary_markdown(overview), summary_text(overview)):
        assert f"Intervals at {100 * level:g} %." in text


def test_wide_matrices_are_left_to_the_files() -> None:
    frame = small_log(200)
    frame["what"] = [f"visit {row % 15}" if name == "visit" else name for row, name in enumerate(frame["what"])]
    page = summary_markdown(overview_of(frame))
    assert "| entry | ·" not in page
    assert "(section moves)" in section(page, "What comes next")


HOSTILE = [
    "<script>alert(1)</script>",
    "a|b | c",
    "![x](http://example.org/x.png)",
    "two\n\n## lines",
    "``` \n<b>",
    "\x1b[2Jgone",
    "\u202eright",
    "=cmd()",
]


@pytest.mark.parametrize("name", HOSTILE)
def test_hostile_event_names_are_never_markup(name: str, tmp_path: Path) -> None:
    overview = overview_of(small_log(visit=name, won=name + "!"), converted=[name + "!"])
    page, text = summary_markdown(overview), summary_text(overview)
    assert re.findall(r"^## (.*)$", page, flags=re.MULTILINE) == PLAIN_SECTIONS
    outside = re.sub(r"^```toml\n.*?\n```$", "", page, flags=re.MULTILINE | re.DOTALL)
    bare = re.sub(r"\\[!-/:-@\[-`{-~]", "", outside)
    assert "```" not in bare
    assert not re.search(r"<|\]\(|\x1b|\u202e", bare)
    assert not re.search(r"[\x00-\x09\x0b-\x1f\u202e]", text + page)
    for title, rows in (("Where journeys end", 5), ("From each state", 3), ("What comes next", 3)):
        lines = [line for line in section(page, title).splitlines() if line.startswith("|")]
        assert len(lines) == rows + 2
        assert len({len(re.findall(r"(?<!\\)\|", line)) for line in lines}) == 1
    write_summary(overview, tmp_path)
    from_csv = pd.read_csv(tmp_path / "summary.csv", keep_default_na=False).start_state
    assert ("'" + name if name.startswith("=") else name) in from_csv.tolist()
    assert name in pd.read_parquet(tmp_path / "summary.parquet").start_state.tolist()


def test_touchpoints_have_a_section_with_their_cautions() -> None:
    log = small_log()
    basket = log[log["what"] == "visit"].iloc[::2].assign(what="basket")
    log = pd.concat([log, basket.assign(when=basket["when"] + pd.Timedelta(minutes=5))])
    page = summary_markdown(overview_of(log, touchpoints=["visit", "basket"]))
    rows = table(section(page, "Touchpoints"))
    assert list(rows["touchpoint"]) == ["visit", "basket"]
    assert rows["passed here, by the model"][0].startswith("100.0 %")
    assert "association, not cause" in section(page, "Touchpoints")
