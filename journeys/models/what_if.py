"""What-ifs: a chain with one move made likelier, or less likely."""

from __future__ import annotations

import os
from collections.abc import Collection
from dataclasses import dataclass, fields, replace
from typing import Any

import numpy as np

from journeys.kernels.arrays import BoolArray, FloatArray, IntArray
from journeys.kernels.reweighted import Change, ReweightedStays
from journeys.models.fit import Influence, JourneyFit

WHAT_IF = "what-if"
NEW_MOVE = "what-if: a move never seen, with the dwell of the other moves"
_ROUNDING = 1e-12


@dataclass(frozen=True, eq=False)
class WhatIf(JourneyFit):
    """A fit in which moves were changed by hand. Every question takes it; it is no estimate of what would happen.

    Attributes
    ----------
    changes : tuple of (str, str, float)
        State, next state and change of the probability, in the order in which they were made.
    stays : ReweightedStays or None
        The binned stays behind the moves, for curves in time; None for a known chain.
    """

    changes: tuple[tuple[str, str, float], ...] = ()
    stays: ReweightedStays | None = None

    def __repr__(self) -> str:
        """Return one line."""
        told = ", ".join(f"{state!r} to {after!r} {change:+g}" for state, after, change in self.changes)
        return f"{super().__repr__()[:-1]}, what-if: {told}>"

    def save(self, path: str | os.PathLike[str]) -> None:
        """Refuse: the file of a fit holds what was counted.

        Raises
        ------
        ValueError
            Always.
        """
        msg = f"{os.fspath(path)!r}: a what-if is not kept in a file; save its fit, and change the move again"
        raise ValueError(msg)


def with_move(
    fit: JourneyFit,
    state: str,
    next_state: str,
    change: float,
    *,
    taken_from: str | Collection[str] | None = None,
) -> WhatIf:
    """Return the chain that has one move likelier by `change`.

    Parameters
    ----------
    fit : JourneyFit
        The chain.
    state, next_state : str
        The move. A move that was never made may be given a probability.
    change : float
        What is added to its probability, 0.01 for one point; below 0 to take away.
    taken_from : str or collection of str, optional
        Outcomes whose moves from `state` give the mass in proportion, or take it. Default: the outcomes that are not
        conversions, lapsed and churned ones.

    Returns
    -------
    WhatIf
        A new fit. Its state is flagged "what-if", so that answers that lean on it say so.

    Raises
    ------
    TypeError
        If `change` is no number.
    ValueError
        If a name is unknown, or a probability would leave 0 to 1; the message names the limits. If the chain does
        not say which outcomes are conversions and `taken_from` is not given.

    Notes
    -----
    The dwell of each move stays as it is; a move that was never made gets the dwell of all moves of its state. The
    influence of each bucket of customers is carried over by the chain rule, so that every answer and every curve has
    its linearised interval. Nothing is drawn again: a resample would need the change made anew, with other limits.

    Examples
    --------
    >>> import pandas as pd
    >>> chain = pd.DataFrame([[0.5, 0.3, 0.2]], index=["basket"], columns=["basket", "joined", "declined"])
    >>> fit = JourneyFit.from_matrix(chain)
    >>> fit.with_move("basket", "joined", 0.1, taken_from="declined").matrix.loc["basket"].round(3).tolist()
    [0.5, 0.4, 0.1]
    """
    row, to, delta = _named(fit, state, next_state, change)
    donor = _donors(fit, to, taken_from)
    grown, at = _with_place(fit, row, to)
    giving = np.flatnonzero((grown.move_state == row) & donor[grown.move_target])
    p = grown.probability
    mass = float(p[giving].sum())
    _refuse_beyond(state, next_state, delta, float(p[at]), mass)
    delta = min(max(delta, -float(p[at])), mass)
    after = p.copy()
    after[at] = max(p[at] + delta, 0.0)
    kept = 1.0 - delta / mass if mass > 0 else 1.0
    after[giving] = p[giving] * kept
    is_new = p[at] <= 0
    moments = [_moment(grown, column, after, row, at, is_new) for column in (grown.mean, grown.second)]
    flags = dict(fit.row_flags)
    told = [text for text in (flags.get(state, ""), NEW_MOVE if is_new else WHAT_IF) if text]
    flags[state] = "; ".join(dict.fromkeys(told))
    values: dict[str, Any] = {f.name: getattr(grown, f.name) for f in fields(JourneyFit)}
    values |= {
        "probability": after, "mean": moments[0], "second": moments[1], "row_flags": flags, "fitted_stays": None,
        "influence": _influence(grown, after, giving, row, at, delta, is_new),
    }  # fmt: skip
    before = fit.changes if isinstance(fit, WhatIf) else ()
    made = WhatIf(**values, changes=(*before, (state, next_state, float(change))))
    return replace(made, stays=_stays(fit, grown, made, row, at, is_new))


def _named(fit: JourneyFit, state: str, next_state: str, change: float) -> tuple[int, int, float]:
    """Return the places of a move, and its change as a number."""
    labels = fit.nodes.labels
    for name, known, what in ((state, labels[: fit.nodes.n_rows], "state"), (next_state, labels[1:], "next_state")):
        if name not in known:
            listed = ", ".join(repr(each) for each in known[:12])
            msg = f"{what}: {name!r} is not in this chain; wanted one of {listed}"
            raise ValueError(msg)
    if isinstance(change, bool | np.bool_) or not isinstance(change, int | float | np.integer | np.floating):
        msg = f"change: got {change!r}; wanted a number such as 0.01 for one point"
        raise TypeError(msg)
    if not np.isfinite(change):
        msg = f"change: got {change!r}; wanted a finite number such as 0.01 for one point"
        raise ValueError(msg)
    return labels.index(state), labels.index(next_state), float(change)


