from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
import pytest

from journeys.kernels.sojourn import (
    BucketStays,
    StayFit,
    Stays,
    cell_influence,
    fit_stays,
    move_influence,
)

# --- rows of a published data set as stays, every distinct time a bin of its own


class Rows:
    """Stays with no binning: events in a bin at their time, censorings in one just after it.

    Row r starts in state[r] and ends at time[r] in column target[r], or is open (target -1).
    """

    def __init__(self, state: Any, time: Any, target: Any, n_states: int, n_targets: int) -> None:
        self.state, self.target = np.asarray(state, np.int64), np.asarray(target, np.int64)
        self.time = np.asarray(time, float)
        self.times, at = np.unique(self.time, return_inverse=True)
        shape = (n_states, n_targets, 2 * len(self.times))
        ended = self.target >= 0
        key = np.ravel_multi_index((self.state[ended], self.target[ended], 2 * at[ended]), shape)
        cells, cell = np.unique(key, return_inverse=True)
        i, j, k = np.unravel_index(cells, shape)
        n = np.bincount(cell).astype(float)
        edges = np.repeat(self.times, 2)
        rows = np.arange(len(self.time))
        none, no = np.zeros(0), np.zeros(0, np.int64)
        self.cell_time = edges[k]
        self.stays = Stays(
            n_states, n_targets, shape[2], i, j, k, n, n * edges[k], edges, edges,
            self.state[~ended], 2 * at[~ended] + 1, np.ones((~ended).sum()), np.zeros(n_states),
        )  # fmt: skip
        self.buckets = BucketStays(
            len(rows), rows[ended], cell, np.ones(ended.sum()), self.cell_time[cell],
            rows[~ended], self.state[~ended], 2 * at[~ended] + 1, np.ones((~ended).sum()), no, no, none,
        )  # fmt: skip
        self.fit = fit_stays(self.stays)

    def curve(self, state: int, t: float, target: int | None = None) -> tuple[float, float]:
        """Share that ended in a column by t (None: in any), and its standard error over rows."""
        phi = ((self.stays.state == state) & (self.cell_time <= t)).astype(float)
        if target is not None:
            phi *= self.stays.target == target
        return self._answer(phi, np.zeros(self.stays.n_states))

    def restricted(self, state: int, tau: float, target: int | None = None) -> tuple[float, float]:
        """Mean time up to tau before the end, or spent in a column after it."""
        own = self.stays.state == state
        if target is None:
            phi, last = own * np.minimum(self.cell_time, tau), tau
        else:
            phi, last = own * (self.stays.target == target) * np.maximum(tau - self.cell_time, 0.0), 0.0
        return self._answer(phi, np.where(np.arange(self.stays.n_states) == state, last, 0.0))

    def _answer(self, phi: np.ndarray, last: np.ndarray) -> tuple[float, float]:
        influence = cell_influence(self.fit, self.stays, self.buckets, phi, last)
        total = float(self.fit.q @ phi + self.fit.survival_end @ last)
        return total, float(np.sqrt((influence**2).sum()))


def check_one_ending(rows: Rows, state: int, expected: dict[str, Any], close: dict[str, float]) -> None:
    for k, t in enumerate(expected["times"]):
        gone, se = rows.curve(state, t)
        assert 1 - gone == pytest.approx(expected["survival"][k], **close), t
        # none is given once nobody is left; the influence is 0 there
        assert se == pytest.approx(expected["se_greenwood"][k] or 0.0, **close), t
        at = 2 * np.searchsorted(rows.times, t)
        risk = rows.fit.at_risk[state, at] if at < rows.stays.n_bins else 0.0
        assert risk == expected["n_at_risk"][k], t
    # "to the last time": to the last of the times listed, as value and standard error both show
    mean, se = rows.restricted(state, expected["times"][-1])
    assert mean == pytest.approx(expected["restricted_mean_to_last_time"], **close)
    assert se == pytest.approx(expected["restricted_mean_se"], **close)
    assert (rows.state == state).sum() == expected["n"]


