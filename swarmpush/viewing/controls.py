"""What the window shows and how it reacts: a pure state machine, without drawing and without a window.

Events go in, and out come the next state and, now and then, an action that only the window can carry out. Nothing here
touches a run.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from swarmpush.reporting.wording import CAUSES, TELLS_LITTLE
from swarmpush.scenario import Scenario
from swarmpush.viewing.charts import span_s, timeline_time
from swarmpush.viewing.commands import BY_KEY, Command
from swarmpush.viewing.film import Film
from swarmpush.viewing.layout import Layout
from swarmpush.viewing.parameters import parameters, stepped
from swarmpush.viewing.scene import View, whole

SLOWEST, FASTEST = 0.125, 64.0  # model time over time on the clock
WATCHED_S = 60.0  # in which a whole run should pass at the speed of the start
TRAILS = (("none", 0.0), ("short", 0.25), ("long", 1.0))  # in times that a pusher takes along the channel
YAW_FACTORS = (1.0, 5.0, 20.0)
FLASH_S = 0.4  # on the clock, for which a strike is shown
ZOOM_STEP, LEAST_ZOOM = 1.25, 0.5
LARGEST_PUSHER = 0.25  # of the picture's height, at the largest zoom
PAN_SHARE = 0.15  # of the picture
NEAR_PX = 8.0  # from a pusher's outline, for a click to mean it
STILL_PX = 4.0  # of a pointer between press and release that meant a click
MAX_SEED = 2**62
PREPARING = "Working out the plan and the start ..."


@dataclass(frozen=True)
class KeyDown:
    """A key, named as in `commands.BINDINGS`: letters, signs, and "shift+" before those pressed with shift."""

    name: str


@dataclass(frozen=True)
class PointerDown:
    """The pointer's main button goes down at a place of the window, px."""

    x: float
    y: float


@dataclass(frozen=True)
class PointerMove:
    """The pointer is now here."""

    x: float
    y: float


@dataclass(frozen=True)
class PointerUp:
    """The main button goes up."""

    x: float
    y: float


@dataclass(frozen=True)
class Wheel:
    """The wheel turns by some notches, away from the person positive."""

    x: float
    y: float
    notches: float


Event = KeyDown | PointerDown | PointerMove | PointerUp | Wheel


@dataclass(frozen=True)
class Restart:
    """Begin a run, live."""

    scenario: Scenario
    seed: int


@dataclass(frozen=True)
class SavePicture:
    """Save what the window shows."""


@dataclass(frozen=True)
class Close:
    """Close the window."""


Action = Restart | SavePicture | Close


@dataclass(frozen=True)
class Hold:
    """What a pressed pointer has hold of, where it went down and where it was last, px."""

    what: Literal["rig", "time line"]
    rig: int
    began: tuple[float, float]
    last: tuple[float, float]
    has_moved: bool = False


@dataclass(frozen=True)
class Controls:
    """What the window shows.

    t_s: time in the film; beyond a growing film's end it is where that is to get to. speed: model time over time on the
    clock. centre_m: what the picture's middle shows; None: the channel's. zoom: 1 shows the whole channel. follow: a
    pusher that is ringed and, zoomed in, kept in the middle. trail: index into `TRAILS`. parameter: index into
    `parameters`. message: the last thing said. wanted: the run that is being prepared while the film is still shown.
    pointer: where it is, px. hold: what it drags.
    """

    t_s: float = 0.0
    is_paused: bool = False
    speed: float = 1.0
    centre_m: tuple[float, float] | None = None
    zoom: float = 1.0
    follow: int | None = None
    trail: int = 0
    has_lap: bool = True
    yaw_factor: float = 1.0
    has_point_world: bool = False
    parameter: int = 0
    shows_help: bool = False
    message: str = ""
    wanted: Restart | None = None
    pointer: tuple[float, float] | None = None
    hold: Hold | None = None


def start(s: Scenario, duration_s: float | None = None, speed: float | None = None) -> Controls:
    """The state in which a window opens.

    Arguments:
        s: the scenario. duration_s: of the film, if it is complete. speed: of the start, brought within the limits;
            left out: the power of 2 at which a whole run passes in about a minute.
    """
    if speed is None:
        speed = 2.0 ** round(math.log2((duration_s or s.goal.time_limit) / WATCHED_S))
    return Controls(speed=_allowed(speed))


