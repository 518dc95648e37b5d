"""Customer-journey analytics from event logs: how many convert, how soon, where they are lost, how sure."""

from journeys.intake.database import DatabaseLog
from journeys.intake.rules import JourneyRules
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
from journeys.tally.count import count_log as tally
from journeys.tally.spark import tally_spark
from journeys.tally.tally import Tally

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
