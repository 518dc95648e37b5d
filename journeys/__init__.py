"""Customer-journey analytics from event logs: how many convert, how soon, where they are lost, how sure."""

from typing import TYPE_CHECKING

from journeys.intake.rules import JourneyRules
from journeys.tally.count import count_log as tally
from journeys.tally.tally import Tally

if TYPE_CHECKING:
    from journeys.intake.database import DatabaseLog
    from journeys.intake.wide import from_wide
    from journeys.models.fit import JourneyFit
    from journeys.models.model import JourneyModel
    from journeys.questions.audit import audit
    from journeys.questions.check import check
    from journeys.questions.comeback import comeback
    from journeys.questions.compare import compare
    from journeys.questions.credit import credit
    from journeys.questions.first_passage import first_passage
    from journeys.questions.memory_check import memory_check
    from journeys.questions.outcomes import outcomes
    from journeys.questions.passage_curve import passage_curve
    from journeys.questions.removal import removal
    from journeys.questions.return_time import return_time
    from journeys.questions.sensitivity import sensitivity
    from journeys.questions.stages import stages
    from journeys.questions.summarise import summarise
    from journeys.questions.time_to_convert import time_to_convert
    from journeys.questions.worth import worth
    from journeys.show import plots
    from journeys.show.report import write_report
    from journeys.tally.spark import tally_spark
else:
    # A count needs none of these, and their imports take longer than that of pyarrow: each comes when it is first
    # asked for. Type checkers read the list above.
    _PLACES = {
        "DatabaseLog": "journeys.intake.database",
        "JourneyFit": "journeys.models.fit",
        "JourneyModel": "journeys.models.model",
        "audit": "journeys.questions.audit",
        "check": "journeys.questions.check",
        "comeback": "journeys.questions.comeback",
        "compare": "journeys.questions.compare",
        "credit": "journeys.questions.credit",
        "first_passage": "journeys.questions.first_passage",
        "from_wide": "journeys.intake.wide",
        "memory_check": "journeys.questions.memory_check",
        "outcomes": "journeys.questions.outcomes",
        "passage_curve": "journeys.questions.passage_curve",
        "plots": "journeys.show.plots",
        "removal": "journeys.questions.removal",
        "return_time": "journeys.questions.return_time",
        "sensitivity": "journeys.questions.sensitivity",
        "stages": "journeys.questions.stages",
        "summarise": "journeys.questions.summarise",
        "tally_spark": "journeys.tally.spark",
        "time_to_convert": "journeys.questions.time_to_convert",
        "worth": "journeys.questions.worth",
        "write_report": "journeys.show.report",
    }

    def __getattr__(name: str) -> object:
        """Import a public name from where it lives, the first time that it is asked for."""
        if name not in _PLACES:
            raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
        from importlib import import_module

        module = import_module(_PLACES[name])
        globals()[name] = found = getattr(module, name, module)
        return found

    def __dir__() -> list[str]:
        """Return what there is and what can be had."""
        return sorted({*globals(), *_PLACES})


__version__ = "0.1.0"

__all__ = [
    "DatabaseLog",
    "JourneyFit",
    "JourneyModel",
    "JourneyRules",
    "Tally",
    "__version__",
    "audit",
    "check",
    "comeback",
    "compare",
    "credit",
    "first_passage",
    "from_wide",
    "memory_check",
    "outcomes",
    "passage_curve",
    "plots",
    "removal",
    "return_time",
    "sensitivity",
    "stages",
    "summarise",
    "tally",
    "tally_spark",
    "time_to_convert",
    "worth",
    "write_report",
]