def _allowed(speed: float) -> float:
    return min(max(speed, SLOWEST), FASTEST)


def view_of(controls: Controls, film: Film, layout: Layout, rig: int = 0) -> View:
    """What part of a rig one of the window's pictures shows, and how."""
    s = film.scenario
    base = _whole(film, layout, rig)
    centre = controls.centre_m or base.centre
    if controls.follow is not None and controls.zoom > 1.0:
        x, y, _ = film.frame(controls.t_s).pushers[controls.follow]
        centre = (float(x), float(y))
    return replace(
        base,
        centre=centre,
        px_per_m=base.px_per_m * controls.zoom,
        yaw_factor=controls.yaw_factor,
        trail_s=TRAILS[controls.trail][1] * s.channel.length / s.pushers.free_speed,
        has_lap=controls.has_lap,
        flash_s=FLASH_S * controls.speed,
        picked=controls.follow,
    )


def _whole(film: Film, layout: Layout, rig: int) -> View:
    place = layout.rigs[rig]
    return whole(film.scenario, place.width, place.height, type_px=layout.unit)


def passed(controls: Controls, elapsed_s: float) -> float:
    """Time in the film that is due after some time on the clock."""
    return controls.t_s if controls.is_paused else controls.t_s + controls.speed * elapsed_s


def arrived(controls: Controls, film: Film, t_s: float) -> Controls:
    """The state at a time that the film may not have reached; at the end of a complete film it stops."""
    if t_s < film.duration_s or not film.is_complete or controls.is_paused:
        return replace(controls, t_s=min(t_s, film.duration_s))
    return replace(controls, t_s=film.duration_s, is_paused=True, message=_ending(film))


def _ending(film: Film) -> str:
    at = f"at {film.duration_s:.4g} s"
    if film.run is None:
        return f"The film ends {at}."
    match film.run.ended:
        case "goal":
            return f"The block has come as far as the goal asks, {at}. Space shows it again."
        case "time":
            return f"The time limit is reached, {at}. Space shows it again."
        case reason:
            return f"The run broke off {at}: {reason}."


def handle(controls: Controls, event: Event, film: Film, layout: Layout) -> tuple[Controls, Action | None]:
    """What an event leads to.

    Arguments:
        controls: the state. event: what happened. film: what is shown. layout: where things are in the window.

    Returns:
        The next state, and an action for the window, or None.
    """
    match event:
        case KeyDown(name):
            if name == "escape" and controls.shows_help:
                return replace(controls, shows_help=False), None
            return perform(controls, BY_KEY[name], film, layout) if name in BY_KEY else (controls, None)
        case PointerDown(x, y):
            return _press(controls, x, y, film, layout)
        case PointerMove(x, y):
            return _move(replace(controls, pointer=(x, y)), x, y, film, layout), None
        case PointerUp(x, y):
            return _release(controls, x, y, film, layout), None
        case Wheel(x, y, notches):
            return _zoom(replace(controls, pointer=(x, y)), ZOOM_STEP**notches, film, layout), None


def perform(controls: Controls, command: Command, film: Film, layout: Layout) -> tuple[Controls, Action | None]:
    """Carry out a command; arguments and result as those of `handle`."""
    c, base = replace(controls, message=""), controls.wanted or Restart(film.scenario, film.seed)
    match command:
        case Command.CLOSE:
            return c, Close()
        case Command.PICTURE:
            return c, SavePicture()
        case Command.NEXT_SEED | Command.PREVIOUS_SEED:
            seed = base.seed + (1 if command is Command.NEXT_SEED else -1)
            if not 0 <= seed <= MAX_SEED:
                return replace(c, message=f"There is no seed {seed}; seeds go from 0 to 2^62."), None
            return _wanting(c, replace(base, seed=seed))
        case Command.LOWER | Command.RAISE:
            parameter = parameters(base.scenario)[c.parameter]
            try:
                changed = stepped(base.scenario, parameter, 1 if command is Command.RAISE else -1)
            except ValueError as error:
                return replace(c, message=f"Not changed. {error}"), None
            return _wanting(c, replace(base, scenario=changed))
    return _perform_here(c, command, film, layout), None


