"""What stands round the pictures in the window, as marks: status line, message, list of commands."""

from __future__ import annotations

from collections.abc import Callable
from typing import Literal

import numpy as np

from swarmpush.reporting.palette import AXIS, BLUE, INK, PALE, PAPER
from swarmpush.viewing.commands import Command
from swarmpush.viewing.controls import Controls, speed_words
from swarmpush.viewing.film import Film
from swarmpush.viewing.layout import KEYS_UNITS, Layout, Rect
from swarmpush.viewing.marks import Anchor, Mark, Polygon, Text, box
from swarmpush.viewing.parameters import parameters

Measure = Callable[[str, float], float]  # width in px of a text at a size
Align = Literal["left", "middle", "right"]

BUTTON = "#f2f5f7"
LEAST_SHRINK = 0.7  # of a text that is too wide; beyond that it is cut
SIDE_UNITS = 24  # of the message's line, for what is said about the film
LABELS = {
    Command.SLOWER: "-",
    Command.FASTER: "+",
    Command.LOWER: "-",
    Command.RAISE: "+",
    Command.HELP: "Help",
}
ARROWS = {  # the way they point, x to the right, y downward
    Command.PREVIOUS_SEED: (-1, 0),
    Command.NEXT_SEED: (1, 0),
    Command.PREVIOUS_PARAMETER: (0, -1),
    Command.NEXT_PARAMETER: (0, 1),
}
ARROW_SIZE = 0.35  # of the unit, from its middle to its tip


def line(text: str, place: Rect, size: float, measure: Measure, colour: str = INK, align: Align = "left") -> list[Mark]:
    """A line of text in the middle of a place's height; too wide, it is written smaller, and then cut."""
    if not text:
        return []
    wide = measure(text, size)
    if wide > place.width:
        size *= max(LEAST_SHRINK, place.width / wide)
    while len(text) > 4 and measure(text, size) > place.width:
        text = text[:-4] + "..."
    anchors: dict[Align, tuple[Anchor, float]] = {"left": ("w", 0.0), "middle": ("c", 0.5), "right": ("e", 1.0)}
    anchor, share = anchors[align]
    return [Text(place.x + share * place.width, place.y + place.height / 2, text, size, colour, anchor)]


def status(controls: Controls, film: Film, layout: Layout, measure: Measure) -> list[Mark]:
    """The status line: what can be clicked, and the values between."""
    unit, marks = layout.unit, list[Mark]()
    for command, cell in layout.cells.items():
        fill = PALE if command is Command.HELP and controls.shows_help else BUTTON
        marks.append(Polygon(box(cell), fill, AXIS, max(1.0, unit / 14)))
        if command in ARROWS:
            marks.append(_arrow(cell, *ARROWS[command], ARROW_SIZE * unit))
        else:
            label = LABELS.get(command) or ("Go" if controls.is_paused else "Pause")
            marks += line(label, cell.inset(unit // 6), unit, measure, align="middle")
    scenario = controls.wanted.scenario if controls.wanted else film.scenario
    seed = controls.wanted.seed if controls.wanted else film.seed
    marks += line(speed_words(controls.speed), layout.speed_cell, unit, measure, align="middle")
    marks += line(f"seed {seed}", layout.seed_cell, unit, measure, align="middle")
    marks += line(parameters(scenario)[controls.parameter].words(scenario), layout.value_cell, unit, measure)
    return marks


def _arrow(cell: Rect, right: int, down: int, size: float) -> Polygon:
    """A triangle in the middle of a cell."""
    ahead, aside = np.array([right, down]), np.array([down, right])
    middle = np.array([cell.x + cell.width / 2, cell.y + cell.height / 2])
    return Polygon(middle + size * np.array([ahead, aside - ahead, -aside - ahead]), INK)


def message(said: str, aside: str, layout: Layout, measure: Measure) -> list[Mark]:
    """What was said last, and on the right something about the film, unless what was said needs the whole line."""
    place, unit = layout.message, layout.unit
    side = min(SIDE_UNITS * unit, place.width // 2)
    left = place._replace(width=place.width - side - unit)
    if measure(said, unit) > left.width:
        return line(said, place, unit, measure)
    right = Rect(place.x + place.width - side, place.y, side, place.height)
    return [*line(said, left, unit, measure), *line(aside, right, unit, measure, AXIS, "right")]


def help_list(layout: Layout, measure: Measure) -> list[Mark]:
    """The list of commands, over all the rest."""
    sheet, unit = layout.help_box, layout.unit
    window = Rect(0, 0, layout.width, layout.height)
    marks: list[Mark] = [Polygon(box(window), PALE), Polygon(box(sheet), PAPER, AXIS, max(1.0, unit / 12))]
    head = Rect(sheet.x + unit, sheet.y, sheet.width - 2 * unit, 3 * unit)
    marks += line("Keys; each line can be clicked as well", head, 1.15 * unit, measure)
    for binding, cell in layout.help_cells:
        keys = cell._replace(width=round(KEYS_UNITS * unit))
        words = Rect(keys.x + keys.width, cell.y, cell.width - keys.width - unit // 2, cell.height)
        marks += line(binding.key_words, keys._replace(width=keys.width - unit // 2), 0.9 * unit, measure, BLUE)
        marks += line(binding.words, words, 0.9 * unit, measure)
    return marks
