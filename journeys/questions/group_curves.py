"""What `passage_curve` gives back with `by`: a curve per group."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from journeys.errors import LogError
from journeys.kernels.arrays import FloatArray
from journeys.models.fit import JourneyFit, NotInChainError
from journeys.models.group_fits import group_fits
from journeys.questions.curve_result import PassageCurve
from journeys.results import printable, text_table
from journeys.tally.groups import Group

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True, eq=False, repr=False)
class GroupCurves:
    """How many have reached a target by when, from one start, group by group (see `passage_curve`).

    Attributes
    ----------
    by : tuple of str
        Columns that journeys are grouped by.
    curves : dict of tuple to PassageCurve or None
        The curve of each group, by the values of those columns and in their order; None where it has none.
    why : dict of tuple to str
        Why a group has no curve; empty where it has one.
    """

    by: tuple[str, ...]
    curves: dict[Group, PassageCurve | None]
    why: dict[Group, str]

    @property
    def any_curve(self) -> PassageCurve:
        """One of the curves, for what is the same in all: start, target, clock, unit, of whom, level."""
        return next(curve for curve in self.curves.values() if curve is not None)

    @property
    def probability(self) -> FloatArray:
        """Probability of ever reaching the target, shape (n_groups,); NaN where there is no curve."""
        return np.array([np.nan if curve is None else curve.probability for curve in self.curves.values()])

    def at(self, times: npt.ArrayLike) -> FloatArray:
        """Return the share of each group that has reached the target by each time.

        Parameters
        ----------
        times : array_like
            As in `PassageCurve.at`, the same for all groups.

        Returns
        -------
        float array of shape (n_groups, *shape of times)
            Groups in the order of `curves`; NaN where one has no curve.
        """
        nothing = np.full(self.any_curve.at(times).shape, np.nan)
        return np.stack([nothing if curve is None else curve.at(times) for curve in self.curves.values()])

    def to_frame(self, times: npt.ArrayLike | None = None) -> pd.DataFrame:
        """Return one tidy row per group and time.

        Parameters
        ----------
        times : array_like, optional
            As in `PassageCurve.at`, the same for all groups. Default: for each group some 60 that show its whole
            curve, which are not those of another.

        Returns
        -------
        DataFrame
            The columns of the groups, then those of `PassageCurve.to_frame`. A group without a curve is one row
            without a number, whose flag says why.
        """
        return self._under_another(lambda curve: curve.to_frame(times))

    def quantile(
        self, p: float | Sequence[float] = (0.5, 0.9), *, confidence_level: float | None = None
    ) -> pd.DataFrame:
        """Return by when some shares of each group have reached the target.

        Parameters
        ----------
        p : float or sequence of float
            Shares between 0 and 1, of each group by itself.
        confidence_level : float, optional
            Default: that of the curves.

        Returns
        -------
        DataFrame
            The columns of the groups, then those of `PassageCurve.quantile`, a row per share.
        """
        return self._under_another(lambda curve: curve.quantile(p, confidence_level=confidence_level))

    def confidence_interval(self, confidence_level: float = 0.95) -> pd.DataFrame:
        """Return the bands at another level, without computing the curves again.

        Parameters
        ----------
        confidence_level : float
            Between 0 and 1.

        Returns
        -------
        DataFrame
            The columns of the groups, time (or steps), low, high, confidence_level.
        """
        return self._under_another(lambda curve: curve.confidence_interval(confidence_level))

    def given_reached(self) -> GroupCurves:
        """Return the curves of those who ever reach the target, from the same solutions."""
        return self._of(PassageCurve.given_reached)

    def of_all(self) -> GroupCurves:
        """Return the curves of all who start, from the same solutions."""
        return self._of(PassageCurve.of_all)

    def summary(self) -> str:
        """Return the answer as plain text: each group's share in the end, median and 90 % quantile."""
        one, rows = self.any_curve, []
        for group, curve in self.curves.items():
            name = [printable(str(value)) for value in group]
            if curve is None:
                rows.append([*name, "", "", "", self.why[group]])
                continue
            (half, most), flags = _quantiles_told(curve)
            rows.append([*name, f"{100 * curve.probability:.1f}", half, most, flags])
        n = len(self.by)
        return "\n".join(
            [
                f"From {one.start} to {', '.join(one.to)}: % who reach it in the end, and when half, and 90 % of those "
                f"have done so, in {one.unit}, intervals at {100 * one.confidence_level:g} %",
                text_table([[*self.by, "reach it, %", "half", "90 %", "flag"], *rows], right=[n], width=0),
            ]
        )

    def __repr__(self) -> str:
        """Return one line."""
        return f"<GroupCurves: {len(self.curves)} groups of {', '.join(self.by)}, {repr(self.any_curve)[1:-1]}>"

    def _repr_html_(self) -> str:
        return str(self.quantile().to_html(index=False, escape=True))

    def _of(self, kind: Callable[[PassageCurve], PassageCurve]) -> GroupCurves:
        return replace(
            self, curves={group: None if curve is None else kind(curve) for group, curve in self.curves.items()}
        )

    def _under_another(self, ask: Callable[[PassageCurve], pd.DataFrame]) -> pd.DataFrame:
        """Return the answers of all groups, one under another, the group columns first."""
        import pandas as pd

        frames = [None if curve is None else ask(curve) for curve in self.curves.values()]
        first = next(frame for frame in frames if frame is not None)
        blanks = [first.iloc[:1].assign(**dict.fromkeys(_numbers(first), np.nan)) for _ in frames]
        whole = [blank if frame is None else frame for frame, blank in zip(frames, blanks, strict=True)]
        if "flag" in first:
            whole = [
                part.assign(flag=why) if frame is None else part
                for part, frame, why in zip(whole, frames, self.why.values(), strict=True)
            ]
        lengths = [len(part) for part in whole]
        columns = pd.DataFrame(list(self.curves), columns=list(self.by))
        rows = columns.iloc[np.repeat(np.arange(len(lengths)), lengths)].reset_index(drop=True)
        return pd.concat([rows, pd.concat(whole, ignore_index=True)], axis=1)


