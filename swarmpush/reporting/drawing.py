"""The style that all pictures share, the rig to scale, and figures as SVG or PNG."""

from __future__ import annotations

import io
import math
from collections.abc import Callable
from typing import Any

import matplotlib

matplotlib.use("Agg")

import matplotlib.pyplot as plt
import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.patches import Polygon

from swarmpush.geometry import block_corners, channel_corners, outward_normal, post_corners
from swarmpush.kinematics.planning import Plan
from swarmpush.reporting.palette import AXIS, INK, MEASURED, PALE, QUIET
from swarmpush.scenario import Pushers, Scenario

STYLE: dict[Any, Any] = {
    "font.family": "DejaVu Sans",
    "font.size": 9,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.edgecolor": AXIS,
    "axes.labelcolor": INK,
    "xtick.color": AXIS,
    "ytick.color": AXIS,
    "svg.fonttype": "none",
    "svg.hashsalt": "swarmpush",  # the same figure gives the same file
}


def as_svg(draw: Callable[..., Figure], *records: Any) -> str:
    """A figure as SVG text that can stand in a page."""
    text = io.StringIO()
    with plt.rc_context(STYLE):
        figure = draw(*records)
        figure.savefig(text, format="svg", bbox_inches="tight", metadata={"Date": None})
        plt.close(figure)
    svg = text.getvalue()
    return svg[svg.index("<svg") :]


def as_png(draw: Callable[..., Figure], *records: Any, dpi: int = 150) -> bytes:
    """A figure as PNG bytes."""
    data = io.BytesIO()
    with plt.rc_context(STYLE):
        figure = draw(*records)
        figure.savefig(data, format="png", dpi=dpi, bbox_inches="tight", facecolor="white")
        plt.close(figure)
    return data.getvalue()


def draw_rig(axes: Axes, plan: Plan, scale: float, *, has_ends: bool) -> tuple[float, float]:
    """Walls, posts, blocks with their centres, and one pusher, to scale; returns the stretch worth showing.

    Without ends a straight corridor goes on for ever, as it looks from a block that moves; any other channel moves past
    such a block, so that its outline at the start is only hinted at.
    """
    s = plan.scenario
    width, rear, length = s.channel.width / scale, s.block.rear_at / scale, s.channel.length / scale
    front = max(block.rear_at + block.length for block in s.blocks) / scale
    walls, posts, blocks = (
        [np.array(corners) / scale for corners in outlines]
        for outlines in ((channel_corners(s),), post_corners(s), [block_corners(s, block) for block in s.blocks])
    )
    if has_ends or s.channel.outline or posts:
        outline = Polygon(walls[0], fill=False, edgecolor=INK, lw=2.5)
        if not has_ends:
            outline.set(ls="--", lw=1.0, label="channel at the start")
        axes.add_patch(outline)
    else:
        for y in (0.0, width):
            axes.axhline(y, color=INK, lw=2.5)
    for post in posts:
        axes.add_patch(Polygon(post, facecolor=QUIET, edgecolor=INK, lw=1.2, ls="-" if has_ends else "--", zorder=2))
    for k, (block, corners) in enumerate(zip(s.blocks, blocks, strict=True)):
        has_marks = block.centre_of_mass is not None or block.centre_of_friction is not None
        draw_block(axes, corners, "block" if k == 0 else f"block {k + 1}", height=0.78 if has_marks else 0.5)
    _draw_centres(axes, s, scale)
    lap = plan.main_lap
    back = float(lap.hits[:, 0].min()) / scale if lap is not None else rear - 3 * width
    radius, normal = s.pushers.radius / scale, np.array(outward_normal(block_corners(s), 0))
    place, heading = blocks[0][:2].mean(axis=0), math.atan2(-normal[1], -normal[0])  # in the middle of the rear face
    if lap is not None:
        place, heading = lap.hits[0, :2] / scale - radius * normal, float(lap.hits[0, 2])
    shape = pusher_shape(s.pushers, heading) / scale
    shape += place - float((shape @ normal).min()) * normal  # it just touches the face
    axes.add_patch(Polygon(shape, facecolor="white", edgecolor=MEASURED, lw=1.2, zorder=4))
    axes.set_ylim(-0.06 * width, 1.06 * width)
    reach = max(min(back - 2 * radius, rear - 2 * width), rear - 6 * width, -0.1 * width if has_ends else -0.5 * width)
    return reach, min(front + 0.5 * width, length + 0.1 * width)


def draw_block(axes: Axes, corners: np.ndarray, name: str, *, height: float = 0.5) -> None:
    """A block with its name at a share of its extent across."""
    axes.add_patch(Polygon(corners, facecolor=PALE, edgecolor=INK, lw=1.2, zorder=2))
    low, high = corners.min(axis=0), corners.max(axis=0)
    x, y = 0.5 * (low[0] + high[0]), low[1] + height * (high[1] - low[1])
    axes.text(x, y, name, ha="center", va="center", color=INK, zorder=3)


def _draw_centres(axes: Axes, s: Scenario, scale: float) -> None:
    """Where a block's mass and the floor's friction act, as far as the scenario says so."""
    marks = {"centre_of_mass": ("o", "centre of mass"), "centre_of_friction": ("X", "centre of friction")}
    for key, (marker, label) in marks.items():
        points = [
            (block.rear_at + at[0], s.channel.width / 2 + block.offset + at[1])
            for block in s.blocks
            if (at := getattr(block, key)) is not None
        ]
        if points:
            x, y = (np.array(points) / scale).T
            axes.plot(x, y, ls="", marker=marker, ms=6, color=INK, mfc="white", zorder=4, label=label)


def pusher_shape(p: Pushers, heading: float) -> np.ndarray:
    """(n, 2) outline of a pusher about its centre, m: a circle, or a bar with rounded corners along its heading."""
    ahead, aside = p.trunk / 2, p.nose / 2
    corners = np.repeat([(ahead, aside), (-ahead, aside), (-ahead, -aside), (ahead, -aside)], 25, axis=0)
    angles = np.concatenate([np.linspace(k, k + 1, 25) for k in range(4)]) * math.pi / 2
    outline = corners + p.radius * np.column_stack([np.cos(angles), np.sin(angles)])
    return turned(outline, heading)


def turned(points: np.ndarray, angle: float) -> np.ndarray:
    """Points turned about the origin, counter-clockwise."""
    c, s = math.cos(angle), math.sin(angle)
    return np.asarray(points @ np.array([[c, s], [-s, c]]))
