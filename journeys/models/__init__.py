"""The spec of a chain, its fit to a tally, and known chains."""
