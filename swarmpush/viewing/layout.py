"""Where things are in the window: pure arithmetic, in pixels."""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

from swarmpush.viewing.commands import BINDINGS, Binding, Command

LEAST_SIZE = (640, 400)  # px; a smaller window is laid out as if it were this large
HELP_COLUMNS = 3
KEYS_UNITS = 6.5  # of a column of the list, for the keys
CHARTS_SHARE = {1: 0.27, 2: 0.2}  # of the window's height, by the number of rigs
STRIPS_UNITS = 8  # of a rig's picture, above and below the channel


class Rect(NamedTuple):
    """A rectangle: its upper left corner, and how wide and high it is."""

    x: int
    y: int
    width: int
    height: int

    def holds(self, x: float, y: float) -> bool:
        """Whether a point lies in it."""
        return self.x <= x < self.x + self.width and self.y <= y < self.y + self.height

    def inset(self, margin: int) -> Rect:
        """What is left within a margin."""
        return Rect(self.x + margin, self.y + margin, self.width - 2 * margin, self.height - 2 * margin)


@dataclass(frozen=True)
class Layout:
    """The parts of the window.

    unit: height of a line of text, from which everything else follows. rigs: the body world's picture and, beside it,
    the point world's if that is shown. heads: for their names, where they need some. cells: what can be clicked in the
    status line, by command. speed_cell, seed_cell, value_cell: texts between them. help_box, help_cells: the list of
    commands, laid over the rest.
    """

    width: int
    height: int
    unit: int
    rigs: tuple[Rect, ...]
    heads: tuple[Rect, ...]
    charts: Rect
    cells: dict[Command, Rect]
    speed_cell: Rect
    seed_cell: Rect
    value_cell: Rect
    message: Rect
    timeline: Rect
    help_box: Rect
    help_cells: tuple[tuple[Binding, Rect], ...]


def lay_out(width: int, height: int, *, n_rigs: int = 1, rig_aspect: float = 4.0) -> Layout:
    """Lay out a window.

    Arguments:
        width, height: of the window. n_rigs: 2 with the point world. rig_aspect: the channel's length over its width;
            two long channels are put one above the other, two short ones side by side.
    """
    width, height = max(width, LEAST_SIZE[0]), max(height, LEAST_SIZE[1])
    unit = max(10, min(height // 40, width // 62))
    gap = unit // 2
    timeline = Rect(gap, height - gap - 3 * unit, width - 2 * gap, 3 * unit)
    message = Rect(gap, timeline.y - gap - unit - gap, width - 2 * gap, unit + gap)
    status = Rect(gap, message.y - 2 * unit, width - 2 * gap, 2 * unit)
    charts_height = round(CHARTS_SHARE[n_rigs] * height)
    charts = Rect(gap, status.y - gap - charts_height, width - 2 * gap, charts_height)
    place = Rect(0, 0, width, charts.y - gap)
    rigs, heads = _rigs(place, n_rigs, rig_aspect, unit)
    cells, speed_cell, seed_cell, value_cell = _status_cells(status, unit)
    help_box, help_cells = _help(width, height, unit)
    return Layout(
        width=width,
        height=height,
        unit=unit,
        rigs=rigs,
        heads=heads,
        charts=charts,
        cells=cells,
        speed_cell=speed_cell,
        seed_cell=seed_cell,
        value_cell=value_cell,
        message=message,
        timeline=timeline,
        help_box=help_box,
        help_cells=help_cells,
    )


def _rigs(place: Rect, n: int, aspect: float, unit: int) -> tuple[tuple[Rect, ...], tuple[Rect, ...]]:
    """Places for the channels' pictures, two so that the channels become as large as can be; places for their names.

    Side by side, the pictures are too narrow to say by themselves which is which.
    """
    if n == 1:
        return (place,), ()
    head = 2 * unit
    half_width, half_height, strips = place.width // 2, place.height // 2, STRIPS_UNITS * unit
    if min(half_width, aspect * (place.height - strips - head)) > min(place.width, aspect * (half_height - strips)):
        heads = (Rect(0, 0, half_width, head), Rect(half_width, 0, place.width - half_width, head))
        return tuple(each._replace(y=head, height=place.height - head) for each in heads), heads
    upper = place._replace(height=half_height)
    return (upper, Rect(0, half_height, place.width, place.height - half_height)), ()


def _status_cells(place: Rect, unit: int) -> tuple[dict[Command, Rect], Rect, Rect, Rect]:
    """Cells from both ends of the status line; the chosen value takes what is left between them."""
    gap = unit // 3
    widths: list[tuple[Command | str, float]] = [
        (Command.PAUSE, 4.5),
        ("", 0.5),
        (Command.SLOWER, 2.0),
        ("speed", 4.0),
        (Command.FASTER, 2.0),
        ("", 0.5),
        (Command.PREVIOUS_SEED, 2.0),
        ("seed", 6.5),
        (Command.NEXT_SEED, 2.0),
        ("", 0.5),
        (Command.PREVIOUS_PARAMETER, 2.0),
        (Command.NEXT_PARAMETER, 2.0),
        ("value", 0.0),
        (Command.LOWER, 2.0),
        (Command.RAISE, 2.0),
        ("", 0.5),
        (Command.HELP, 4.0),
    ]
    taken = sum(round(units * unit) for _, units in widths) + gap * (len(widths) - 1)
    x, cells, texts = place.x, dict[Command, Rect](), dict[str, Rect]()
    for name, units in widths:
        cell = Rect(x, place.y, round(units * unit) or place.width - taken, place.height)
        if isinstance(name, Command):
            cells[name] = cell
        else:
            texts[name] = cell
        x += cell.width + gap
    return cells, texts["speed"], texts["seed"], texts["value"]


def _help(width: int, height: int, unit: int) -> tuple[Rect, tuple[tuple[Binding, Rect], ...]]:
    n_rows = -(-len(BINDINGS) // HELP_COLUMNS)
    row, head = 2 * unit, 3 * unit
    margin = unit
    box_width = min(width - 2 * margin, 66 * unit)
    box_height = head + n_rows * row + margin
    box = Rect((width - box_width) // 2, max(0, (height - box_height) // 2), box_width, box_height)
    column = (box.width - 2 * margin) // HELP_COLUMNS
    cells = tuple(
        (binding, Rect(box.x + margin + (k // n_rows) * column, box.y + head + (k % n_rows) * row, column, row))
        for k, binding in enumerate(BINDINGS)
    )
    return box, cells