def _wanting(c: Controls, run: Restart) -> tuple[Controls, Restart]:
    return replace(c, wanted=run, message=PREPARING), run


def begun(controls: Controls, old: Film, new: Film) -> Controls:
    """The state in which a new film begins; a film that stood at its end does not keep the next from running."""
    was_over = old.is_complete and controls.t_s >= old.duration_s
    follow = controls.follow if controls.follow is None or controls.follow < new.scenario.pushers.count else None
    is_paused = controls.is_paused and not was_over
    return replace(controls, t_s=0.0, is_paused=is_paused, follow=follow, wanted=None, message="", hold=None)


def _perform_here(c: Controls, command: Command, film: Film, layout: Layout) -> Controls:
    """Commands that change nothing but what is shown."""
    match command:
        case Command.PAUSE:
            if c.is_paused and film.is_complete and c.t_s >= film.duration_s:
                return replace(c, is_paused=False, t_s=0.0)
            return replace(c, is_paused=not c.is_paused)
        case Command.BACK | Command.FORWARD:
            return _skip(c, 1 if command is Command.FORWARD else -1, film)
        case Command.TO_START:
            return replace(c, t_s=0.0)
        case Command.TO_END:
            return replace(c, t_s=film.duration_s)
        case Command.SLOWER | Command.FASTER:
            speed = _allowed(c.speed * (2.0 if command is Command.FASTER else 0.5))
            return replace(c, speed=speed, message=f"{speed_words(speed)} is the limit." if speed == c.speed else "")
        case Command.NEXT_STRIKE | Command.PREVIOUS_STRIKE:
            return _to_strike(c, command is Command.NEXT_STRIKE, film)
        case Command.NEXT_FAILURE | Command.PREVIOUS_FAILURE:
            return _to_failure(c, command is Command.NEXT_FAILURE, film)
        case Command.FOLLOW:
            return _followed(c, 0 if c.follow is None else (c.follow + 1) % film.scenario.pushers.count)
        case Command.LET_GO:
            return _let_go(c, film, layout)
        case Command.TRAILS:
            trail = (c.trail + 1) % len(TRAILS)
            return replace(c, trail=trail, message=f"Trails: {TRAILS[trail][0]}.")
        case Command.LAP:
            there_is_one = "shown" if film.plan.laps else "none in this plan"
            return replace(c, has_lap=not c.has_lap, message=f"Planned lap: {'hidden' if c.has_lap else there_is_one}.")
        case Command.YAW:
            factor = YAW_FACTORS[(YAW_FACTORS.index(c.yaw_factor) + 1) % len(YAW_FACTORS)]
            return replace(c, yaw_factor=factor, message=f"The block's yaw is drawn {factor:g} fold.")
        case Command.POINT_WORLD:
            return replace(c, has_point_world=not c.has_point_world)
        case Command.NEXT_PARAMETER | Command.PREVIOUS_PARAMETER:
            step = 1 if command is Command.NEXT_PARAMETER else -1
            return replace(c, parameter=(c.parameter + step) % len(parameters(film.scenario)))
        case Command.HELP:
            return replace(c, shows_help=not c.shows_help)
    return _look(c, command, film, layout)


def _look(c: Controls, command: Command, film: Film, layout: Layout) -> Controls:
    """Commands that move the picture."""
    match command:
        case Command.WHOLE:
            return replace(c, zoom=1.0, centre_m=None)
        case Command.ZOOM_IN:
            return _zoom(c, ZOOM_STEP, film, layout)
        case Command.ZOOM_OUT:
            return _zoom(c, 1.0 / ZOOM_STEP, film, layout)
        case Command.PAN_LEFT:
            return _pan(c, PAN_SHARE * layout.rigs[0].width, 0.0, film, layout)
        case Command.PAN_RIGHT:
            return _pan(c, -PAN_SHARE * layout.rigs[0].width, 0.0, film, layout)
        case Command.PAN_UP:
            return _pan(c, 0.0, PAN_SHARE * layout.rigs[0].height, film, layout)
        case Command.PAN_DOWN:
            return _pan(c, 0.0, -PAN_SHARE * layout.rigs[0].height, film, layout)
    raise ValueError(command)