def _numbers(frame: pd.DataFrame) -> list[str]:
    return [str(name) for name in frame.columns if name not in ("confidence_level", "flag")]


def _quantiles_told(curve: PassageCurve) -> tuple[list[str], str]:
    """Return median and 90 % quantile of those who reach it with their intervals, and the flags of both."""
    frame = curve.given_reached().quantile((0.5, 0.9))
    numbers = frame[["estimate", "low", "high"]].to_numpy(np.float64).tolist()
    told = ["" if np.isnan(value) else f"{value:.4g} ({low:.4g} to {high:.4g})" for value, low, high in numbers]
    return told, "; ".join(dict.fromkeys(flag for flag in frame["flag"] if flag))


def group_curves(fit: JourneyFit, by: str | Sequence[str], ask: Callable[[JourneyFit], PassageCurve]) -> GroupCurves:
    """Return the curve of every group of journeys.

    Parameters
    ----------
    fit : JourneyFit
        A fit to a tally of journeys grouped by at least those columns.
    by : str or sequence of str
        Names of the columns.
    ask : callable
        From a group's fit to its curve.

    Raises
    ------
    LogError
        If no group has a curve, or the fit is a known chain.
    ValueError
        If a column is not one that journeys are grouped by.
    """
    names = (by,) if isinstance(by, str) else tuple(by)
    curves: dict[Group, PassageCurve | None] = {}
    why: dict[Group, str] = {}
    for one in group_fits(fit, names):
        curves[one.values], why[one.values] = None, one.why
        if one.fit is not None:
            try:
                curves[one.values] = ask(one.fit)
            except NotInChainError as error:
                why[one.values] = error.briefly
    if all(curve is None for curve in curves.values()):
        msg = (
            f"by: no group of {', '.join(names)} can carry a curve ({'; '.join(dict.fromkeys(why.values()))}); wanted "
            "larger groups or a longer log"
        )
        raise LogError(msg)
    return GroupCurves(names, curves, why)
