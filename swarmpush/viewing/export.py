"""Films as GIF and MP4 files, drawn without a display."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from functools import cache
from itertools import pairwise
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from swarmpush.output import OutputError, written_whole
from swarmpush.reporting.palette import (
    AXIS,
    BLUE,
    GREEN,
    INK,
    ORANGE,
    PALE,
    PAPER,
    PURPLE,
    QUIET,
    STATE_COLOURS,
    VERMILION,
)
from swarmpush.viewing.extras import require
from swarmpush.viewing.film import Film
from swarmpush.viewing.sheet import Sheet, sheet

if TYPE_CHECKING:
    import pygame

Progress = Callable[[int, int], None]  # frames done, of all

FLASH_S = 0.4  # of the film's time as it is shown, for which a strike is seen
FASTEST_GIF = 50.0  # frames per second; programs show faster ones slowly
MOST_FRAMES = 100_000
QUALITY = 18  # of MP4, as x264 counts ("constant rate factor"): hardly to be told from the original
SOLID = (INK, AXIS, PALE, PAPER, QUIET, ORANGE, GREEN, BLUE, VERMILION, PURPLE, *STATE_COLOURS.values())
BLENDS = 7  # steps from a colour to another at smooth edges, in a GIF
RED, GREEN_BITS, BLUE_BITS = 0xFF0000, 0xFF00, 0xFF  # of a pixel


def save_gif(
    film: Film,
    path: Path,
    *,
    size: tuple[int, int] = (800, 300),
    fps: float = 25.0,
    begin_s: float = 0.0,
    end_s: float | None = None,
    speed: float = 1.0,
    progress: Progress | None = None,
    **options: Any,
) -> None:
    """Write a span of a film as an animated GIF that goes round and round.

    Arguments:
        film: what is shown. path: of the file. size: px. fps: frames per second, at most `FASTEST_GIF`; a GIF counts
            hundredths of a second, and frames are as long as makes them right in sum. begin_s, end_s: span of model
            time; to the film's end unless given. speed: model time over shown time. progress: called after each frame.
            options: see `sheet`.

    Raises:
        OutputError: when Pillow or pygame is missing, the file cannot be written, or what is asked for makes no film.
    """
    require("pygame", "PIL")
    from PIL import Image

    if fps > FASTEST_GIF:
        raise OutputError(f"a GIF shows at most {FASTEST_GIF:g} frames per second; lower the frame rate, or write MP4")
    times, parts = _planned(film, size, fps, begin_s, end_s, speed, options)
    colours, nearest = _few_colours()
    hundredths = [round(100.0 * k / fps) for k in range(len(times) + 1)]

    def images() -> Iterator[Image.Image]:
        for surface in _surfaces(film, parts, times, progress):
            image = Image.fromarray(nearest[_fifteen_bits(surface)].T)
            image.putpalette(colours)
            yield image

    with written_whole(path) as part, part.open("wb") as file:
        first, *rest = [10 * (b - a) for a, b in pairwise(hundredths)]
        frames = images()
        next(frames).save(
            file,
            format="GIF",
            save_all=True,
            append_images=frames,
            duration=[first, *rest],
            loop=0,
            optimize=False,
        )


def save_mp4(
    film: Film,
    path: Path,
    *,
    size: tuple[int, int] = (1280, 720),
    fps: float = 25.0,
    begin_s: float = 0.0,
    end_s: float | None = None,
    speed: float = 1.0,
    progress: Progress | None = None,
    **options: Any,
) -> None:
    """Write a span of a film as MP4 (H.264).

    Arguments:
        film, path, fps, begin_s, end_s, speed, progress, options: see `save_gif`. size: px; odd numbers are brought up
            to even ones, as the format has no others.

    Raises:
        OutputError: when pygame or imageio-ffmpeg is missing, the file cannot be written, or what is asked for makes no
            film.
    """
    require("pygame", "imageio_ffmpeg")
    import imageio_ffmpeg
    import pygame

    width, height = (n + n % 2 for n in size)
    times, parts = _planned(film, (width, height), fps, begin_s, end_s, speed, options)
    with written_whole(path) as part:
        writer = imageio_ffmpeg.write_frames(
            str(part),
            (width, height),
            fps=fps,
            codec="libx264",
            quality=None,
            macro_block_size=2,
            output_params=["-f", "mp4", "-crf", str(QUALITY), "-movflags", "+faststart"],
            ffmpeg_log_level="error",
        )
        writer.send(None)
        try:
            for surface in _surfaces(film, parts, times, progress):
                writer.send(pygame.image.tobytes(surface, "RGB"))
        finally:
            writer.close()


def _planned(
    film: Film,
    size: tuple[int, int],
    fps: float,
    begin_s: float,
    end_s: float | None,
    speed: float,
    options: dict[str, Any],
) -> tuple[list[float], Sheet]:
    """Model times of the frames, and how they are divided."""
    for name, value in (("frame rate", fps), ("speed", speed)):
        if not (value > 0.0 and math.isfinite(value)):
            raise OutputError(f"the {name} of a film must be more than 0, not {value:g}")
    end_s = film.duration_s if end_s is None else min(end_s, film.duration_s)
    if not 0.0 <= begin_s < end_s:
        raise OutputError(
            f"nothing to show from {begin_s:g} s to {end_s:g} s; choose a span within the run's {film.duration_s:g} s"
        )
    n = max(1, round((end_s - begin_s) / speed * fps))
    if n > MOST_FRAMES:
        raise OutputError(f"{n} frames are more than {MOST_FRAMES}; raise the speed, or choose a shorter span")
    parts = sheet(film.scenario, size, **({"flash_s": FLASH_S * speed} | options))
    return [begin_s + k * speed / fps for k in range(n)], parts


def _surfaces(film: Film, parts: Sheet, times: list[float], progress: Progress | None) -> Iterator[pygame.Surface]:
    """The frames, each on the same surface, which must be used before the next."""
    import pygame

    from swarmpush.viewing.surface import paint

    masks = (RED, GREEN_BITS, BLUE_BITS, 0)
    ground, surface = (pygame.Surface((parts.width, parts.height), 0, 32, masks) for _ in range(2))
    ground.fill(PAPER)
    paint(ground, parts.ground(film).marks)
    for k, t_s in enumerate(times):
        surface.blit(ground, (0, 0))
        for layer in parts.moving(film, t_s):
            paint(surface, layer.marks, size=layer.size)
        yield surface
        if progress is not None:
            progress(k + 1, len(times))


def _fifteen_bits(surface: pygame.Surface) -> NDArray[np.int32]:
    """Five bits of red, green and blue of each pixel, (width, height)."""
    import pygame

    pixels = pygame.surfarray.array2d(surface)
    bits: NDArray[np.int32] = ((pixels >> 9) & 0x7C00) | ((pixels >> 6) & 0x3E0) | ((pixels >> 3) & 0x1F)
    return bits


@cache
def _few_colours() -> tuple[bytes, NDArray[np.uint8]]:
    """A palette for all frames, and the number of its nearest colour for each fifteen bits.

    It holds the colours that pictures have, and steps between each of them and white and ink, where edges are smoothed.
    """
    solid = np.array([[int(c[k : k + 2], 16) for k in (1, 3, 5)] for c in dict.fromkeys(SOLID)], dtype=np.float64)
    shares = np.linspace(0.0, 1.0, BLENDS + 1)[1:-1]
    ends = [solid[list(dict.fromkeys(SOLID)).index(c)] for c in (PAPER, INK)]
    blends = [share * solid + (1.0 - share) * end for end in ends for share in shares]
    colours = np.unique(np.rint(np.vstack([solid, *blends])), axis=0)[:256]
    bits = np.arange(1 << 15)
    cells = np.column_stack([(bits >> shift) & 31 for shift in (10, 5, 0)]) * (255 / 31)
    away = (cells**2).sum(axis=1)[:, None] - 2.0 * cells @ colours.T + (colours**2).sum(axis=1)
    nearest = away.argmin(axis=1).astype(np.uint8)
    parts = solid.astype(np.int64) >> 3
    own = (parts[:, 0] << 10) | (parts[:, 1] << 5) | parts[:, 2]  # plain areas keep their very colour
    nearest[own] = [np.flatnonzero((colours == c).all(axis=1))[0] for c in solid]
    return colours.astype(np.uint8).tobytes(), nearest