def check_competing(
    rows: Rows, state: int, expected: dict[str, Any], close: dict[str, float], targets: dict[str, int]
) -> None:
    assert (rows.state == state).sum() == expected["n"]
    last, restricted = expected["last_event_time"], expected["restricted_mean_time"]
    assert rows.restricted(state, restricted["to"])[0] == pytest.approx(restricted["free"], **close)
    for name, column in targets.items():
        assert ((rows.state == state) & (rows.target == column)).sum() == expected["events"][name]
        total = expected["cumulative_incidence_at_last_event"][name]
        assert rows.curve(state, last, column)[0] == pytest.approx(total, **close)
        mean = rows.restricted(state, restricted["to"], column)[0]
        assert mean == pytest.approx(restricted[name], **close)
    for k, t in enumerate(expected["times"]):
        gone, se = rows.curve(state, t)
        assert 1 - gone == pytest.approx(expected["state_free"][k], **close), t
        assert se == pytest.approx(expected["se_free"][k], **close), t
        for name, column in targets.items():
            share, se = rows.curve(state, t, column)
            assert share == pytest.approx(expected["cumulative_incidence"][name][k], **close), (t, name)
            assert se == pytest.approx(expected["se_greenwood"][name][k], **close), (t, name)


def read(shared: Any, case: dict[str, Any]) -> pd.DataFrame:
    return pd.read_csv(shared / "reference" / case["input"]["data"])


@pytest.mark.open_data
def test_leukaemia_kaplan_meier(reference, shared) -> None:
    """Miller, Survival Analysis, Wiley 1981; R survival 3.5-3 (f01)."""
    case = reference("survival", "f01")
    data = read(shared, case)
    group = (data["x"] != "Maintained").astype(int)
    rows = Rows(group, data["time"], np.where(data["status"] == 1, 2, -1), 2, 3)
    for state, name in enumerate(("maintained", "not_maintained")):
        check_one_ending(rows, state, case["expected"][name], case["tolerance"])


def test_six_mercaptopurine_kaplan_meier(reference) -> None:
    """Freireich et al., Blood 21 (1963) 699-716; R survival 3.5-3 (f02)."""
    case = reference("survival", "f02")
    status = np.array(case["input"]["status"])
    rows = Rows(np.zeros(len(status)), case["input"]["time"], np.where(status == 1, 1, -1), 1, 2)
    check_one_ending(rows, 0, case["expected"], case["tolerance"])


@pytest.mark.open_data
def test_transplant_waiting_list(reference, shared) -> None:
    """Kim et al., Hepatology 43 (2006) 345-351; R survival 3.5-3, cmprsk 2.2-11, etm 1.1.1 (f03)."""
    case = reference("survival", "f03")
    data = read(shared, case)
    targets = {name: 1 + k for k, name in enumerate(case["input"]["outcomes"])}
    for name, part in {"all": data, "blood_type_O": data[data["abo"] == "O"]}.items():
        to = part["event"].map(targets).fillna(-1)
        rows = Rows(np.zeros(len(part)), part["futime"], to, 1, 4)
        check_competing(rows, 0, case["expected"][name], case["tolerance"], targets)


@pytest.mark.open_data
def test_bladder_sojourns(reference, shared) -> None:
    """Byar 1980, in R survival 3.5-3 (bladder1); cmprsk 2.2-11, etm 1.1.1 (f04)."""
    case = reference("survival", "f04")
    data = read(shared, case)
    data = data[data["stop"] > data["start"]]
    for name, part in {"all_sojourns": data, "first_sojourn": data[data["enum"] == 1]}.items():
        to = np.where(part["status"] == 0, -1, np.minimum(part["status"], 2))
        rows = Rows(np.zeros(len(part)), part["stop"] - part["start"], to, 1, 3)
        check_competing(
            rows, 0, case["expected"][name], case["tolerance"], {"recurrence": 1, "death": 2}
        )