def speed_words(speed: float) -> str:
    """A speed for people.

    >>> speed_words(0.25), speed_words(8.0), speed_words(0.3)
    ('1/4 x', '8 x', '0.3 x')
    """
    is_unit_fraction = speed < 1.0 and (1.0 / speed).is_integer()
    return f"1/{1.0 / speed:.0f} x" if is_unit_fraction else f"{speed:.3g} x"


# ---- time ------------------------------------------------------------------------------------------------------


def _skip(c: Controls, direction: int, film: Film) -> Controls:
    """A sample when paused, else what passes in a second."""
    if not c.is_paused:
        t = c.t_s + direction * c.speed
    else:
        times = film.times_s
        row = int(np.searchsorted(times, c.t_s, side="right" if direction > 0 else "left"))
        row += 0 if direction > 0 else -1
        if row < len(times):
            t = float(times[max(row, 0)])
        else:  # the growing film's next sample
            t = (
                float(times[-1] + (times[-1] - times[-2]))
                if len(times) > 1
                else math.nextafter(film.duration_s, math.inf)
            )
    return replace(c, t_s=_within(t, film))


def _within(t_s: float, film: Film) -> float:
    return min(max(t_s, 0.0), span_s(film))


def _to_strike(c: Controls, is_forward: bool, film: Film) -> Controls:
    # while it runs, the strike that was jumped to just now lies a little back; the one before it is meant
    slack = 0.0 if is_forward or c.is_paused else 0.5 * c.speed
    found = film.strikes(c.t_s, math.inf) if is_forward else film.strikes(-math.inf, c.t_s - slack)
    times = found["t_on_s"].to_numpy()
    times = times if is_forward else times[times < c.t_s - slack]
    if len(times):
        row = 0 if is_forward else len(times) - 1
        return replace(c, t_s=float(times[row]), message=f"Strike of pusher {int(found['pusher'].iloc[row])}.")
    if is_forward and not film.is_complete:
        return replace(c, message="No strike after this so far; the run is still under way.")
    return replace(c, message=f"No strike {'after' if is_forward else 'before'} this.")


def _to_failure(c: Controls, is_forward: bool, film: Film) -> Controls:
    if not film.is_complete:
        return replace(c, message="Failures are named once the run is over.")
    spells = film.spells()
    spells = spells[~spells["cause"].isin(TELLS_LITTLE)]  # as on the time line
    begins = spells["t_first_s"].to_numpy(dtype=np.float64)
    rows = np.flatnonzero(begins > c.t_s if is_forward else begins < c.t_s - (0.0 if c.is_paused else 0.5 * c.speed))
    if not len(rows):
        return replace(c, message=f"No failure that begins {'after' if is_forward else 'before'} this.")
    row = rows[0] if is_forward else rows[-1]
    same = spells.loc[begins == begins[row], "cause"]
    return replace(c, t_s=float(begins[row]), message=f"Begins here: {'; '.join(CAUSES[cause] for cause in same)}.")


# ---- place -----------------------------------------------------------------------------------------------------


def _rig_at(x: float, y: float, layout: Layout) -> int | None:
    return next((k for k, rig in enumerate(layout.rigs) if rig.holds(x, y)), None)


def _zoom(c: Controls, factor: float, film: Film, layout: Layout) -> Controls:
    """Zoom about the pointer, or about the middle when it is elsewhere."""
    found = _rig_at(*c.pointer, layout) if c.pointer else None
    rig, pushers = layout.rigs[found or 0], film.scenario.pushers
    most = LARGEST_PUSHER * rig.height / (_whole(film, layout, found or 0).px_per_m * pushers.radius)
    zoom = min(max(c.zoom * factor, LEAST_ZOOM), max(most, 1.0))
    if abs(zoom - 1.0) < 1e-9:  # what repeated steps leave of 1
        zoom = 1.0
    before, zoomed = view_of(c, film, layout, found or 0), replace(c, zoom=zoom)
    if c.pointer is None or found is None or (c.follow is not None and zoom > 1.0):
        return zoomed
    x, y = c.pointer[0] - rig.x, c.pointer[1] - rig.y
    old, new = before.to_m(x, y), replace(before, px_per_m=before.px_per_m * zoom / c.zoom).to_m(x, y)
    centre = (before.centre[0] + float(old[0] - new[0]), before.centre[1] + float(old[1] - new[1]))
    return replace(zoomed, centre_m=_near_channel(centre, film.scenario))


