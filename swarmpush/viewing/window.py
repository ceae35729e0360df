"""The window: events to controls, time to the film, the film to pictures."""

from __future__ import annotations

import io
import os
import re
import sys
import time
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import replace
from pathlib import Path

import pygame

from swarmpush.output import OutputError, write_bytes
from swarmpush.reporting.palette import PAPER
from swarmpush.viewing import controls as state
from swarmpush.viewing.app import ViewingError
from swarmpush.viewing.charts import charts_cursor, charts_ground, timeline_cursor, timeline_ground
from swarmpush.viewing.commands import BY_KEY, REPEATING
from swarmpush.viewing.controls import (
    Action,
    Close,
    Event,
    KeyDown,
    PointerDown,
    PointerMove,
    PointerUp,
    Restart,
    SavePicture,
    Wheel,
)
from swarmpush.viewing.film import Film, LiveFilm, point_film
from swarmpush.viewing.layout import LEAST_SIZE, Layout, Rect, lay_out
from swarmpush.viewing.marks import Mark, Text
from swarmpush.viewing.scene import scene
from swarmpush.viewing.screen import help_list, line, message, status
from swarmpush.viewing.surface import paint, text_size

MOST_FRAMES_1_S = 60
BUDGET_S = 0.010  # of a frame, for the run
LONGEST_FRAME_S = 0.1  # that counts; after a longer one, as when the window was moved, time does not jump
REPEAT_MS = (350, 50)  # a held key: until it repeats, and between repeats
ATTAINED_SHARE = 0.05  # of the newest frame in the mean speed
BEHIND = 0.8  # of the speed asked for: the run cannot keep up
REMEDY = "write a picture or a film instead (swarmpush watch --export), or start a virtual X server, as with xvfb-run"
DISPLAY_NAMES = ("DISPLAY", "WAYLAND_DISPLAY", "SDL_VIDEODRIVER")
GROUND_EVERY_S = 0.2  # a growing film's charts are drawn anew
CHARTS_TYPE = 0.9  # of the unit
WORLDS = ("body world", "point world")
LARGEST_SIDE = 8192  # px
HEADLESS = ("dummy", "offscreen")  # video drivers that show nothing


def open_display(size: tuple[int, int]) -> None:
    """Open the window, still empty but for a word that something comes.

    Raises:
        ViewingError: when there is no display, or the size makes no window.
    """
    if not all(least <= side <= LARGEST_SIDE for least, side in zip(LEAST_SIZE, size, strict=True)):
        low, high = f"{LEAST_SIZE[0]}x{LEAST_SIZE[1]}", f"{LARGEST_SIDE}x{LARGEST_SIDE}"
        raise ViewingError(f"a window of {size[0]}x{size[1]} pixels cannot be used; choose a size from {low} to {high}")
    if sys.platform == "linux" and not any(os.environ.get(name) for name in DISPLAY_NAMES):
        raise ViewingError(f"no display to open a window on; {REMEDY}")  # which SDL would look for, and complain
    try:
        pygame.display.init()
        pygame.font.init()
        surface = pygame.display.set_mode(size, pygame.RESIZABLE)
    except pygame.error as error:
        close_display()
        raise ViewingError(f"no display to open a window on ({error}); {REMEDY}") from None
    driver = pygame.display.get_driver()
    if driver in HEADLESS and os.environ.get("SDL_VIDEODRIVER", "") != driver:
        close_display()
        raise ViewingError(f"no display to open a window on; {REMEDY}")
    pygame.display.set_caption("swarmpush")
    pygame.key.set_repeat(*REPEAT_MS)
    surface.fill(PAPER)
    layout = lay_out(*surface.get_size())
    paint(surface, line(state.PREPARING, layout.rigs[0], layout.unit, _width, align="middle"))
    pygame.display.flip()


def close_display() -> None:
    """Close the window, if it is open."""
    pygame.display.quit()