@pytest.mark.open_data
def test_infection_gap_times(reference, shared) -> None:
    """Fleming and Harrington 1991, app. D.2; R survival 3.5-3 (f05)."""
    case = reference("survival", "f05")
    data = read(shared, case)
    group = (data["treat"] != "placebo").astype(int)
    rows = Rows(group, data["tstop"] - data["tstart"], np.where(data["status"] == 1, 2, -1), 2, 3)
    for state, name in enumerate(("placebo", "rIFN")):
        check_one_ending(rows, state, case["expected"][name], case["tolerance"])


def test_ten_subjects_with_ties(reference) -> None:
    """Invented data, exact fractions; R survival 3.5-3, cmprsk 2.2-11, etm 1.1.1 (f06)."""
    case = reference("survival", "f06")
    event = np.array(case["input"]["event"])
    rows = Rows(np.zeros(len(event)), case["input"]["time"], np.where(event == 0, -1, event), 1, 3)
    check_competing(rows, 0, case["expected"], case["tolerance"], {"win": 1, "lose": 2})


@pytest.mark.open_data
def test_breast_cancer_sojourns(reference, shared) -> None:
    """Royston and Altman, BMC Med. Res. Methodol. 13 (2013) 33; R survival 3.5-3, etm 1.1.1 (f07).

    Both states in one fit. Of the occupation probabilities only that of the entry state is one of
    sojourns; the others run on the time since entry.
    """
    case = reference("survival", "f07")
    expected, close = case["expected"], case["tolerance"]
    data = read(shared, case)
    to = data["to"].map({"relapse": 1, "death": 2}).fillna(-1)
    rows = Rows(data["from"] == "relapse", data["exit"] - data["entry"], to, 2, 3)
    check_one_ending(rows, 1, expected["from_relapse_clock_reset"], close)
    check_competing(rows, 0, expected["from_entry"], close, {"relapse": 1, "death": 2})
    for k, t in enumerate(expected["times"]):
        gone, se = rows.curve(0, t)
        assert 1 - gone == pytest.approx(expected["occupation"][k][0], **close)
        assert se == pytest.approx(expected["se_infinitesimal_jackknife"][k][0], **close)


@pytest.mark.open_data
def test_biliary_cirrhosis(reference, shared) -> None:
    """Therneau and Grambsch 2000 (pbcseq); R survival 3.5-3, cmprsk 2.2-11, etm 1.1.1 (f08)."""
    case = reference("survival", "f08")
    data = read(shared, case).drop_duplicates("id")
    to = np.where(data["status"] == 0, -1, data["status"])
    rows = Rows(np.zeros(len(data)), data["futime"], to, 1, 3)
    check_competing(rows, 0, case["expected"]["all"], case["tolerance"], {"transplant": 1, "death": 2})


@pytest.mark.open_data
def test_bone_marrow_groups(reference, shared) -> None:
    """Klein and Moeschberger, Survival Analysis, Springer 1997, sec. 1.3; R KMsurv 0.1-5 (f09)."""
    case = reference("survival", "f09")
    data = read(shared, case)
    to = np.where(data["d2"] == 1, 3, np.where(data["d3"] == 1, 4, -1))
    rows = Rows(data["group"] - 1, data["t2"], to, 3, 5)
    for state in range(3):
        expected = case["expected"][f"group_{state + 1}"]
        check_competing(rows, state, expected, case["tolerance"], {"relapse": 3, "death in remission": 4})


