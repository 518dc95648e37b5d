"""Which states a question about touchpoints is asked of."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass

import numpy as np

from journeys.kernels.arrays import BoolArray, FloatArray, IntArray
from journeys.kernels.removal import Road, road
from journeys.models.fit import JourneyFit

Touchpoints = str | Collection[str | Collection[str]] | None
# So many states are asked about without being named.
MOST_UNNAMED = 500


@dataclass(frozen=True, eq=False)
class Asked:
    """The ways from entry to the target, and the touchpoints on them.

    Attributes
    ----------
    way : Road
        The ways.
    names : tuple of str
        Of the touchpoints, "a + b" for two taken together.
    groups : list of int arrays
        Their states.
    n_conversions : float
        Arrivals at the target that were counted; NaN in a known chain.
    """

    way: Road
    names: tuple[str, ...]
    groups: list[IntArray]
    n_conversions: float


def asked(
    fit: JourneyFit, to: str | Collection[str] | None, touchpoints: Touchpoints, *, singly: bool = False
) -> Asked:
    """Return what is asked about.

    Parameters
    ----------
    fit : JourneyFit
        The chain.
    to : str, collection of str or None
        The target.
    touchpoints : str, collection or None
        States; a tuple, list or set among them is one touchpoint. None: those that the rules name as touchpoints,
        else every state; but none that is in the target.
    singly : bool
        Refuse touchpoints of several states.

    Raises
    ------
    TypeError
        If a touchpoint is no name.
    ValueError
        If one is no state, is in the target, comes twice, or none is left; if more than 500 states were unnamed.

    Examples
    --------
    >>> import pandas as pd
    >>> chain = pd.DataFrame(
    ...     [[0.0, 0.5, 0.5], [0.0, 0.0, 1.0]], index=["visit", "price"], columns=["visit", "price", "joined"])
    >>> found = asked(JourneyFit.from_matrix(chain), "joined", ["price", ("visit", "price")])
    >>> found.names, [group.tolist() for group in found.groups]
    (('price', 'visit + price'), [[2], [1, 2]])
    """
    is_target = fit.target_mask(to)
    groups = [_group(one, singly) for one in _several(fit, touchpoints, is_target)]
    if not groups:
        msg = "touchpoints: none is left; wanted one or more states of the chain that are not in `to`"
        raise ValueError(msg)
    rows = [np.concatenate([_rows(fit, name, is_target) for name in group]) for group in groups]
    names = tuple(" + ".join(group) for group in groups)
    twice = [name for i, name in enumerate(names) if name in names[:i]]
    twice += [group[0] for group in groups if len(set(group)) < len(group)]
    if twice:
        msg = f"touchpoints: {twice[0]!r} stands there twice; wanted each once"
        raise ValueError(msg)
    way = road(
        fit.nodes.n_rows, fit.nodes.n_nodes, fit.move_state, fit.move_target, fit.probability, fit.mean, is_target
    )
    return Asked(way, names, rows, float(fit.n_moves[is_target[fit.move_target]].sum()))


def influenced(fit: JourneyFit, by_p: FloatArray, by_mean: FloatArray | None = None) -> FloatArray:
    """Return the influence of each bucket of customers on answers with these derivatives by the moves.

    Parameters
    ----------
    fit : JourneyFit
        The chain; a known one has no buckets.
    by_p, by_mean : float arrays, shape (n_answers, n_moves)
        Derivatives by the probability and the mean of each move.

    Returns
    -------
    float array, shape (n_buckets, n_answers)
    """
    if fit.influence is None:
        return np.zeros((0, len(by_p)))
    found = fit.influence.probability @ by_p.T
    if by_mean is not None:
        found = found + fit.influence.mean @ by_mean.T
    return np.asarray(found, dtype=np.float64)


def _several(fit: JourneyFit, touchpoints: Touchpoints, is_target: BoolArray) -> list[str | Collection[str]]:
    if isinstance(touchpoints, str):
        return [touchpoints]
    if touchpoints is not None:
        if not isinstance(touchpoints, Collection):
            msg = f"touchpoints: got {touchpoints!r}; wanted names of states, or None for all"
            raise TypeError(msg)
        return list(touchpoints)
    named = () if fit.tally is None else fit.tally.rules.named_touchpoints
    last = fit.nodes.last_states
    there, aside = dict.fromkeys(last), {last[node - 1] for node in np.flatnonzero(is_target[: fit.nodes.n_rows])}
    states = [name for name in named or there if name in there and name not in aside]
    if len(states) > MOST_UNNAMED:
        msg = f"touchpoints: the chain has {len(states):,} states; wanted those of interest named, above {MOST_UNNAMED}"
        raise ValueError(msg)
    return list(states)


def _group(one: object, singly: bool) -> tuple[str, ...]:
    if isinstance(one, str):
        return (one,)
    if isinstance(one, Collection) and not singly and one and all(isinstance(name, str) for name in one):
        return tuple(one)
    wanted = "the name of a state" if singly else "the name of a state, or several in a tuple"
    msg = f"touchpoints: got {one!r} among them; wanted {wanted}"
    raise TypeError(msg)


def _rows(fit: JourneyFit, name: str, is_target: BoolArray) -> IntArray:
    rows = fit.nodes.rows_of(name)
    if not len(rows):
        listed = ", ".join(repr(each) for each in dict.fromkeys(fit.nodes.last_states[:12]))
        msg = f"touchpoints: {name!r} is not a state of this chain; wanted names among {listed}"
        raise ValueError(msg)
    if is_target[rows].any():
        msg = f"touchpoints: {name!r} is in `to` itself; wanted states that lead there"
        raise ValueError(msg)
    return rows
