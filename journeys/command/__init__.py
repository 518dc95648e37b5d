"""The command line: a thin shell."""