@pytest.mark.open_data
def test_clustered_transitions(reference, shared) -> None:
    """Life histories `holson` of R markovchain 0.9.1; R survey 4.1-1 svyratio (h03): all in one bin."""
    case = reference("ratio_variance", "h03")
    path = read(shared, case).to_numpy()[:, 1:] - 1
    people, _ = np.meshgrid(np.arange(len(path)), np.arange(10), indexing="ij")
    cell = path[:, :-1] * 3 + path[:, 1:]
    n = np.bincount(cell.ravel(), minlength=9).astype(float)
    none, no = np.zeros(0), np.zeros(0, np.int64)
    i, j = np.divmod(np.arange(9), 3)
    edges = np.zeros(1), np.ones(1)
    stays = Stays(3, 3, 1, i, j, 0 * i, n, n, *edges, no, no, none, np.zeros(3))
    one = np.ones(cell.size)
    buckets = BucketStays(len(path), people.ravel(), cell.ravel(), one, one, no, no, no, none, no, no, none)
    fit = fit_stays(stays)
    influence = move_influence(fit, stays, buckets)[0]
    plain = np.sqrt((influence**2).sum(axis=0)).reshape(3, 3)
    expected, close = case["expected"], case["tolerance"]
    assert fit.probability.reshape(3, 3) == pytest.approx(np.array(expected["ratio"]), **close)
    assert plain == pytest.approx(np.array(expected["se_linearised"]), **close)
    scaled = plain * np.sqrt(len(path) / (len(path) - 1))
    assert scaled == pytest.approx(np.array(expected["se_n_over_n_minus_1"]), **close)


# --- invented stays against a slow second implementation and against differences


def invented(seed: int, *, survivors: bool = True, m: int = 3, k: int = 6) -> Stays:
    rng = np.random.default_rng(seed)
    shape = (m, m + 2, k)
    i, j, b = np.nonzero(rng.random(shape) < 0.5)
    n = rng.integers(1, 9, size=len(i)).astype(float)
    edges = np.concatenate([[0.0], np.cumsum(rng.uniform(0.2, 2.0, size=k))])
    total = n * (edges[b] + (edges[b + 1] - edges[b]) * rng.uniform(0.02, 0.98, size=len(i)))
    oi, ob = np.nonzero(rng.random((m, k)) < 0.6)
    on = rng.integers(1, 6, size=len(oi)).astype(float)
    kept = rng.integers(1, 9, size=m).astype(float) if survivors else np.zeros(m)
    return Stays(
        m, m + 2, k, i, j, b, n, total, edges[:-1], edges[1:], oi, ob, on, kept,
        m + 1 if survivors else None, float(edges[-1]),
    )  # fmt: skip


def slow(s: Stays, open_weight: float) -> dict[tuple[int, int], list[float]]:
    """One stay after another: product-limit of each state in plain loops."""
    moves: dict[tuple[int, int], list[float]] = {}

    def add(i: int, j: int, q: float, dwell: float, square: float) -> None:
        old = moves.setdefault((i, j), [0.0, 0.0, 0.0])
        moves[i, j] = [old[0] + q, old[1] + q * dwell, old[2] + q * square]

    for i in range(s.n_states):
        left = sum(s.n[s.state == i]) + sum(s.open_n[s.open_state == i]) + s.survivor_n[i]
        survival = 1.0
        for b in range(s.n_bins):
            still = sum(s.open_n[(s.open_state == i) & (s.open_bin == b)])
            risk, gone, before = left - open_weight * still, 0.0, survival
            for c in np.flatnonzero((s.state == i) & (s.bin == b)):
                lam, tau = s.n[c] / risk, s.total[c] / s.n[c]
                x = np.linspace(s.lower[b], s.upper[b], 40_001)
                line = density(x, s.lower[b], s.upper[b], tau)
                add(i, int(s.target[c]), before * lam, tau, np.trapezoid(line * x**2, x))
                survival -= before * lam
                gone += s.n[c]
            left -= gone + still
        if s.survivor_target is not None:
            w = s.survivor_dwell
            add(i, s.survivor_target, survival, w, w * w)
    return moves


def density(x: np.ndarray, low: float, high: float, tau: float) -> np.ndarray:
    """Line with mean tau, or the triangle that is left of it when it is cut off at 0."""
    width, middle = high - low, (low + high) / 2
    if abs(tau - middle) <= width / 6:
        return 1 / width + 12 * (tau - middle) / width**3 * (x - middle)
    if tau < middle:
        base = 3 * (tau - low)
        return np.maximum(0.0, 2 / base * (1 - (x - low) / base))
    base = 3 * (high - tau)
    return np.maximum(0.0, 2 / base * (1 - (high - x) / base))