def _donors(fit: JourneyFit, to: int, taken_from: str | Collection[str] | None) -> BoolArray:
    """Return which nodes give the mass of the change or take it."""
    labels = np.array(fit.nodes.labels, dtype=object)
    is_outcome = np.arange(len(labels)) >= fit.nodes.n_rows
    others = is_outcome & (np.arange(len(labels)) != to)
    if taken_from is None:
        if not fit.converted and others.any():
            msg = (
                "taken_from is missing: this chain does not say which outcomes are conversions; wanted the outcomes "
                f"that give the mass, among {', '.join(repr(name) for name in labels[others][:12])}"
            )
            raise ValueError(msg)
        return np.asarray(others & ~np.isin(labels, fit.converted), dtype=np.bool_)
    names = (taken_from,) if isinstance(taken_from, str) else tuple(taken_from)
    strange = [name for name in names if name not in labels[others].tolist()]
    if strange or not names:
        what = repr(strange[0]) if strange else "nothing"
        listed = ", ".join(repr(name) for name in labels[others][:12]) or "an outcome, of which there is no other"
        msg = f"taken_from: got {what}; wanted outcomes among {listed}"
        raise ValueError(msg)
    return np.asarray(np.isin(labels, names), dtype=np.bool_)


def _refuse_beyond(state: str, next_state: str, delta: float, p: float, mass: float) -> None:
    """Raise a ValueError if the change takes a probability out of 0 to 1."""
    low = -p if mass > 0 and p > 0 else 0.0
    if not low - _ROUNDING <= delta <= mass + _ROUNDING:
        why = f"the move has {p:.6g}, the outcomes that give or take the mass have {mass:.6g}"
        if mass <= 0:
            why = f"{state!r} has no move to an outcome that could give or take mass"
        msg = f"change: got {delta:g} for {state!r} to {next_state!r}; wanted {low:.6g} to {mass:.6g}: {why}"
        raise ValueError(msg)


def _with_place(fit: JourneyFit, row: int, to: int) -> tuple[JourneyFit, int]:
    """Return the fit with a place for a move, perhaps of probability 0, and that place."""
    key, wanted = fit.move_state * fit.nodes.n_nodes + fit.move_target, row * fit.nodes.n_nodes + to
    at = int(np.searchsorted(key, wanted))
    if at < len(key) and key[at] == wanted:
        return fit, at
    put = {"move_state": row, "move_target": to, "probability": 0.0, "mean": 0.0, "second": 0.0}
    put["n_moves"] = np.nan if fit.influence is None else 0.0
    values: dict[str, Any] = {name: np.insert(getattr(fit, name), at, value) for name, value in put.items()}
    if fit.influence is not None:
        parts = (fit.influence.probability, fit.influence.mean, fit.influence.second)
        values["influence"] = Influence(*(np.insert(part, at, 0.0, axis=1) for part in parts))
    if fit.dwell is not None:
        mine = [fit.dwell[move] for move in np.flatnonzero(fit.move_state == row)]
        shared = mine[0] if mine and all(one is mine[0] for one in mine) else None
        values["dwell"] = (*fit.dwell[:at], shared, *fit.dwell[at:])
    return replace(fit, **values), at


def _moment(fit: JourneyFit, before: FloatArray, after_p: FloatArray, row: int, at: int, is_new: bool) -> FloatArray:
    """Return a moment of the dwell of each move, times its new probability."""
    p, mine = fit.probability, fit.move_state == row
    each = np.divide(before, p, out=np.zeros(len(p)), where=p > 0)
    after = np.where(mine, after_p * each, before)
    if is_new:
        after[at] = after_p[at] * before[mine].sum()
    return np.asarray(after, dtype=np.float64)


def _influence(
    fit: JourneyFit, after: FloatArray, giving: IntArray, row: int, at: int, delta: float, is_new: bool
) -> Influence | None:
    """Carry the influence of each bucket over to the changed moves, by the chain rule."""
    if fit.influence is None:
        return None
    p, old = fit.probability, fit.influence.probability
    mass = float(p[giving].sum())
    d_p = old.copy()
    if mass > 0:
        d_mass = old[:, giving].sum(axis=1, keepdims=True)
        d_p[:, giving] = old[:, giving] * (1.0 - delta / mass) + p[giving] * (delta / mass**2) * d_mass
    mine = np.flatnonzero(fit.move_state == row)
    found = [d_p]
    for before, d_before in ((fit.mean, fit.influence.mean), (fit.second, fit.influence.second)):
        used = mine[p[mine] > 0]
        each, scale = before[used] / p[used], after[used] / p[used]
        d_after = d_before.copy()
        d_after[:, used] = scale * d_before[:, used] + each * (d_p[:, used] - scale * old[:, used])
        if is_new:
            d_after[:, at] = after[at] * d_before[:, mine].sum(axis=1) + d_p[:, at] * before[mine].sum()
        found.append(d_after)
    return Influence(*found)


def _stays(
    fit: JourneyFit, grown: JourneyFit, made: WhatIf, row: int, at: int, is_new: bool
) -> ReweightedStays | None:
    """Return the binned stays behind the changed moves."""
    if isinstance(fit, WhatIf):
        before = fit.stays
    else:
        before = None if fit.fitted_stays is None else ReweightedStays.of(fit.fitted_stays)
    if before is None or grown.influence is None or made.influence is None:
        return None
    return before.changed(
        Change(
            at=at,
            grown=len(grown.probability) > len(fit.probability),
            is_new=is_new,
            mine=np.flatnonzero(grown.move_state == row),
            before=grown.probability,
            after=made.probability,
            d_before=grown.influence.probability,
            d_after=made.influence.probability,
        )
    )