class Window:
    """What goes on in the open window.

    Arguments:
        film: what is shown first; a growing one is run on as it is watched. speed, folder: see `app.watch`.

    film: what is shown now. controls: how.
    """

    def __init__(self, film: Film, *, speed: float | None = None, folder: Path | None = None) -> None:
        self.film = film
        self.controls = state.start(film.scenario, film.duration_s if film.is_complete else None, speed)
        self.is_open = True
        self._folder = folder or Path.cwd()
        self._worker = ThreadPoolExecutor(max_workers=1)
        self._next: Future[Film] | None = None
        self._point: Future[Film] | None = None
        self._held: set[int] = set()
        self._attained = self.controls.speed  # mean over the last frames
        self._pieces: list[tuple[Rect, list[Mark]]] = []
        self._ground_pieces: list[tuple[Rect, list[Mark]]] = []
        self._ground_film: Film | None = None
        self._ground_of: tuple[bool, Layout] | None = None
        self._ground_at_s = 0.0
        self._ground = self._surface
        self._name()

    @property
    def layout(self) -> Layout:
        """Where things are now."""
        channel = self.film.scenario.channel
        n_rigs = 2 if self.controls.has_point_world else 1
        return lay_out(*self._surface.get_size(), n_rigs=n_rigs, rig_aspect=channel.length / channel.width)

    @property
    def _surface(self) -> pygame.Surface:
        return pygame.display.get_surface()

    def run(self) -> None:
        """Frame by frame, until the window is closed."""
        clock, elapsed_s = pygame.time.Clock(), 0.0
        try:
            while self.is_open:
                self.turn(elapsed_s)
                elapsed_s = clock.tick(MOST_FRAMES_1_S) / 1000.0
        finally:
            self._worker.shutdown(wait=False, cancel_futures=True)

    def turn(self, elapsed_s: float) -> None:
        """One frame: what happened, the film's next piece, a new picture."""
        for event in pygame.event.get():
            self._take(event)
        self._collect()
        self._go_on(min(elapsed_s, LONGEST_FRAME_S))
        self.draw()
        pygame.display.flip()

    # ---- events ----------------------------------------------------------------------------------------------

    def _take(self, event: pygame.event.Event) -> None:
        if event.type == pygame.QUIT:
            self.is_open = False
        if event.type == pygame.KEYUP:
            self._held.discard(event.key)
        meant = translated(event)
        if meant is None:
            return
        if isinstance(meant, KeyDown):
            is_repeated = event.key in self._held
            self._held.add(event.key)
            if is_repeated and BY_KEY.get(meant.name) not in REPEATING:
                return
        self.controls, action = state.handle(self.controls, meant, self.film, self.layout)
        if action is not None:
            self._act(action)

    def _act(self, action: Action) -> None:
        match action:
            case Close():
                self.is_open = False
            case SavePicture():
                self.controls = replace(self.controls, message=self._save_picture())
            case Restart(scenario, seed):
                planned = self.film.plan if scenario == self.film.scenario else None
                if self._next:
                    self._next.cancel()
                self._next = self._worker.submit(LiveFilm, scenario, seed, planned)

    def _save_picture(self) -> str:
        """Save the last picture under a free name, and say where, or why not."""
        data = io.BytesIO()
        pygame.image.save(self._surface, data, "picture.png")
        stem = re.sub(r"\W+", "-", self.film.scenario.about.name.lower()).strip("-")
        stem = f"{stem}-seed{self.film.seed}-{self.controls.t_s:.2f}s"
        path, k = self._folder / f"{stem}.png", 1
        while path.exists():
            k += 1
            path = self._folder / f"{stem}-{k}.png"
        try:
            write_bytes(path, data.getvalue())
        except OutputError as error:
            return str(error)
        return f"Saved {path.name} in {path.parent}"

    # ---- time ------------------------------------------------------------------------------------------------

    def _collect(self) -> None:
        """Take over what was prepared meanwhile."""
        if self._next and self._next.done():
            prepared, self._next = self._next, None
            try:
                new = prepared.result()
            except ValueError as error:
                self.controls = replace(self.controls, wanted=None, message=f"Not changed. {error}")
            else:
                old, self.film, self._point = self.film, new, None
                self.controls = state.begun(self.controls, old, self.film)
                self._name()
        if self.controls.has_point_world and self._point is None:
            self._point = self._worker.submit(point_film, self.film.scenario, self.film.seed, self.film.plan)

    def _go_on(self, elapsed_s: float) -> None:
        due = state.passed(self.controls, elapsed_s)
        if isinstance(self.film, LiveFilm) and due > self.film.duration_s:
            self.film.advance(due, BUDGET_S)
        before, self.controls = self.controls, state.arrived(self.controls, self.film, due)
        if elapsed_s > 0.0 and not before.is_paused:
            now = (self.controls.t_s - before.t_s) / elapsed_s
            self._attained += ATTAINED_SHARE * (now - self._attained)

    def _name(self) -> None:
        pygame.display.set_caption(f"{self.film.scenario.about.name}, seed {self.film.seed} - swarmpush")

    # ---- pictures --------------------------------------------------------------------------------------------

    @property
    def texts(self) -> list[tuple[str, Rect]]:
        """Each text of the last picture with the rectangle it fills, as far as there is something of it to be seen."""
        boxes = [
            (mark.text, place, _text_box(mark, place))
            for place, marks in self._pieces
            for mark in marks
            if isinstance(mark, Text)
        ]
        return [(text, box) for text, place, box in boxes if _overlap(place, box)]

    def draw(self) -> None:
        """Draw everything."""
        surface, layout = self._surface, self.layout
        if self.controls.shows_help:
            self._pieces = [(Rect(0, 0, layout.width, layout.height), help_list(layout, _width))]
        else:
            self._draw_ground(layout)
            surface.blit(self._ground, (0, 0))
            self._pieces = self._moving(layout)
        for place, marks in self._pieces:
            paint(surface, marks, (place.x, place.y), (place.width, place.height))
        if not self.controls.shows_help:
            self._pieces += self._ground_pieces

    def _draw_ground(self, layout: Layout) -> None:
        """What stays the same from frame to frame, or at least for a fraction of a second, is kept as a picture."""
        film, now = self.film, time.perf_counter()
        is_same = self._ground_film is film and self._ground_of == (film.is_complete, layout)
        if is_same and (film.is_complete or now - self._ground_at_s < GROUND_EVERY_S):
            return
        self._ground_film, self._ground_of, self._ground_at_s = film, (film.is_complete, layout), now
        window = Rect(0, 0, layout.width, layout.height)
        marks = [
            *charts_ground(film, layout.charts, type_px=CHARTS_TYPE * layout.unit),
            *timeline_ground(film, layout.timeline, type_px=layout.unit),
        ]
        self._ground_pieces = [(window, marks)]
        self._ground = pygame.Surface((layout.width, layout.height))
        self._ground.fill(PAPER)
        paint(self._ground, marks)

    def _moving(self, layout: Layout) -> list[tuple[Rect, list[Mark]]]:
        """What is drawn upon that, and where; places of marks count from the corners of their rectangles."""
        c, film = self.controls, self.film
        shown, lines = [film], list[Mark]()
        if c.has_point_world and self._point and self._point.done():
            shown.append(self._point.result())
        elif c.has_point_world:
            lines += line("Working out the point world ...", layout.rigs[1], layout.unit, _width, align="middle")
        rigs = [(layout.rigs[k], scene(of, c.t_s, state.view_of(c, of, layout, k))) for k, of in enumerate(shown)]
        cursors = [
            *charts_cursor(film, c.t_s, layout.charts, type_px=CHARTS_TYPE * layout.unit),
            *timeline_cursor(film, c.t_s, layout.timeline),
        ]
        said = c.message or "H lists all keys. A prediction of a model, no safety proof."
        for name, place in zip(WORLDS, layout.heads, strict=False):
            lines += line(name, place, layout.unit, _width, align="middle")
        lines += [*status(c, film, layout, _width), *message(said, self._aside(), layout, _width)]
        return [*rigs, (Rect(0, 0, layout.width, layout.height), [*cursors, *lines])]

    def _aside(self) -> str:
        """What kind of film is shown."""
        if self.film.is_complete:
            return "replay"
        if self._attained < BEHIND * self.controls.speed and not self.controls.is_paused:
            return f"live, no faster than {self._attained:.2g} x here"
        return "live: states are told at the end"