@pytest.mark.parametrize("open_weight", [0.5, 0.0])
@pytest.mark.parametrize("survivors", [True, False])
@pytest.mark.parametrize("seed", range(3))
def test_fit_against_plain_loops(seed: int, survivors: bool, open_weight: float) -> None:
    stays = invented(seed, survivors=survivors)
    fit = fit_stays(stays, open_weight)
    expected = slow(stays, open_weight)
    assert list(zip(fit.move_state.tolist(), fit.move_target.tolist(), strict=True)) == sorted(expected)
    table = np.array([expected[key] for key in sorted(expected)])
    np.testing.assert_allclose(fit.probability, table[:, 0], rtol=1e-12)
    np.testing.assert_allclose(fit.mean, table[:, 1], rtol=1e-12)
    np.testing.assert_allclose(fit.second, table[:, 2], rtol=1e-5)
    rows = np.bincount(fit.move_state, weights=fit.probability, minlength=stays.n_states)
    np.testing.assert_allclose(rows + (0.0 if survivors else fit.survival_end), 1.0, rtol=1e-12)


def shifted(s: Stays, what: str, index: int, by: float) -> Stays:
    """The same stays with a little more of one kind, mean dwell held fixed."""
    values = dict(vars(s))
    if what == "n":
        values["total"] = s.total.copy()
        values["total"][index] *= 1 + by / s.n[index]
    values[what] = values[what].copy()
    values[what][index] += by
    return Stays(**values)


def each_alone(s: Stays) -> tuple[BucketStays, list[tuple[str, int]]]:
    """A bucket for every kind of stay, holding one of it."""
    c, o, m = len(s.n), len(s.open_n), s.n_states
    buckets = BucketStays(
        c + o + m, np.arange(c), np.arange(c), np.ones(c), s.total / s.n,
        c + np.arange(o), s.open_state, s.open_bin, np.ones(o),
        c + o + np.arange(m), np.arange(m), np.ones(m),
    )  # fmt: skip
    kinds = [("n", x) for x in range(c)] + [("open_n", x) for x in range(o)]
    return buckets, kinds + [("survivor_n", x) for x in range(m)]


def difference(s: Stays, kind: tuple[str, int], answer: Any, open_weight: float) -> np.ndarray:
    ends = [answer(fit_stays(shifted(s, *kind, by), open_weight)) for by in (1e-4, -1e-4)]
    return (ends[0] - ends[1]) / 2e-4


@pytest.mark.parametrize("open_weight", [0.5, 0.0])
@pytest.mark.parametrize("seed", range(3))
def test_influence_against_differences(seed: int, open_weight: float) -> None:
    stays = invented(seed)
    fit = fit_stays(stays, open_weight)
    buckets, kinds = each_alone(stays)
    fast = np.stack(move_influence(fit, stays, buckets), axis=1)

    def moves(other: StayFit) -> np.ndarray:
        return np.stack([other.probability, other.mean, other.second])

    rng = np.random.default_rng(seed)
    phi, last = rng.normal(size=len(stays.n)), rng.normal(size=stays.n_states)

    def table(other: StayFit) -> np.ndarray:
        return np.asarray(other.q @ phi + other.survival_end @ last)

    values = cell_influence(fit, stays, buckets, phi, last)
    for b, kind in enumerate(kinds):
        expected = difference(stays, kind, moves, open_weight)
        np.testing.assert_allclose(fast[b], expected, rtol=1e-6, atol=1e-8, err_msg=str(kind))
        assert values[b] == pytest.approx(difference(stays, kind, table, open_weight), rel=1e-6, abs=1e-8)


