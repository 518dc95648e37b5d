"""What other silences would say of the same log: who of the silent came back, and what conversion would be."""

from __future__ import annotations

import warnings
from dataclasses import replace
from typing import TYPE_CHECKING, Any

from journeys.checks import duration_text
from journeys.errors import JourneysWarning, LogError
from journeys.intake.read import LogSource
from journeys.intake.rules import JourneyRules
from journeys.kernels.bins import DAY_US
from journeys.models.model import JourneyModel
from journeys.questions.comeback import comeback
from journeys.questions.first_passage import from_entry
from journeys.questions.time_to_convert import SO_FAR
from journeys.tally.count import count_log
from journeys.tally.tally import Tally

if TYPE_CHECKING:
    import pandas as pd

SILENCES = ("7d", "14d", "30d", "60d", "90d")
# Where so many of the silent are back within another quarter of the silence, many a journey was cut in two.
PILED_UP = 0.10
COLUMNS = (
    "silence", "n_silent", "came_back", "came_back_low", "came_back_high", "soon_back", "conversion", "conversion_low",
    "conversion_high", "note",
)  # fmt: skip


def other_silences(log: LogSource, tally: Tally, *, identity: Any = None, progress: bool = False) -> pd.DataFrame:
    """Return, for silences of 7, 14, 30, 60 and 90 days and that of the rules, what they would say.

    Parameters
    ----------
    log : LogSource
        A log that can be read again: it is, once for every silence.
    tally : Tally
        Its counts by the rules' own silence.
    identity
        As in `journeys.tally`.
    progress : bool
        Show progress bars on stderr.

    Returns
    -------
    DataFrame
        One row per silence: `n_silent` journeys that ended by it, the share of these whose customer `came_back` until
        the end of the log with its interval, the share who were back within another quarter of the silence
        (`soon_back`), the share of journeys that convert in the end, and a note where something cannot be told.
    """
    import pandas as pd

    own = tally.rules.silence_us
    wanted = {**{_us(one): one for one in SILENCES}, **({} if own is None else {own: duration_text(own)})}
    rows: list[dict[str, object]] = []
    for silence_us in sorted(wanted):
        one = tally
        if silence_us != own:
            if tally.days * DAY_US <= silence_us:
                rows.append({"silence": wanted[silence_us], "note": f"not told: the log is {tally.days:.0f} days long"})
                continue
            rules = _with_silence(tally, wanted[silence_us])
            one = count_log(log, rules, identity=identity, progress=progress)
        rows.append({"silence": wanted[silence_us], **_told(one)})
    return pd.DataFrame(rows, columns=COLUMNS)


def _us(text: str) -> int:
    return int(text.removesuffix("d")) * DAY_US


def _with_silence(tally: Tally, silence: str) -> JourneyRules:
    """Return the rules with another silence, without what the answer has no use for, over the same span."""
    return replace(
        tally.rules, silence=silence, by=(), cohort=None, split_at=(), stages=(), touchpoints=(), value=None,
        horizons=(), log_start=tally.log_start.isoformat(), as_of=tally.as_of.isoformat(),
    )  # fmt: skip


def _told(tally: Tally) -> dict[str, object]:
    """Return the row of one silence."""
    soon_us = (tally.rules.silence_us or 0) * 5 // 4
    back = comeback(tally, horizons=[duration_text(soon_us)]).to_frame()
    so_far, soon = (back[back["horizon"] == one].to_dict("records")[0] for one in (SO_FAR, duration_text(soon_us)))
    told: dict[str, object] = {
        "n_silent": so_far["n_absences"], "came_back": so_far["estimate"], "came_back_low": so_far["low"],
        "came_back_high": so_far["high"], "soon_back": soon["estimate"], "note": "",
    }  # fmt: skip
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", JourneysWarning)
            fit = JourneyModel().fit(tally)
            if not fit.converted:
                return told | {"note": "no converted outcomes named"}
            share = from_entry(fit, quantiles=False).to_frame().set_index("measure").loc["probability"]
    except LogError as error:
        return told | {"note": f"not told: {error}"}
    return told | {
        "conversion": share["estimate"], "conversion_low": share["low"], "conversion_high": share["high"],
        "note": share["flag"],
    }  # fmt: skip