def _pan(c: Controls, dx: float, dy: float, film: Film, layout: Layout, rig: int = 0) -> Controls:
    """Move the picture by some pixels; a pusher that is followed is let go."""
    view = view_of(c, film, layout, rig)
    zero, moved = view.to_m(0.0, 0.0), view.to_m(dx, dy)
    centre = (view.centre[0] - float(moved[0] - zero[0]), view.centre[1] - float(moved[1] - zero[1]))
    return replace(c, centre_m=_near_channel(centre, film.scenario), follow=None if c.zoom > 1.0 else c.follow)


def _near_channel(centre: tuple[float, float], s: Scenario) -> tuple[float, float]:
    """The nearest place in the channel, so that it is never lost from sight."""
    return min(max(centre[0], 0.0), s.channel.length), min(max(centre[1], 0.0), s.channel.width)


def _followed(c: Controls, pusher: int) -> Controls:
    hint = "" if c.zoom > 1.0 else " Zoomed in, the picture goes with it."
    return replace(c, follow=pusher, message=f"Pusher {pusher} is followed.{hint}")


def _let_go(c: Controls, film: Film, layout: Layout) -> Controls:
    if c.follow is None:
        return c
    centre = view_of(c, film, layout).centre if c.zoom > 1.0 else c.centre_m
    return replace(c, follow=None, centre_m=centre, message="No pusher is followed.")


def _pick(c: Controls, x: float, y: float, film: Film, layout: Layout) -> Controls:
    """Follow the pusher under the pointer, or let go of it."""
    view, rig = view_of(c, film, layout), layout.rigs[0]
    places = film.frame(c.t_s).pushers
    px, py = view.to_px(places[:, 0], places[:, 1])
    away = np.hypot(px - (x - rig.x), py - (y - rig.y))
    nearest = int(np.argmin(away))
    if away[nearest] > film.scenario.pushers.reach * view.px_per_m + NEAR_PX:
        return c
    return _let_go(c, film, layout) if nearest == c.follow else _followed(c, nearest)


# ---- pointer ---------------------------------------------------------------------------------------------------


def _press(c: Controls, x: float, y: float, film: Film, layout: Layout) -> tuple[Controls, Action | None]:
    c = replace(c, pointer=(x, y))
    if c.shows_help:
        c = replace(c, shows_help=False)
        chosen = [binding.command for binding, cell in layout.help_cells if cell.holds(x, y)]
        return perform(c, chosen[0], film, layout) if chosen and chosen[0] is not Command.HELP else (c, None)
    for command, cell in layout.cells.items():
        if cell.holds(x, y):
            return perform(c, command, film, layout)
    if layout.timeline.holds(x, y):
        return _scrub(replace(c, hold=Hold("time line", 0, (x, y), (x, y))), x, film, layout), None
    rig = _rig_at(x, y, layout)
    return replace(c, hold=Hold("rig", rig, (x, y), (x, y)) if rig is not None else None), None


def _move(c: Controls, x: float, y: float, film: Film, layout: Layout) -> Controls:
    hold = c.hold
    if hold is None:
        return c
    if hold.what == "time line":
        return _scrub(c, x, film, layout)
    if not hold.has_moved and math.dist(hold.began, (x, y)) <= STILL_PX:
        return c
    c = replace(c, hold=replace(hold, last=(x, y), has_moved=True))
    return _pan(c, x - hold.last[0], y - hold.last[1], film, layout, min(hold.rig, len(layout.rigs) - 1))


def _release(c: Controls, x: float, y: float, film: Film, layout: Layout) -> Controls:
    hold, c = c.hold, replace(c, hold=None)
    if hold is None or hold.what != "rig" or hold.has_moved or hold.rig > 0:
        return c
    return _pick(c, x, y, film, layout)


def _scrub(c: Controls, x: float, film: Film, layout: Layout) -> Controls:
    """To the time under the pointer; a growing film is shown at most to its end so far."""
    return replace(c, t_s=min(timeline_time(film, layout.timeline, x), film.duration_s), message="")
