from __future__ import annotations

import datetime as dt
import json
import pickle

import numpy as np
import pandas as pd
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from journeys import checks
from journeys.errors import JourneysError, RulesError
from journeys.intake.rules import JourneyRules

DAY = 86_400_000_000
BASE = {"customer": "who", "time": "when", "event": "what", "silence": "30d"}


def make(**settings):
    return JourneyRules(**{**BASE, **settings})


REFUSED = [
    ({"silence": 30}, 'silence: got 30; wanted a duration such as "30d"'),
    ({"silence": True}, "silence: got True; wanted a duration"),
    ({"silence": "30"}, "without a unit"),
    ({"silence": "-3d"}, "silence: got '-3d'"),
    ({"silence": "0d"}, "wanted a length above zero"),
    ({"silence": "1 month"}, "months and years have no fixed length"),
    ({"silence": "2y"}, "months and years have no fixed length"),
    ({"silence": "P1M"}, "months and years have no fixed length"),
    ({"silence": "3m"}, 'or "min" for minutes'),
    ({"silence": "10ms"}, "wanted at least one second"),
    ({"silence": "soon"}, "silence: got 'soon'"),
    ({"silence": pd.NaT}, "silence"),
    ({"customer": ""}, "customer: got ''; wanted the name of a column"),
    ({"time": 3}, "time: got 3; wanted the name of a column"),
    ({"event": "who"}, "event: got column 'who', which is customer already"),
    ({"sequence": "when"}, "sequence: got column 'when', which is time already"),
    ({"ended_before": "what"}, "ended_before: got column 'what', which is event already"),
    ({"converted": ["a", "a"]}, "converted: got 'a' twice"),
    ({"converted": [""]}, "converted: got ''"),
    ({"converted": {"a": 1}}, "converted: got .* wanted the name of an event or a list"),
    ({"converted": 1.5}, "converted: got 1.5"),
    ({"converted": ["a"], "churned": ["a"]}, "churned: got 'a', which is in converted too"),
    ({"converted": ["open"]}, "converted: got 'open', a name with a meaning of its own"),
    ({"churned": ["lapsed"]}, "churned: got 'lapsed', a name with a meaning"),
    ({"states": {"x": "entry"}}, "states: got 'x' → 'entry', a name with a meaning"),
    ({"states": {"x": "unknown"}}, "states: got 'x' → 'unknown'"),
    ({"states": {"x": 1.5}}, r"states\['x'\]: got 1.5"),
    ({"states": ["x"]}, "states: got .* wanted a mapping from event to state"),
    (
        {"states": {"joined": "member"}, "converted": ["joined"]},
        "'joined' is an outcome, and outcomes are named after mapping; take 'joined' out of states",
    ),
    ({"states": {"joined": None}, "churned": ["joined"]}, "states: got 'joined' → None"),
    ({"unmapped": "drop"}, "unmapped: got 'drop' without states"),
    ({"unmapped": "other"}, "unmapped: got 'other' without states"),
    ({"unmapped": "lapsed", "states": {"x": "y"}}, "unmapped: got 'lapsed', a name with a meaning"),
    ({"unmapped": "a", "states": {"x": "y"}, "converted": "a"}, "unmapped: got 'a', an outcome"),
    ({"unmapped": None}, "unmapped: got None"),
    ({"after_outcome": "stop"}, "cannot know who had already ended; wanted complete_history=True"),
    ({"after_outcome": "end"}, "after_outcome: got 'end'; wanted one of 'reopen', 'stop'"),
    ({"repeats": "count"}, "repeats: got 'count'; wanted one of 'keep', 'merge'"),
    ({"duplicates": True}, "duplicates: got True; wanted one of 'keep', 'drop'"),
    ({"complete_history": "yes"}, "complete_history: got 'yes'; wanted True or False"),
    ({"same_outcome_within": None}, "same_outcome_within: got None; wanted a duration"),
    ({"horizons": 7}, "horizons: got 7; wanted a list of durations"),
    ({"horizons": ["7d", 8]}, "horizons: got 8"),
    ({"as_of": "30/06/2025"}, "as_of: got '30/06/2025'; wanted an instant such as"),
    ({"as_of": 20250630}, "as_of: got 20250630; wanted an instant"),
    ({"as_of": pd.NaT}, "as_of: got NaT"),
    ({"as_of": "2025-01-01", "log_start": "2025-01-01"}, "log_start: got 2025-01-01, not before as_of"),
    ({"exclude": ["staff"]}, "exclude: got .* wanted a mapping"),
    ({"exclude": {"staff": []}}, r"exclude\['staff'\]: got \[\]"),
    ({"exclude": {"staff": 1.5}}, r"exclude\['staff'\]: got 1.5"),
    ({"exclude": {"staff": [1, "a"]}}, "wanted values all of one kind"),
    ({"limits": {"unreadble": 0.1}}, "limits: got 'unreadble'; wanted one of 'unreadable'"),
    ({"limits": {"unreadable": 5}}, r"limits\['unreadable'\]: got 5; wanted a share"),
    ({"limits": 0.1}, "limits: got 0.1; wanted a mapping"),
    ({"converted": ["\ud800"]}, "wanted text that can be written as UTF-8"),
    ({"touchpoints": ["a", "a"]}, "touchpoints: got 'a' twice"),
    ({"touchpoints": None}, "touchpoints: got None; wanted the name of an event or a list of them"),
    ({"touchpoints": ["a", "joined"], "converted": "joined"}, "touchpoints: got 'joined', an outcome"),
    ({"touchpoints": "x", "states": {"x": "y"}}, "touchpoints: got 'x', which `states` maps to 'y'"),
    ({"touchpoints": [f"s{i}" for i in range(64)]}, "touchpoints: got 64 states; wanted at most 63: name fewer"),
    ({"value": ""}, "value: got ''; wanted the name of a column"),
    ({"value": 1}, "value: got 1; wanted the name of a column"),
    ({"value": "when"}, "value: got column 'when', which is time already"),
    ({"value": "amount", "by": "amount"}, "by: got 'amount', which is the value column"),
]


