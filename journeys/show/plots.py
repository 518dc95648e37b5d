"""Pictures of answers: cumulative curves with bands, and dots with intervals on one axis.

Each function takes an answer and, if wanted, the Axes to draw on, and returns the Axes. They need matplotlib
(`pip install "journeys[report]"`), which is loaded when the first picture is drawn.

Examples
--------
>>> import matplotlib
>>> matplotlib.use("Agg")
>>> import pandas as pd
>>> from journeys.models.fit import JourneyFit
>>> from journeys.questions.outcomes import outcomes
>>> chain = pd.DataFrame([[0.6, 0.4]], index=["basket"], columns=["joined", "declined"])
>>> intervals(outcomes(JourneyFit.from_matrix(chain))).get_xlabel()
'probability (%), with 95 % interval'
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from journeys.questions.compare import CompareResult
from journeys.questions.credit import CreditResult
from journeys.questions.curve_result import PassageCurve
from journeys.questions.group_curves import GroupCurves
from journeys.questions.linear import TOO_FEW
from journeys.questions.removal import RemovalResult
from journeys.results import Result, printable
from journeys.show.curves import draw_curve, draw_groups, draw_observed, last_of, mark_median
from journeys.show.palette import BLUE, GREY, INK, PALE

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes

__all__ = ["intervals", "passage_curve"]

# The columns that an answer itself tells its rows apart by; columns of groups come before them.
_OWN_KEYS = ("start_state", "state", "next_state", "stage", "outcome", "after", "touchpoint", "rule", "measure",
             "horizon", "basis")  # fmt: skip
# Shares are drawn in percent, their differences in points.
_SHARES = ("probability", "converted", "reached", "of_stage_before", "went", "returned", "stage reached", "move")
_HOLLOW: dict[str, Any] = {"markerfacecolor": "white", "markeredgewidth": 1.4, "label": "see its flag"}


def passage_curve(
    curve: PassageCurve | GroupCurves, ax: Axes | None = None, log: bool | None = None, **kwargs: Any
) -> Axes:
    """Draw how the share that has reached a target grows, with its band and the median on the axis.

    Parameters
    ----------
    curve : PassageCurve or GroupCurves
        From `journeys.passage_curve`. By group: a curve for each, up to six, without a mark at the median; a group
        without one is named in the legend.
    ax : matplotlib Axes, optional
        Where to draw; default: a new figure.
    log : bool, optional
        Draw the log's own curve too, as a thin stepped line. Default: where there is one
        (`curve.has_observed`), not by group.
    **kwargs
        For the line of the curve (`Axes.plot`).

    Returns
    -------
    matplotlib Axes

    Raises
    ------
    ValueError
        If `log=True` where the log has no curve of its own, or there are more than six groups.

    Examples
    --------
    >>> import matplotlib
    >>> matplotlib.use("Agg")
    >>> import pandas as pd
    >>> from journeys.models.fit import JourneyFit
    >>> from journeys.questions.passage_curve import passage_curve as ask
    >>> chain = pd.DataFrame([[0.5, 0.5]], index=["basket"], columns=["basket", "joined"])
    >>> ax = passage_curve(ask(JourneyFit.from_matrix(chain), "joined", clock="steps"))
    >>> ax.get_xlabel()
    'steps from entry'
    """
    ax = _axes(ax, (6.4, 3.8))
    if isinstance(curve, GroupCurves):
        one, last = curve.any_curve, draw_groups(ax, curve, bool(log), kwargs)
    else:
        one, last = curve, last_of(curve)
        every = f"{100 * curve.confidence_level:g} % interval at each {'step' if curve.clock == 'steps' else 'time'}"
        draw_curve(ax, curve, last, {"color": BLUE, "label": "by the chain"} | kwargs, every)
        if log if log is not None else curve.has_observed:
            draw_observed(ax, curve, last, {"color": GREY, "label": "by the log alone"})
        mark_median(ax, curve)
    whom = "of those who reach it" if one.given else "of all who start"
    unit = "" if one.clock == "steps" else f" ({one.unit})"
    ax.set_xlabel(f"{'steps' if one.clock == 'steps' else 'time'} from {printable(one.start)}{unit}")
    ax.set_ylabel(f"{printable(_listed(one.to))}, % {whom}")
    ax.set_xlim(0, last if last > 0 else None)
    ax.set_ylim(0, None)
    ax.legend(frameon=False, loc="lower right", fontsize="small", labelcolor=INK)
    return ax


def intervals(
    result: Result,
    measure: str | None = None,
    ax: Axes | None = None,
    *,
    horizon: str | None = None,
    start: str | None = None,
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
        Such as "30d", of an answer by horizon; default: all of them, by group the end. By group, the log where the
        answer has both it and the model.
    start : str, optional
        Of an answer by where journeys start; default: all states, by group the entry.
    **kwargs
        For the dots (`Axes.plot`).

    Returns
    -------
    matplotlib Axes
        Flagged numbers are hollow; infinite ones, groups without a number, and those with too few
        journeys for one, stand in words at the edge.
        Differences (`journeys.compare`) have a line at zero.

    Raises
    ------
    ValueError
        If the answer has no such measure, horizon or start.

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
    frame, told = _rows(result, measure, horizon, start)
    kind = told["measure"].split(" within ")[0]
    is_share = kind in _SHARES or (not kind and bool(frame["estimate"].dropna().between(-1, 1).all()))
    factor = 100.0 if is_share else 1.0
    values, low, high = (factor * frame[name].to_numpy(dtype=float) for name in ("estimate", "low", "high"))
    flagged = (frame["flag"] != "").to_numpy()
    ax = _axes(ax, (6.4, 0.9 + 0.3 * len(frame)))
    y = np.arange(len(frame))[::-1]
    if isinstance(result, CompareResult):
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
    result: Result, measure: str | None, horizon: str | None, start: str | None
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
        ("basis", None, "basis"),
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
    labels = [between.join(filter(None, map(str, parts))) for parts in frame[shown].to_numpy(dtype=object)]
    return frame.assign(name=labels).reset_index(drop=True), told


def _not_there(name: str, wanted: str, known: Sequence[str]) -> str:
    if not known:
        return f"{name}={wanted!r}: this answer has no {name}s to choose from; leave it out"
    return f"{name}={wanted!r} is not in this answer; wanted one of {', '.join(map(repr, known))}"


def _axis_name(result: Result, told: dict[str, str], is_share: bool) -> str:
    measure = told["measure"]
    what = f"mean {measure}" if measure in ("steps", "days") else measure.replace("_", " ")
    what = _of_touchpoints(result, measure) or what or ("probability" if is_share else "estimate")
    differs = isinstance(result, CompareResult)
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


def _axes(ax: Axes | None, size: tuple[float, float]) -> Axes:
    """Return the axes given, or new ones: ink on white, without a frame."""
    if ax is None:
        from matplotlib.figure import Figure
        from matplotlib.pyplot import subplots

        figure: Figure
        figure, ax = subplots(figsize=size, layout="constrained")
    for side in ("top", "right"):
        ax.spines[side].set_visible(False)
    for side in ("left", "bottom"):
        ax.spines[side].set_color(GREY)
    ax.tick_params(colors=INK, labelsize="small")
    ax.xaxis.label.set_color(INK)
    ax.yaxis.label.set_color(INK)
    return ax


def _listed(names: Sequence[str]) -> str:
    return names[0] if len(names) == 1 else ", ".join(names[:-1]) + " or " + names[-1]
