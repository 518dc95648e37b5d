"""Customer-journey analytics from event logs: how many convert, how soon, where they are lost, how sure."""

from journeys.intake.rules import JourneyRules
from journeys.models.fit import JourneyFit
from journeys.models.model import JourneyModel
from journeys.questions.audit import audit
from journeys.questions.first_passage import first_passage
from journeys.questions.outcomes import outcomes
from journeys.questions.overview import summarise
from journeys.questions.time_to_convert import time_to_convert
from journeys.tally.count import count_log as tally
from journeys.tally.tally import Tally

__version__ = "0.1.0"

__all__ = [
    "JourneyFit",
    "JourneyModel",
    "JourneyRules",
    "Tally",
    "__version__",
    "audit",
    "first_passage",
    "outcomes",
    "summarise",
    "tally",
    "time_to_convert",
]