@pytest.mark.parametrize(("changed", "message"), REFUSED)
def test_refuses(changed, message):
    with pytest.raises(RulesError, match=message):
        make(**changed)


def test_silence_must_be_given():
    with pytest.raises(RulesError, match='silence: not given; wanted .* silence="30d", or silence=None'):
        JourneyRules("who", "when", "what")


def test_names_all_faults_at_once():
    with pytest.raises(RulesError) as caught:
        make(silence=3, repeats="x", horizons=["1 month"])
    assert [line.split(":")[0] for line in str(caught.value).split("\n")] == [
        "silence",
        "repeats",
        "horizons",
    ]
    assert isinstance(caught.value, JourneysError)
    assert isinstance(caught.value, ValueError)


def test_accepts_what_only_looks_contradictory():
    make(states={"signup": "joined"}, converted=["joined"])
    make(states={"joined": "joined"}, converted=["joined"])
    make(after_outcome="stop", complete_history=True)
    make(after_outcome="stop", ended_before="gone")
    make(as_of="2025-01-02", log_start="2025-01-01")
    make(exclude={"what": ["ping"]})


def test_touchpoints_and_value():
    plain, every, one = make(), make(touchpoints="all"), make(touchpoints="poster", value="amount")
    assert (plain.touchpoints, plain.named_touchpoints, plain.value) == ((), (), None)
    assert (every.touchpoints, every.named_touchpoints) == ("all", ())
    assert (one.touchpoints, one.named_touchpoints) == (("poster",), ("poster",))
    assert make(touchpoints=["all"]).named_touchpoints == ("all",)
    assert make(touchpoints=["all"]) != every
    assert one.columns == (*plain.columns, "amount")
    assert len(make(touchpoints=[f"s{i}" for i in range(63)]).named_touchpoints) == 63
    assert 'touchpoints = "all"' in every.to_toml()


