"""A known chain: given probabilities and dwells instead of a log, and therefore no uncertainty."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from journeys.kernels.arrays import FloatArray
from journeys.models.fit import JourneyFit, with_dead_ends
from journeys.models.memory import Nodes

if TYPE_CHECKING:
    import pandas as pd

# A row of probabilities written with a dozen decimals sums to 1 within this.
ROW_SUM_TOLERANCE = 1e-9


def from_matrix(frame: pd.DataFrame, dwell: Any = None, entry: Any = None) -> JourneyFit:
    """Return a known chain as a fit that every question takes.

    Parameters
    ----------
    frame : DataFrame, shape (n_states, n_states + n_outcomes)
        Transition probabilities. Index: the states. Columns: the states and the outcomes, in any order; a
        state's column may be missing where nothing moves to it. Square with the same names: no outcomes.
    dwell : mapping, optional
        Dwell in days by state or by (state, next state): a mean, or a frozen distribution of `scipy.stats`.
        Without it only questions in steps have an answer; with means only, no spreads in time.
    entry : str or mapping of str to float, optional
        The state every journey begins in, or probabilities by state. Default: the first state.

    Returns
    -------
    JourneyFit
        Its numbers have a standard error of zero. Steps from entry count the move into the first state.

    Raises
    ------
    TypeError
        If `frame` is no DataFrame, or `dwell` or `entry` is of another kind than above.
    ValueError
        If names repeat or are reserved, numbers are not probabilities, a row does not sum to 1, or `dwell`
        or `entry` name something unknown.

    Examples
    --------
    >>> import pandas as pd
    >>> chain = pd.DataFrame([[0.5, 0.3, 0.2]], index=["basket"], columns=["basket", "joined", "declined"])
    >>> fit = from_matrix(chain, dwell={"basket": 2.0})
    >>> fit.outcomes
    ('joined', 'declined')
    """
    states, outcomes, cells = _checked(frame)
    nodes = Nodes(states, outcomes)
    row, column = np.nonzero(cells)
    begin = _entry_probabilities(states, entry)
    first = np.flatnonzero(begin)
    state = np.concatenate([np.zeros(len(first), np.int64), row + 1])
    target = np.concatenate([first + 1, column + 1])
    probability = np.concatenate([begin[first], cells[row, column]])
    given = _dwells(nodes, state, target, dwell)
    mean, second = _dwell_moments(nodes, state, target, given)
    flags: dict[str, str] = {}
    state, target, columns, kept = with_dead_ends(
        nodes, state, target, [probability, probability * mean, probability * second], flags
    )
    return JourneyFit(
        nodes=nodes,
        converted=outcomes if len(outcomes) == 1 else (),
        move_state=state,
        move_target=target,
        n_moves=np.full(len(kept), np.nan),
        probability=columns[0],
        mean=columns[1],
        second=columns[2],
        row_flags=flags,
        open_moves="known",
        dwell=tuple(given[i] if i >= 0 and hasattr(given[i], "cdf") else None for i in kept.tolist()),
    )


def _checked(frame: pd.DataFrame) -> tuple[tuple[str, ...], tuple[str, ...], FloatArray]:
    import pandas as pd

    if not isinstance(frame, pd.DataFrame):
        msg = f"frame: got {type(frame).__name__}; wanted a pandas DataFrame of probabilities, one row a state"
        raise TypeError(msg)
    states = tuple(str(name) for name in frame.index)
    columns = tuple(str(name) for name in frame.columns)
    for names, where in ((states, "index"), (columns, "columns")):
        twice = [name for i, name in enumerate(names) if name in names[:i]]
        if twice:
            msg = f"frame: {twice[0]!r} stands twice in the {where}; wanted each name once"
            raise ValueError(msg)
    if not states or not columns:
        msg = f"frame: got shape {frame.shape}; wanted at least one state and one column"
        raise ValueError(msg)
    reserved = [name for name in (*states, *columns) if name in ("entry", "open", "unknown")]
    reserved += [name for name in states if name == "lapsed"]
    if reserved:
        msg = f"frame: {reserved[0]!r} is a name the chain keeps for itself; wanted another name"
        raise ValueError(msg)
    outcomes = tuple(name for name in columns if name not in set(states))
    try:
        cells = frame.set_axis(columns, axis=1).reindex(columns=[*states, *outcomes], fill_value=0.0).to_numpy(float)
    except (TypeError, ValueError):
        msg = "frame: not all cells are numbers; wanted probabilities"
        raise ValueError(msg) from None
    bad = np.argwhere(~((cells >= 0) & (cells <= 1 + ROW_SUM_TOLERANCE)))
    if len(bad):
        i, j = bad[0]
        msg = f"frame: {states[i]!r} to {(*states, *outcomes)[j]!r} is {cells[i, j]}; wanted probabilities from 0 to 1"
        raise ValueError(msg)
    off = np.flatnonzero(np.abs(cells.sum(axis=1) - 1) > ROW_SUM_TOLERANCE)
    if len(off):
        msg = (
            f"frame: the row of {states[off[0]]!r} sums to {cells[off[0]].sum():.12g}; wanted rows that sum to 1 "
            "(add an outcome for what is missing)"
        )
        raise ValueError(msg)
    return states, outcomes, cells / cells.sum(axis=1, keepdims=True)


def _entry_probabilities(states: tuple[str, ...], entry: Any) -> FloatArray:
    if entry is not None and not isinstance(entry, str | Mapping):
        msg = f"entry: got {entry!r}; wanted a state or a mapping from state to probability"
        raise TypeError(msg)
    shares = {states[0]: 1.0} if entry is None else {entry: 1.0} if isinstance(entry, str) else dict(entry)
    unknown = [name for name in shares if name not in states]
    if unknown:
        msg = f"entry: {unknown[0]!r} is not a state; wanted one of {', '.join(map(repr, states[:12]))}"
        raise ValueError(msg)
    begin = np.array([_number(shares.get(name, 0.0)) for name in states])
    # Written so that NaN is refused too.
    if not ((begin >= 0).all() and abs(begin.sum() - 1) <= ROW_SUM_TOLERANCE):
        msg = f"entry: the probabilities are {shares}; wanted numbers from 0 that sum to 1"
        raise ValueError(msg)
    return np.asarray(begin / begin.sum(), dtype=np.float64)


def _dwells(nodes: Nodes, state: np.ndarray, target: np.ndarray, dwell: Any) -> list[Any]:
    """Return what is given of the dwell of each move; None for nothing."""
    given: list[Any] = [None] * len(state)
    if dwell is None:
        return given
    if not isinstance(dwell, Mapping):
        msg = f"dwell: got {type(dwell).__name__}; wanted a mapping from state or (state, next state) to days"
        raise TypeError(msg)
    labels = np.array(nodes.labels, dtype=object)
    pairs = list(zip(labels[state], labels[target], strict=True))
    known = {*nodes.states, *pairs}
    unknown = [key for key in dwell if key not in known]
    if unknown:
        msg = f"dwell: {unknown[0]!r} is neither a state nor a (state, next state) with a probability above 0"
        raise ValueError(msg)
    for move, (origin, to) in enumerate(pairs):
        if state[move] > 0:
            given[move] = dwell.get((origin, to), dwell.get(origin))
    return given


def _dwell_moments(
    nodes: Nodes, state: np.ndarray, target: np.ndarray, given: list[Any]
) -> tuple[FloatArray, FloatArray]:
    """Return mean and mean square of the dwell of each move; NaN where it is not given."""
    mean, second = np.full(len(state), np.nan), np.full(len(state), np.nan)
    mean[state == 0] = second[state == 0] = 0.0
    for move, value in enumerate(given):
        if value is not None:
            mean[move], second[move] = _moments(value, (nodes.labels[state[move]], nodes.labels[target[move]]))
    return mean, second


def _moments(value: Any, move: tuple[str, str]) -> tuple[float, float]:
    if hasattr(value, "mean") and hasattr(value, "var"):
        mean, square = float(value.mean()), float(value.var()) + float(value.mean()) ** 2
        low = float(value.support()[0])
    else:
        mean, square, low = _number(value), np.nan, _number(value)
    if not np.isfinite(mean) or low < 0:
        msg = f"dwell of {move[0]!r} to {move[1]!r}: got {value!r}; wanted days from 0 with a finite mean"
        raise ValueError(msg)
    return mean, square


def _number(value: Any) -> float:
    """Return a float; NaN, which no check lets pass, for what is no number."""
    try:
        return float(value) if not isinstance(value, str) else np.nan
    except (TypeError, ValueError):
        return np.nan
