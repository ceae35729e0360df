"""A whole picture of a film without a window: the rig, strip charts below it, and the time line."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Any, NamedTuple

from swarmpush.output import OutputError
from swarmpush.scenario import Scenario
from swarmpush.viewing.charts import charts_cursor, charts_ground, timeline_cursor, timeline_ground
from swarmpush.viewing.film import Film
from swarmpush.viewing.marks import Mark, Place, type_size
from swarmpush.viewing.scene import View, aspect_of, scene, strips, whole

SMALLEST, LARGEST = (320, 160), (7680, 4320)  # px
GAP = 0.8  # between parts and round them, in sizes of type, as all below
TIMELINE, CHARTS = 2.6, 7.5  # heights: of the time line, and the least of strip charts
LEAST_RIG = 0.5  # of the height of a channel that takes the whole width: with less beside charts, these are left out
ROUND_RIG = 3.6  # free height about the channel
LOW = 30  # of a picture that has no room for the time line
RIG_SHARE = 0.62  # of the picture's height, at most, for the rig beside charts


class Layer(NamedTuple):
    """Marks of a part of a picture, and the size to which they are cut, if they are."""

    marks: list[Mark]
    size: tuple[float, float] | None


@dataclass(frozen=True)
class Sheet:
    """How a picture is divided: the view of the rig at its top, and places below it, px; None where left out."""

    width: int
    height: int
    type_px: float
    view: View
    charts: Place | None
    timeline: Place | None

    @property
    def charts_px(self) -> float:
        """Size of type in charts, px: three titles stand side by side."""
        return max(10.0, min(self.type_px, self.width / 64))

    def ground(self, film: Film) -> Layer:
        """What stays the same while the film does."""
        marks: list[Mark] = []
        if self.charts is not None:
            marks += charts_ground(film, self.charts, type_px=self.charts_px)
        if self.timeline is not None:
            marks += timeline_ground(film, self.timeline, type_px=self.type_px)
        return Layer(marks, None)

    def moving(self, film: Film, t_s: float) -> Iterator[Layer]:
        """What is drawn upon that for one time."""
        yield Layer(scene(film, t_s, self.view), (self.view.width, self.view.height))
        marks: list[Mark] = []
        if self.charts is not None:
            marks += charts_cursor(film, t_s, self.charts, type_px=self.charts_px)
        if self.timeline is not None:
            marks += timeline_cursor(film, t_s, self.timeline)
        yield Layer(marks, None)


def sheet(scenario: Scenario, size: tuple[int, int], *, has_charts: bool = True, **look: Any) -> Sheet:
    """Divide a picture.

    Arguments:
        scenario: what is shown. size: of the picture, px. has_charts: whether charts and a time line are wanted; they
            are left out of a picture that is too low for them. look: fields of `View` that are not as usual.

    Raises:
        OutputError: when the size makes no picture.
    """
    width, height = size
    if not (SMALLEST[0] <= width <= LARGEST[0] and SMALLEST[1] <= height <= LARGEST[1]):
        low, high = ("x".join(map(str, limit)) for limit in (SMALLEST, LARGEST))
        raise OutputError(f"a picture of {width}x{height} pixels cannot be drawn; choose a size from {low} to {high}")
    letters = look.get("type_px") or type_size(width, height)
    timeline_px = (TIMELINE + GAP) * letters if height >= LOW * letters else 0.0
    below = (CHARTS + 2 * GAP) * letters + timeline_px
    channel = (width - 2 * letters) / aspect_of(scenario)
    needs = sum(strips(width, letters)) + channel + ROUND_RIG * letters
    if "px_per_m" in look:
        channel = needs = RIG_SHARE * height  # a part of the channel fits into any height
    has_charts = has_charts and height - below >= needs - (1.0 - LEAST_RIG) * channel
    rig = round(min(needs, max(RIG_SHARE * height, height - 4 * below), height - below)) if has_charts else height
    view = replace(whole(scenario, width, rig, type_px=letters), **look)
    if not has_charts:
        return Sheet(width, height, letters, view, None, None)
    gap = GAP * letters
    charts = (gap, rig + gap, width - 2 * gap, height - timeline_px - rig - 2 * gap)
    timeline = (gap, height - timeline_px, width - 2 * gap, timeline_px - gap) if timeline_px else None
    return Sheet(width, height, letters, view, charts, timeline)