def test_equal_however_written():
    one = make(
        converted=["joined"],
        states={"a": "x", "b": None},
        silence="30d",
        as_of="2025-06-30",
        horizons=["7d", "1d"],
        exclude={"staff": ["y", "x"]},
    )
    two = make(
        converted="joined",
        states={"b": False, "a": "x"},
        silence=dt.timedelta(days=30),
        as_of=dt.datetime(2025, 6, 30, 2, tzinfo=dt.timezone(dt.timedelta(hours=2))),
        horizons=(pd.Timedelta("24h"), np.timedelta64(7, "D"), "168h"),
        exclude={"staff": ("x", "y", "x")},
    )
    assert one == two
    assert hash(one) == hash(two)
    assert one != make(converted="joined")
    assert pickle.loads(pickle.dumps(one)) == one
    assert eval(repr(one), {"JourneyRules": JourneyRules}) == one


def test_derived_values():
    rules = make(
        converted=["a", "b"],
        churned="c",
        sequence="seq",
        ended_before="gone",
        exclude={"staff": True, "who": 3},
        as_of="1970-01-02",
        log_start=dt.date(1970, 1, 1),
        horizons=["2d", "1d"],
    )
    assert rules.outcomes == ("a", "b", "c")
    assert rules.columns == ("who", "when", "what", "seq", "gone", "staff")
    assert (rules.silence_us, rules.same_outcome_us) == (30 * DAY, 3_600_000_000)
    assert (rules.log_start_us, rules.as_of_us, rules.horizons_us) == (0, DAY, (DAY, 2 * DAY))
    nothing = make(silence="none")
    assert nothing.silence is None
    assert (nothing.silence_us, nothing.as_of_us, nothing.log_start_us) == (None, None, None)
    with pytest.raises(AttributeError):
        nothing.silence = "3d"


def test_targets():
    rules = make(states={"view": "seen", "ping": None}, converted="joined", unmapped="drop")
    assert [rules.target(e) for e in ("view", "ping", "joined", "seen", "new")] == [
        "seen", None, "joined", "seen", None
    ]  # fmt: skip
    kept = make(states={"view": "seen", "ping": None})
    assert [kept.target(e) for e in ("view", "ping", "new")] == ["seen", None, "new"]


def test_unknown_setting_is_named_with_the_closest():
    with pytest.raises(RulesError, match="'conversion' is no setting of the rules"):
        JourneyRules.from_dict({**BASE, "conversion": "x"})
    with pytest.raises(RulesError, match="did you mean 'converted'"):
        JourneyRules.from_dict({**BASE, "convertd": "x"})
    with pytest.raises(RulesError, match="customer: not given"):
        JourneyRules.from_dict({"time": "when", "event": "what"})


def test_toml_file(tmp_path):
    path = tmp_path / "rules.toml"
    path.write_text(
        'customer = "who"\ntime = "when"\nevent = "what"\nsilence = "none"\nas_of = 2025-06-30\n'
        'log_start = 2025-01-01T00:00:00+01:00\n[states]\nping = false\n"page view" = "looking"\n'
    )
    rules = JourneyRules.from_toml(path)
    assert rules.silence is None
    assert (rules.as_of, rules.log_start) == ("2025-06-30", "2024-12-31T23:00:00Z")
    assert rules.states == {"ping": None, "page view": "looking"}
    with pytest.raises(RulesError, match="no-such.toml: No such file"):
        JourneyRules.from_toml(tmp_path / "no-such.toml")
    path.write_text("silence = \n")
    with pytest.raises(RulesError, match=r"not TOML .*line 1"):
        JourneyRules.from_toml(path)
    path.write_text('customer = "who"\ntime = "when"\nevent = "what"\n')
    with pytest.raises(RulesError, match="rules.toml: silence: not given"):
        JourneyRules.from_toml(path)


names = st.text(st.characters(exclude_categories=["Cs"]), min_size=1, max_size=6).map("n{}".format)
durations = st.timedeltas(dt.timedelta(seconds=1), dt.timedelta(days=3000))
moments = st.datetimes(dt.datetime(1, 1, 2), dt.datetime(9999, 12, 30))


