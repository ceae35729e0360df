"""The colours of all pictures.

They are those of M. Okabe and K. Ito, "Color Universal Design" (2008), which remain distinct with the common kinds of
colour blindness; greys are for what is not compared.
"""

from __future__ import annotations

ORANGE, SKY, GREEN, YELLOW = "#E69F00", "#56B4E9", "#009E73", "#F0E442"
BLUE, VERMILION, PURPLE = "#0072B2", "#D55E00", "#CC79A7"
PLANNED, MEASURED, QUIET, GOOD, BAD = VERMILION, BLUE, "#9aa5b1", GREEN, ORANGE
INK, AXIS, PALE, PAPER = "#22303c", "#5f6b76", "#e3e7eb", "#ffffff"

# of what a pusher is about, by the names in `dynamics.states`
STATE_COLOURS = {"idle": "#000000", "ahead": ORANGE, "locked": GREEN, "held at a wall": VERMILION, "lost": "#c9d1d9"}
