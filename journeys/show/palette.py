"""Colours of the pictures."""

from __future__ import annotations

INK = "#1f2328"
GREY = "#8b9197"
PALE = "#d9dcdf"
# The one pair of colours: dark blue and orange stay apart for every kind of colour blindness.
BLUE = "#1b4f8a"
ORANGE = "#d97706"
# Grey dark enough to be read.
QUIET = "#57606a"