@st.composite
def rules(draw):
    outcomes = draw(st.lists(names.map("o{}".format), unique=True, max_size=4))
    cut = draw(st.integers(0, len(outcomes)))
    states = draw(st.none() | st.dictionaries(names, st.none() | names | st.sampled_from(["o", *outcomes])))
    start, end = sorted(draw(st.lists(moments, min_size=2, max_size=2, unique=True)))
    return JourneyRules(
        *draw(st.lists(names, min_size=3, max_size=3, unique=True)),
        converted=outcomes[:cut],
        churned=outcomes[cut:],
        silence=draw(st.none() | durations),
        same_outcome_within=draw(durations),
        states=states,
        unmapped="keep" if states is None else draw(st.sampled_from(["keep", "drop", "gathered"])),
        repeats=draw(st.sampled_from(["keep", "merge"])),
        sequence=draw(st.none() | st.just("\tseq")),
        duplicates=draw(st.sampled_from(["keep", "drop"])),
        exclude=draw(
            st.dictionaries(names, st.lists(names, min_size=1) | st.lists(st.integers(-9, 9), min_size=1))
        ),
        as_of=draw(st.none() | st.just(end)),
        log_start=draw(st.none() | st.just(start)),
        complete_history=draw(st.booleans()),
        horizons=draw(st.lists(durations, max_size=3)),
        touchpoints=draw(st.just("all") | st.lists(names.map("t{}".format), unique=True, max_size=3)),
        value=draw(st.none() | st.just("what it was worth")),
        limits=draw(st.just({}) | st.fixed_dictionaries({"unreadable": st.floats(0, 1)})),
    )


@settings(
    max_examples=60, deadline=None,
    suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow],
)  # fmt: skip
@given(rules=rules())
def test_round_trips(rules, tmp_path):
    path = tmp_path / "rules.toml"
    path.write_bytes(rules.to_toml().encode())
    assert JourneyRules.from_toml(path) == rules
    assert JourneyRules.from_dict(json.loads(json.dumps(rules.to_dict()))) == rules


@given(st.integers(1, 10**17))
def test_durations_are_read_back(us):
    assert checks.duration_us(checks.duration_text(us), "x") == us


@given(st.integers(checks.MIN_TIME_US, checks.MAX_TIME_US))
def test_instants_are_read_back(us):
    assert checks.instant_us(checks.instant_text(us), "x") == us


@pytest.mark.parametrize(
    ("value", "us"),
    [
        ("30d", 30 * DAY), ("12h", DAY // 2), ("90min", 5_400_000_000), ("2 weeks", 14 * DAY),
        ("1W", 7 * DAY),
        ("1.5 days", 3 * DAY // 2), ("1 day 02:30:00", DAY + 9_000_000_000), ("1d12h", 3 * DAY // 2),
        ("00:00:01.5", 1_500_000), ("P1DT2H", DAY + 7_200_000_000), ("PT5M", 300_000_000),
        ("3 secs", 3_000_000),
        (pd.Timedelta(days=1), DAY), (dt.timedelta(milliseconds=1), 1_000),
        (np.timedelta64(2, "h"), DAY // 12),
    ],
)  # fmt: skip
def test_durations(value, us):
    assert checks.duration_us(value, "x") == us


@pytest.mark.parametrize(
    "value",
    [pd.Timedelta(1, "ns"), np.timedelta64("NaT"), np.timedelta64(1, "M"), "1 day 26:99", "inf", "1e3d"],
)
def test_refuses_durations(value):
    with pytest.raises(ValueError, match="x: got"):
        checks.duration_us(value, "x")


@pytest.mark.parametrize(
    "value",
    [
        "2025-06-30T12:00:00", "2025-06-30 14:00+02:00", dt.datetime(2025, 6, 30, 12),
        pd.Timestamp("2025-06-30 12:00"), pd.Timestamp("2025-06-30 14:00", tz="Europe/Amsterdam"),
        np.datetime64("2025-06-30T12"),
    ],
)  # fmt: skip
def test_instants(value):
    assert checks.instant_us(value, "x") == 1_751_284_800_000_000


def test_confidence_level():
    assert checks.confidence_level(np.float32(0.5)) == 0.5
    with pytest.raises(ValueError, match="confidence_level: got 1; wanted a share"):
        checks.confidence_level(1)
    with pytest.raises(TypeError, match="confidence_level: got True"):
        checks.confidence_level(True)
    with pytest.raises(TypeError, match="confidence_level: got '0.95'"):
        checks.confidence_level("0.95")