def test_influence_where_all_at_risk_end() -> None:
    # both states end for sure: one in a bin before the last, one in the last
    no, none = np.zeros(0, np.int64), np.zeros(0)
    i, j, b = np.array([0, 0, 0, 1, 1]), np.array([1, 2, 3, 2, 3]), np.array([0, 1, 1, 0, 2])
    n = np.array([2.0, 3.0, 1.0, 4.0, 5.0])
    low = np.arange(3.0)
    stays = Stays(2, 4, 3, i, j, b, n, n * (b + 0.5), low, low + 1, no, no, none, np.zeros(2))
    fit = fit_stays(stays)
    assert fit.hazard_all[0].tolist() == [1 / 3, 1.0, 0.0]
    assert fit.survival_end.tolist() == [0.0, 0.0]
    buckets = BucketStays(5, np.arange(5), np.arange(5), np.ones(5), b + 0.5, no, no, no, none, no, no, none)
    fast = move_influence(fit, stays, buckets)[0]
    for kind in range(5):
        expected = difference(stays, ("n", kind), lambda x: x.probability, 0.5)
        np.testing.assert_allclose(fast[kind], expected, rtol=1e-6, atol=1e-9)


def split_at_random(s: Stays, g: int, seed: int) -> BucketStays:
    """Every stay of the whole given to one of g buckets."""
    rng = np.random.default_rng(seed)

    def deal(n: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        parts = np.stack([rng.multinomial(int(x), np.full(g, 1 / g)) for x in n], axis=1)
        bucket, index = np.nonzero(parts)
        return bucket, index, parts[bucket, index].astype(float)

    (eb, ec, en), (ob, oi, on), (sb, si, sn) = deal(s.n), deal(s.open_n), deal(s.survivor_n)
    return BucketStays(g, eb, ec, en, en * (s.total / s.n)[ec], ob, s.open_state[oi], s.open_bin[oi], on, sb, si, sn)


@pytest.mark.parametrize("g", [4, 300])  # full and nearly empty tables: both kinds of product
def test_influence_of_moves_and_of_values_agree(g: int) -> None:
    stays = invented(8, m=4, k=9)
    fit = fit_stays(stays)
    buckets = split_at_random(stays, g, 8)
    rng = np.random.default_rng(9)
    weights = rng.normal(size=(3, len(fit.probability)))
    by_moves = sum(x @ w for x, w in zip(move_influence(fit, stays, buckets), weights, strict=True))
    c, s = fit.cell_move, fit.survivor_move
    phi = weights[0][c] + weights[1][c] * fit.tau + weights[2][c] * fit.tau2
    w = stays.survivor_dwell
    last = weights[0][s] + weights[1][s] * w + weights[2][s] * w * w
    by_value = cell_influence(fit, stays, buckets, phi, last)
    np.testing.assert_allclose(by_value, by_moves, atol=1e-12 * np.abs(by_moves).max())
    # twice the log gives the same answer, so the influences add up to nothing
    assert abs(by_value.sum()) < 1e-12 * np.abs(by_value).sum()


def test_rows_without_stays_and_cells_without_weight() -> None:
    stays = invented(2)
    gone = stays.state == 1
    n, total = np.where(gone, 0.0, stays.n), np.where(gone, 0.0, stays.total)
    values = dict(vars(stays)) | {"n": n, "total": total}
    values["open_n"] = np.where(stays.open_state == 1, 0.0, stays.open_n)
    values["survivor_n"] = np.where(np.arange(3) == 1, 0.0, stays.survivor_n)
    fit = fit_stays(Stays(**values))
    assert np.isfinite(fit.tau2).all()
    assert fit.probability[fit.move_state == 1].sum() == 0
    assert fit.survivor_move.tolist()[1] == -1
    assert fit.survival_end[1] == 1.0
    whole = fit_stays(stays)
    for i in (0, 2):
        np.testing.assert_array_equal(
            fit.probability[fit.move_state == i], whole.probability[whole.move_state == i]
        )


def test_whole_day_bins_keep_their_time() -> None:
    no, none = np.zeros(0, np.int64), np.zeros(0)
    day = np.array([0.0, 1.0, 2.0])
    stays = Stays(
        1, 2, 3, np.zeros(2, np.int64), np.ones(2, np.int64), np.array([0, 2]), np.array([1.0, 3.0]),
        np.array([0.0, 6.0]), day, day, no, no, none, np.zeros(1),
    )  # fmt: skip
    fit = fit_stays(stays, open_weight=0.0)
    assert fit.mean.tolist() == [1.5]
    assert fit.second.tolist() == [3.0]
