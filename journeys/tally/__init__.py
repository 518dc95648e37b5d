"""Sufficient statistics of an event log: small, additive, mergeable."""

from journeys.tally.count import count_log
from journeys.tally.store import is_tally
from journeys.tally.tally import Tally

__all__ = ["Tally", "count_log", "is_tally"]