def _width(text: str, size: float) -> float:
    return text_size(text, size)[0]


def _text_box(mark: Text, place: Rect) -> Rect:
    """The rectangle that a text fills in the window."""
    width, height = text_size(mark.text, mark.size)
    x = mark.x - (width if "e" in mark.anchor else 0 if "w" in mark.anchor else width / 2)
    y = mark.y - (height if "s" in mark.anchor else 0 if "n" in mark.anchor else height / 2)
    return Rect(round(place.x + x), round(place.y + y), width, height)


def _overlap(a: Rect, b: Rect) -> bool:
    return a.x < b.x + b.width and b.x < a.x + a.width and a.y < b.y + b.height and b.y < a.y + a.height


def translated(event: pygame.event.Event) -> Event | None:
    """An event of pygame as one of the window's own; None for what means nothing."""
    match event.type:
        case pygame.KEYDOWN:
            name = key_name(event)
            return KeyDown(name) if name else None
        case pygame.MOUSEBUTTONDOWN if event.button == 1:
            return PointerDown(*event.pos)
        case pygame.MOUSEBUTTONUP if event.button == 1:
            return PointerUp(*event.pos)
        case pygame.MOUSEMOTION:
            return PointerMove(*event.pos)
        case pygame.MOUSEWHEEL:
            return Wheel(*pygame.mouse.get_pos(), event.y)
    return None


def key_name(event: pygame.event.Event) -> str | None:
    """The name of a pressed key as in `commands.BINDINGS`; None with Ctrl, Alt or the like, which belong to others.

    A sign is what the keyboard writes for it, wherever its key is.
    """
    if event.mod & (pygame.KMOD_CTRL | pygame.KMOD_ALT | pygame.KMOD_META):
        return None
    sign = getattr(event, "unicode", "").lower()
    is_sign = len(sign) == 1 and sign.isprintable() and not sign.isspace()
    name = sign if is_sign else pygame.key.name(event.key)
    has_shift = event.mod & pygame.KMOD_SHIFT and (len(name) > 1 or name.isalpha())
    return f"shift+{name}" if has_shift else name
