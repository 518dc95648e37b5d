"""Where rules for credit differ, in words."""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    import pandas as pd

# Differences smaller than these many points are not worth a sentence; nor are more sentences than so many.
_POINTS = 0.05
_MOST = 4
_ENDS = ("_one", "_other")


def rules_differ(frame: pd.DataFrame) -> list[str]:
    """Return sentences on the touchpoints that two rules credit most differently.

    Parameters
    ----------
    frame : DataFrame
        Columns touchpoint, rule, basis, estimate, and any columns of groups before them. A difference is told of
        where the intervals (low, high) lie apart.

    Returns
    -------
    list of str
        The largest differences first, four at most.

    Examples
    --------
    >>> import pandas as pd
    >>> frame = pd.DataFrame({"touchpoint": "poster", "rule": ["first", "last"], "basis": "log",
    ...     "estimate": [0.31, 0.04], "low": [0.28, 0.02], "high": [0.34, 0.06]})
    >>> rules_differ(frame)
    ['first credits poster with 31 % and last with 4 %: it opens journeys but seldom ends them.']
    """
    by_log = frame[frame["basis"] == "log"]
    there = set(by_log["rule"])
    pair = next((p for p in (("first", "last"), ("first", "even"), ("last", "even")) if there >= set(p)), None)
    if pair is None:
        return []
    groups = list(frame.columns[: list(frame.columns).index("touchpoint")])
    of_rule = by_log.set_index([*groups, "touchpoint"])[["rule", "estimate", "low", "high"]]
    one, other = (of_rule[of_rule["rule"] == rule].add_suffix(end) for rule, end in zip(pair, _ENDS, strict=True))
    both = one.join(other, how="inner")
    gap = both["estimate_one"] - both["estimate_other"]
    apart = (both["low_one"] > both["high_other"]) | (both["low_other"] > both["high_one"])
    picked = gap.abs()[(gap.abs() >= _POINTS) & apart].sort_values(ascending=False, kind="stable").index[:_MOST]
    told = []
    for key in picked:
        *group, name = key if isinstance(key, tuple) else (key,)
        row = both.loc[key]
        where = f"{', '.join(str(value) for value in group)}: " if group else ""
        told.append(where + _sentence(name, pair, float(row["estimate_one"]), float(row["estimate_other"])))
    return told


def _sentence(name: str, pair: tuple[str, str], one: float, other: float) -> str:
    more, less = pair if one > other else pair[::-1]
    a, b = max(one, other), min(one, other)
    seldom = a >= 2 * b
    ways = {"first": "opens journeys", "last": "ends journeys"}
    if {more, less} == {"first", "last"}:
        back = "ends" if more == "first" else "opens"
        why = f"it {ways[more]} but seldom {back} them" if seldom else f"it {ways[more]} more often than it {back} them"
    elif less == "even":
        why = f"where it is there, it {ways[more]} more often than the others"
    else:
        why = f"it is there more often than it {ways[less]}"
    return f"{more} credits {name} with {100 * a:.0f} % and {less} with {100 * b:.0f} %: {why}."
