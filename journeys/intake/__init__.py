"""Intake: the one gate by which an event log comes in, read by rules, checked, and turned into arrays."""
