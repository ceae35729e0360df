"""One moment of a film as a picture to print: SVG, or PNG in the same look."""

from __future__ import annotations

import io
from pathlib import Path
from typing import Any, Literal

from matplotlib import patches, rc_context
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.text import Text as FigureText

from swarmpush.output import write_bytes
from swarmpush.reporting.drawing import STYLE
from swarmpush.reporting.palette import PAPER
from swarmpush.viewing.film import Film
from swarmpush.viewing.marks import Circle, Line, Mark, Polygon
from swarmpush.viewing.sheet import sheet

DPI = 100
POINT = 72 / DPI  # of a pixel: matplotlib's widths and sizes are in points
ACROSS: dict[str, Literal["left", "right"]] = {"w": "left", "e": "right"}
UP: dict[str, Literal["top", "bottom"]] = {"n": "top", "s": "bottom"}
CAPITALS = (
    0.36  # half the height of capital letters over the size of type: matplotlib's own middle minds what hangs below
)


def save_svg(film: Film, t_s: float, path: Path, size: tuple[int, int] = (1024, 640), **options: Any) -> None:
    """Write a moment of a film as SVG; the same film gives the same file.

    Arguments:
        film, t_s: what is shown. path: of the file. size: of the picture, px. options: see `sheet`.

    Raises:
        OutputError: when the place cannot be written, or the size makes no picture.
    """
    write_bytes(path, _as_bytes(film, t_s, size, "svg", options))


def save_png(film: Film, t_s: float, path: Path, size: tuple[int, int] = (1024, 640), **options: Any) -> None:
    """Write a moment of a film as PNG; see `save_svg`."""
    write_bytes(path, _as_bytes(film, t_s, size, "png", options))


def figure_of(film: Film, t_s: float, size: tuple[int, int], **options: Any) -> Figure:
    """A moment of a film as a figure; see `save_svg`."""
    parts = sheet(film.scenario, size, **options)
    width, height = size
    figure = Figure(figsize=(width / DPI, height / DPI), dpi=DPI, facecolor=PAPER)
    axes = figure.add_axes((0.0, 0.0, 1.0, 1.0))
    axes.set_axis_off()
    axes.set_xlim(0.0, width)
    axes.set_ylim(height, 0.0)
    for layer in (parts.ground(film), *parts.moving(film, t_s)):
        _draw(axes, layer.marks, layer.size)
    return figure


def _as_bytes(film: Film, t_s: float, size: tuple[int, int], kind: str, options: dict[str, Any]) -> bytes:
    with rc_context(STYLE):
        figure = figure_of(film, t_s, size, **options)
        data = io.BytesIO()
        title = f"{film.scenario.about.name}, seed {film.seed}"
        figure.savefig(
            data, format=kind, dpi=DPI, metadata={"Title": title} | ({"Date": None} if kind == "svg" else {})
        )
    return data.getvalue()


def _draw(axes: Axes, marks: list[Mark], size: tuple[float, float] | None) -> None:
    for mark in marks:
        artist = _artist(mark)
        artist.set_zorder(2 + len(axes.get_children()))  # in the order in which they come
        axes.add_artist(artist)
        if size is not None:
            artist.set_clip_path(patches.Rectangle((0.0, 0.0), *size, transform=axes.transData))


def _artist(mark: Mark) -> Artist:
    if isinstance(mark, Line):
        return Line2D(*mark.points.T, color=mark.colour, linewidth=mark.width * POINT, solid_capstyle="butt")
    if isinstance(mark, Polygon):
        return patches.Polygon(mark.points, closed=True, joinstyle="miter", **_look(mark))
    if isinstance(mark, Circle):
        inner = mark.radius - (mark.width / 2 if mark.edge is not None else 0.0)
        return patches.Circle((mark.x, mark.y), max(inner, 0.0), **_look(mark))
    across: Literal["left", "center", "right"] = next((ACROSS[c] for c in mark.anchor if c in ACROSS), "center")
    up: Literal["top", "baseline", "bottom"] = next((UP[c] for c in mark.anchor if c in UP), "baseline")
    y = mark.y + (CAPITALS * mark.size if up == "baseline" else 0.0)
    return FigureText(
        mark.x, y, mark.text, color=mark.colour, fontsize=mark.size * POINT,
        horizontalalignment=across, verticalalignment=up,
    )  # fmt: skip


def _look(mark: Polygon | Circle) -> dict[str, Any]:
    has_edge = mark.edge is not None and mark.width > 0.0
    return {
        "facecolor": mark.fill or "none",
        "edgecolor": mark.edge if has_edge else "none",
        "linewidth": mark.width * POINT if has_edge else 0.0,
    }
