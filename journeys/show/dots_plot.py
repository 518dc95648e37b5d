"""Dots with intervals on one axis: what most pictures of answers are made by."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np

from journeys.markup import short_name
from journeys.questions.compare import CompareResult
from journeys.questions.credit import CreditResult
from journeys.questions.linear import TOO_FEW
from journeys.questions.removal import RemovalResult
from journeys.questions.sensitivity import SensitivityResult
from journeys.results import Result, printable
from journeys.show.axes import BLUE, GREY, INK, PALE, axes

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes

_Answer = TypeVar("_Answer", bound=Result)
# The columns that an answer itself tells its rows apart by; columns of groups come before them.
_OWN_KEYS = ("start_state", "state", "next_state", "stage", "outcome", "after", "touchpoint", "rule", "measure",
             "horizon", "basis")  # fmt: skip
# Shares are drawn in percent, their differences in points.
_SHARES = ("probability", "converted", "reached", "of_stage_before", "went", "returned", "stage reached", "move",
           "largest_customer_share")  # fmt: skip
_HOLLOW: dict[str, Any] = {"markerfacecolor": "white", "markeredgewidth": 1.4, "label": "see its flag"}


def intervals(
    result: Result,
    measure: str | None = None,
    ax: Axes | None = None,
    *,
    horizon: str | None = None,
    start: str | None = None,
    basis: str | None = None,
    **kwargs: Any,
) -> Axes:
    """Draw the numbers of an answer as dots with their intervals on one axis.

    Parameters
    ----------
    result : Result
        Such as from `journeys.first_passage` or `journeys.outcomes`, by group too, or from `journeys.compare`.
    measure : str, optional
        Which measure, where the answer has several; default: the first.
    ax : matplotlib Axes, optional
        Where to draw; default: a new figure.
    horizon : str, optional
        Such as "30d", of an answer by horizon; default: all of them, by group the end.
    start : str, optional
        Of an answer by where journeys start; default: all states, by group the entry.
    basis : str, optional
        "log" or "model", of an answer that has both; default: both, by group the log.
    **kwargs
        For the dots (`Axes.plot`).

    Returns
    -------
    matplotlib Axes
        Flagged numbers are hollow; infinite ones, groups without a number, and those with too few
        journeys for one, stand in words at the edge.
        Differences (`journeys.compare`, `journeys.sensitivity`) have a line at zero.

    Raises
    ------
    ValueError
        If the answer has no such measure, horizon, start or basis.

    Examples
    --------
    >>> import matplotlib
    >>> matplotlib.use("Agg")
    >>> import pandas as pd
    >>> from journeys.models.fit import JourneyFit
    >>> from journeys.questions.outcomes import outcomes
    >>> chain = pd.DataFrame([[0.5, 0.3, 0.2]], index=["basket"], columns=["basket", "joined", "declined"])
    >>> ax = intervals(outcomes(JourneyFit.from_matrix(chain)))
    >>> [label.get_text() for label in ax.get_yticklabels()]
    ['entry, joined', 'entry, declined', 'basket, joined', 'basket, declined']
    """
    frame, told = _rows(result, measure, horizon, start, basis)
    kind = told["measure"].split(" within ")[0]
    is_share = kind in _SHARES or (not kind and bool(frame["estimate"].dropna().between(-1, 1).all()))
    factor = 100.0 if is_share else 1.0
    values, low, high = (factor * frame[name].to_numpy(dtype=float) for name in ("estimate", "low", "high"))
    flagged = (frame["flag"] != "").to_numpy()
    ax = axes(ax, (6.4, 0.9 + 0.3 * len(frame)))
    y = np.arange(len(frame))[::-1]
    if isinstance(result, CompareResult | SensitivityResult):
        ax.axvline(0.0, color=INK, linewidth=0.8, zorder=1)
    bounded = np.isfinite(values) & np.isfinite(low) & np.isfinite(high)
    ax.hlines(y[bounded], low[bounded], high[bounded], color=GREY, linewidth=2.2, zorder=2)
    _dots(ax, values, y, flagged, kwargs)
    for at, name in zip(y[~np.isfinite(values)], frame["flag"][~np.isfinite(values)], strict=True):
        ax.annotate(
            printable(name) or "no number", (1.0, at), xycoords=("axes fraction", "data"), xytext=(-4, 0),
            textcoords="offset points", ha="right", va="center", fontsize="small", color=INK, style="italic",
        )  # fmt: skip
    ax.set_yticks(y, [printable(name) for name in frame["name"]])
    ax.set_ylim(-0.7, len(frame) - 0.3)
    if not np.isfinite(values).any():
        ax.set_xticks([])
    ax.set_xlabel(_axis_name(result, told, is_share))
    ax.grid(axis="x", color=PALE, linewidth=0.6, zorder=0)
    ax.tick_params(axis="y", length=0)
    ax.spines["left"].set_visible(False)
    if (flagged & np.isfinite(values)).any():
        ax.legend(frameon=False, loc="lower right", bbox_to_anchor=(1.0, 1.0), fontsize="small", labelcolor=INK)
    return ax


def _dots(ax: Axes, values: np.ndarray, y: np.ndarray, flagged: np.ndarray, kwargs: dict[str, Any]) -> None:
    """Draw the dots, flagged ones hollow."""
    dots: dict[str, Any] = {"linestyle": "none", "marker": "o", "markersize": 6, "color": BLUE, "zorder": 3} | kwargs
    for mask, hollow in ((~flagged, False), (flagged, True)):
        shown = mask & np.isfinite(values)
        if shown.any():
            ax.plot(values[shown], y[shown], **(dots | _HOLLOW if hollow else dots))


def _rows(
    result: Result, measure: str | None, horizon: str | None, start: str | None, basis: str | None
) -> tuple[pd.DataFrame, dict[str, str]]:
    """Return the rows to draw with a name for each, and what they are of, by key."""
    frame, columns = result.to_frame(), list(result.keys.columns)
    groups = [name for name in columns if name not in _OWN_KEYS]
    own = [name for name in columns if name in _OWN_KEYS]
    # A group that could not be fitted is one row without keys: it stays, with the words that say why.
    blank = (frame[own] == "").all(axis=1) & bool(groups)
    told = {"measure": "", "horizon": ""}
    for key, wanted, name in (
        ("measure", measure, "measure"), ("horizon", horizon, "horizon"), ("start_state", start, "start"),
        ("basis", basis, "basis"),
    ):  # fmt: skip
        known = list(dict.fromkeys(frame.loc[~blank, key])) if key in own else []
        if wanted is not None and wanted not in known:
            raise ValueError(_not_there(name, wanted, known))
        if known and wanted is None and (key == "measure" or groups):
            wanted = known[0] if key != "horizon" else "in the end" if "in the end" in known else known[-1]
        if wanted is not None:
            told[key] = wanted
            keep = blank | (frame[key] == wanted)
            frame, blank = frame[keep].copy(), blank[keep]
    shown = [name for name in own if name != "measure" and not told.get(name)]
    if groups:
        shown = [*groups, *(name for name in shown if frame.loc[~blank, name].nunique() > 1)]
        # A share of two or three journeys has an interval so wide that no other could be read beside it.
        frame.loc[frame["flag"].str.contains(TOO_FEW), ["estimate", "low", "high"]] = np.nan
    elif isinstance(result, CreditResult):
        shown = [name for name in shown if frame[name].nunique() > 1]
    between = " · " if groups else ", "
    names = frame[shown].to_numpy(dtype=object)
    labels = [between.join(short_name(str(part)) for part in parts if str(part)) for parts in names]
    return frame.assign(name=labels).reset_index(drop=True), told


_PLURAL = {"basis": "bases"}


def _not_there(name: str, wanted: str, known: Sequence[str]) -> str:
    if not known:
        return f"{name}={wanted!r}: this answer has no {_PLURAL.get(name, f'{name}s')} to choose from; leave it out"
    return f"{name}={wanted!r} is not in this answer; wanted one of {', '.join(map(repr, known))}"


def _axis_name(result: Result, told: dict[str, str], is_share: bool) -> str:
    measure = told["measure"]
    what = f"mean {measure}" if measure in ("steps", "days") else measure.replace("_", " ")
    what = _of_touchpoints(result, measure) or what or ("probability" if is_share else "estimate")
    differs = isinstance(result, CompareResult | SensitivityResult)
    shown = ("points" if differs else "%") if is_share else getattr(result, "unit", "")
    if (horizon := told["horizon"]) and is_share:
        what += f" {'within ' if horizon[0].isdigit() else ''}{horizon}"
    if told.get("basis") == "log":
        what += " by the log"
    if told.get("start_state", "entry") != "entry":
        what += f" from {printable(told['start_state'])}"
    level = f"with {100 * result.confidence_level:g} % interval"
    return f"{'difference in ' if differs else ''}{what}{f' ({shown})' if shown else ''}, {level}"


def _of_touchpoints(result: Result, measure: str) -> str:
    """Return what a number about touchpoints is, nothing of other answers."""
    if isinstance(result, CreditResult):
        return f"share of the {result.weight if result.weight == 'conversions' else 'value of conversions'}"
    if isinstance(result, RemovalResult):
        told = {"stop": "conversions that passed here", "divert": "conversions lost"}
        return told.get(result.how, f"{measure} saved")
    return ""


def answer_to(result: Result, kind: type[_Answer]) -> _Answer:
    """Return the answer if it is one to the question that is drawn."""
    if not isinstance(result, kind):
        msg = f"result: got {type(result).__name__}; wanted {kind.__name__}, or plots.intervals for any answer"
        raise TypeError(msg)
    return result


def some_rows(result: _Answer, mask: np.ndarray) -> _Answer:
    """Return some rows of an answer."""
    counts = {name: np.asarray(values)[mask] for name, values in result.counts.items()}
    keys = result.keys[mask].reset_index(drop=True)
    return replace(result, keys=keys, estimates=result.estimates.take(mask), flag=result.flag[mask], counts=counts)
