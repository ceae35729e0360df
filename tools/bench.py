"""How fast swarmpush is, as ratios between things measured by turns in one run.

    python tools/bench.py                      all cases
    python tools/bench.py --csv bench.csv      and append one row per case to this file
    python tools/bench.py --cases body point   only some: body, point, basin, start, audit

Cases and bars:
- body: one step of the body world with 16 to 2000 pushers, with as much floor for each whatever their number. At most
  1.5 times the bare engine from 16 to 1024; the hand-written script must take at least 20 times as long at 64; and
  the cost must grow no faster than as n^1.15.
- point: bumps per second and core in the point world; at least 8 million.
- basin: a million starts in the service passage, each followed for 100 legs; at least 10 million legs per second and
  core on one thread, at least 1.8 times as many on two threads, less than 500 MB.
- start: `python -m swarmpush --help`; at most twice as long as `python -c "import typer"`.
- audit: a whole audit of the service passage with everything compiled; no bar.

What the columns of the body case hold:
- ours: the compiled loop with all it does (drive, drag, routine, sensing, ledger, books, floor, sampled path).
- bare: pymunk's own `space.step(dt)` and nothing else, on a plain space with the same shapes, masses, floor joints and
  iterations. Every 10 steps, outside the clock, its bodies are put where the compiled loop has them, so that it meets
  the same contacts; forces, routine and records are out. Friction and restitution are products of the shapes' values,
  as plain pymunk has it: right for pairs with a pusher, a little too high between block and wall.
- by hand: the script that somebody at home in pymunk would write: post-solve callbacks that log each visit's impulse
  and feel bumps, a loop over the carts for routine and forces, caps for the floor. It splits no impulses, keeps no
  books and records no path, so it does less than ours. Its world is the same one, though its course is its own.
The crew thickens at the block as time goes on, so each round compares the same stretch of model time.

What the basin case counts: a leg is one straight run to the next bump, with all acts of the routine before it. No start
stops early, not even where its lap has closed. Clocked are the following of all starts and the keeping of their ends;
drawing the starts and compiling are not. "By hand" are two versions in vectorised NumPy, on one thread and with fewer
starts (`contenders_point.py`). On 1000 starts their legs must be ours, surface by surface and to 1e-9 in m, rad and s.
The peak memory is that of a fresh process that follows the million starts on two threads.

Use it on a quiet machine; it says how busy the machine was before.
"""

from __future__ import annotations

import argparse
import csv
import datetime
import math
import os
import platform
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from importlib.metadata import version
from pathlib import Path
from typing import Any

from _environment import PROJECT, PYTHON, VENV, SetupError, prepare, say
from contenders import Bare, ByHand, Ours, wide_corridor

CREWS = (16, 64, 256, 1024, 2000)
MOST_TO_BARE = 1024  # pushers up to which the bare engine is the measure, and
MOST_BY_HAND = 256  # those up to which the hand-written script is run
WARM_UP, STEPS, ROUNDS = 2000, 2000, 7  # steps before the clock runs; steps per round
BUSY = 0.5  # processes waiting for a processor, above which the numbers are in doubt
MIN_BY_HAND, MAX_TO_BARE, MAX_GROWTH, MIN_BUMPS, MAX_START = 20.0, 1.5, 1.15, 8e6, 2.0  # the bars
MIN_LEGS, MIN_SPEED_UP, MAX_MB = 10e6, 1.8, 500.0  # those of the basin case

N_BASIN, N_LEGS, N_NUMPY, N_CHECKED = 1_000_000, 100, 100_000, 1000  # starts, legs each; starts of the NumPy versions
BASIN_ROUNDS = 5
SAME_LEG = 1e-9  # m, rad, s; the laps contract, so rounding stays at its own size, about 1e-13

COLUMNS = "date commit machine load python packages case unit ours bare by_hand ours_to_bare by_hand_to_ours bar is_met"


@dataclass(frozen=True)
class Result:
    """One case: its row of the CSV file and its lines on the screen."""

    row: dict[str, Any]
    lines: list[str] = field(default_factory=list)


def main(arguments: list[str]) -> int:
    """Measure, print, and append to the CSV file."""
    parser = argparse.ArgumentParser(description=str(__doc__), formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--csv", type=Path, metavar="FILE", help="append one row per case to this file")
    parser.add_argument("--cases", nargs="+", choices=list(CASES), default=list(CASES), help="only these")
    options = parser.parse_args(arguments)
    if Path(sys.prefix).resolve() != VENV.resolve():
        return _again_inside(arguments)
    load = os.getloadavg()[0] if hasattr(os, "getloadavg") else math.nan
    say(f"{_machine()}; Python {platform.python_version()}; {_packages()}; commit {_commit() or 'none'}")
    say(f"busy before: {load:.2f} processes" + (": NOT QUIET, the numbers are in doubt" if load > BUSY else ""))
    here = {
        "date": datetime.datetime.now(datetime.UTC).isoformat(timespec="seconds"),
        "commit": _commit(),
        "machine": _machine(),
        "load": f"{load:.2f}",
        "python": platform.python_version(),
        "packages": _packages(),
    }
    for name in options.cases:
        for result in CASES[name]():
            for line in result.lines:
                say(line)
            if options.csv:
                _append(options.csv, here | result.row)
    return 0


def _again_inside(arguments: list[str]) -> int:
    try:
        prepare()
        return subprocess.run([str(PYTHON), __file__, *arguments]).returncode
    except SetupError as error:
        print(error, file=sys.stderr)
        return 1
    except KeyboardInterrupt:
        return 130


def _machine() -> str:
    info = Path("/proc/cpuinfo")
    lines = info.read_text().splitlines() if info.exists() else []
    models = [line.partition(":")[2].strip() for line in lines if line.startswith("model name")]
    name = models[0] if models else platform.processor() or platform.machine()
    return f"{name}, {os.cpu_count()} cores, {platform.system()}"


def _packages() -> str:
    return " ".join(f"{name} {version(name)}" for name in ("swarmpush", "pymunk", "numba", "numpy", "typer"))


def _commit() -> str:
    """The commit, with a plus if files differ from it; empty without git."""
    try:
        found = [
            subprocess.run(["git", *words], cwd=PROJECT, capture_output=True, text=True, check=True).stdout.strip()
            for words in (["rev-parse", "--short", "HEAD"], ["status", "--porcelain", "--untracked-files=no"])
        ]
    except (OSError, subprocess.CalledProcessError):
        return ""
    return found[0] + ("+" if found[1] else "")


def _append(path: Path, row: dict[str, Any]) -> None:
    is_new = not path.exists()
    with path.open("a", newline="", encoding="utf-8") as file:
        writer = csv.DictWriter(file, COLUMNS.split(), restval="")
        if is_new:
            writer.writeheader()
        writer.writerow({k: f"{v:.4g}" if isinstance(v, float) else v for k, v in row.items()})


def _verdict(is_met: bool) -> str:
    return "met" if is_met else "NOT MET"


# ---- body world ----------------------------------------------------------------------------------------------


def body_cases() -> Iterator[Result]:
    """The compiled loop against `space.step` alone and against a hand-written script."""
    say(f"\nbody world, us per step, medians of {ROUNDS} rounds of {STEPS} steps by turns")
    say("pushers     ours     bare   by hand   ours/bare   by hand/ours   touches per step: ours, by hand")
    steps = STEPS
    costs: dict[int, float] = {}
    for n in CREWS:
        s = wide_corridor(n)
        ours, bare = Ours(s), Bare(s)
        by_hand = ByHand(s) if n <= MOST_BY_HAND else None
        for candidate in filter(None, (ours, bare, by_hand)):
            candidate.advance(WARM_UP)
        rounds = []
        for _ in range(ROUNDS):
            a = _seconds(lambda ours=ours: ours.advance(steps))
            bare.advance(steps)
            c = _seconds(lambda by_hand=by_hand: by_hand.advance(steps)) if by_hand else math.nan
            rounds.append((a, bare.seconds, c, a / bare.seconds, c / a))
        middle = [statistics.median(column) for column in zip(*rounds, strict=True)]
        a, b, c = (1e6 * seconds / steps for seconds in middle[:3])
        costs[n] = a
        hand = f"{by_hand.touches_per_step():.1f}" if by_hand else "-"
        lines = [
            f"{n:7d} {a:8.2f} {b:8.2f} {c:9.1f} {middle[3]:11.2f} {middle[4]:14.1f}   "
            f"{bare.touches_per_step():.1f}, {hand}"
        ]
        row = {
            "case": f"body world, {n} pushers", "unit": "us per step", "ours": a, "bare": b, "by_hand": c,
            "ours_to_bare": middle[3], "by_hand_to_ours": middle[4],
        }  # fmt: skip
        bars = []
        if n <= MOST_TO_BARE:
            bars.append((f"at most {MAX_TO_BARE:g} times the bare engine", middle[3] <= MAX_TO_BARE))
        if n == 64:
            bars.append((f"by hand at least {MIN_BY_HAND:g} times ours", middle[4] >= MIN_BY_HAND))
        lines += [f"        bar: {bar}: {_verdict(is_met)}" for bar, is_met in bars]
        row |= {"bar": "; ".join(bar for bar, _ in bars), "is_met": all(is_met for _, is_met in bars)}
        yield Result(row, lines)
    logs = [(math.log(n), math.log(cost)) for n, cost in costs.items()]
    growth = statistics.linear_regression(*zip(*logs, strict=True)).slope
    is_met = growth <= MAX_GROWTH
    bar = f"cost grows no faster than n^{MAX_GROWTH:g}"
    row = {"case": "body world, growth of cost", "unit": "exponent", "ours": growth, "bar": bar, "is_met": is_met}
    yield Result(row, [f"growth: as n^{growth:.2f}; bar: {bar}: {_verdict(is_met)}"])


def _seconds(work: Callable[[], Any]) -> float:
    start = time.perf_counter()
    work()
    return time.perf_counter() - start


# ---- point world ---------------------------------------------------------------------------------------------


def point_case(rounds: int = 25) -> Iterator[Result]:
    """Bumps per second and core that a plan's search for laps follows."""
    import numpy as np

    import swarmpush
    from swarmpush.draws import stream_keys
    from swarmpush.kinematics.bounce import settle_many
    from swarmpush.kinematics.boundary import boundary_of
    from swarmpush.kinematics.laps import BUDGET, N_STARTS
    from swarmpush.program import EXACT, MEMORY, compile_routine
    from swarmpush.starts import draw_starts

    s = swarmpush.load(swarmpush.demo("service_passage"))
    starts = draw_starts(s.replace(pushers={"count": N_STARTS}), 0, apart=False)
    fates, states = np.zeros((N_STARTS, 3), dtype=np.int64), np.zeros((N_STARTS, 2))
    rig = boundary_of(s), compile_routine(s.routine), EXACT, stream_keys(0, 1)[0]
    rates = []
    for _ in range(rounds + 1):
        memories = np.zeros((N_STARTS, MEMORY), dtype=np.int64)
        start = time.perf_counter()
        n_bumps = settle_many(*rig, s.pushers.free_speed, starts, BUDGET, fates, states, memories)
        rates.append(n_bumps / (time.perf_counter() - start))
    rates = rates[1:]  # the first one compiles
    best, middle = max(rates), statistics.median(rates)
    is_met = middle >= MIN_BUMPS
    row = {
        "case": "point world, service passage", "unit": "bumps per second and core", "ours": middle,
        "bar": f"at least {MIN_BUMPS:g}", "is_met": is_met,
    }  # fmt: skip
    yield Result(
        row,
        [
            f"\npoint world, {N_STARTS} starts in the service passage, {n_bumps} bumps, {rounds} rounds",
            f"{middle / 1e6:.2f} million bumps per second and core (median; best round {best / 1e6:.2f})",
            f"        bar: at least {MIN_BUMPS / 1e6:g} million, by the median: {_verdict(is_met)}",
        ],
    )


def basin_case() -> Iterator[Result]:
    """A million starts, on one thread and on two, against vectorised NumPy."""
    from basin import Basin, draw_many, rig
    from contenders_point import CorridorInNumPy, InNumPy

    command = [sys.executable, str(Path(__file__).with_name("basin.py")), str(N_BASIN), str(N_LEGS), "2"]
    peak_MB = float(subprocess.run(command, capture_output=True, text=True, check=True).stdout.split()[-1])
    s = rig()
    ours, rivals = Basin(s), {"any channel": InNumPy(s), "a straight corridor": CorridorInNumPy(s)}
    starts, checked = draw_many(s, N_BASIN), draw_many(s, N_CHECKED, seed=1)
    worst = max(_worst_difference(ours.legs(checked, N_LEGS), rival, checked) for rival in rivals.values())
    rounds = []
    for _ in range(BASIN_ROUNDS):
        pair = [_rate(lambda n=n: ours.follow(starts, N_LEGS, n)) for n in (1, 2)]
        others = [_rate(lambda rival=rival: rival.follow(starts[:N_NUMPY], N_LEGS)) for rival in rivals.values()]
        rounds.append([*pair, *others])
    (ones, ones_cores), (twos, twos_cores), *others = (
        zip(*column, strict=True) for column in zip(*rounds, strict=True)
    )
    one, two = statistics.median(ones), statistics.median(twos)
    speed_up = statistics.median(b / a for a, b in zip(ones, twos, strict=True))

    is_met = one >= MIN_LEGS
    row = {
        "case": "basin, one thread", "unit": "legs per second and core", "ours": one,
        "bar": f"at least {MIN_LEGS:g}", "is_met": is_met,
    }  # fmt: skip
    lines = [
        f"\nbasin, {N_BASIN} starts in the service passage, {N_LEGS} legs each, {BASIN_ROUNDS} rounds by turns",
        f"{N_CHECKED} others give the same legs here and in NumPy, largest difference {worst:.1e} m, rad or s",
        f"one thread: {one / 1e6:.2f} million legs per second and core (median; best round {max(ones) / 1e6:.2f}); "
        f"{statistics.median(ones_cores):.2f} cores in use",
        f"        bar: at least {MIN_LEGS / 1e6:g} million, by the median: {_verdict(is_met)}",
    ]
    yield Result(row, lines)

    is_met = speed_up >= MIN_SPEED_UP
    row = {
        "case": "basin, two threads", "unit": "times one thread", "ours": speed_up,
        "bar": f"at least {MIN_SPEED_UP:g}", "is_met": is_met,
    }  # fmt: skip
    lines = [
        f"two threads: {two / 1e6:.2f} million legs per second, {two / 2e6:.2f} per core; {speed_up:.2f} times one "
        f"thread (best rounds {max(twos) / max(ones):.2f}); {statistics.median(twos_cores):.2f} cores in use",
        f"        bar: at least {MIN_SPEED_UP:g} times, by the median: {_verdict(is_met)}",
    ]
    yield Result(row, lines)

    is_met = peak_MB < MAX_MB
    row = {"case": "basin, peak memory", "unit": "MB", "ours": peak_MB, "bar": f"below {MAX_MB:g}", "is_met": is_met}
    yield Result(row, [f"peak memory: {peak_MB:.0f} MB", f"        bar: below {MAX_MB:g} MB: {_verdict(is_met)}"])

    for name, (rates, _) in zip(rivals, others, strict=True):
        rate = statistics.median(rates)
        ratio = statistics.median(a / b for a, b in zip(ones, rates, strict=True))
        row = {
            "case": f"basin, NumPy for {name}", "unit": "ns per leg", "ours": 1e9 / one, "by_hand": 1e9 / rate,
            "by_hand_to_ours": ratio,
        }  # fmt: skip
        yield Result(
            row, [f"NumPy for {name}: {rate / 1e6:.2f} million legs per second; ours/NumPy {ratio:.2f} (no bar)"]
        )


def _rate(follow: Callable[[], int]) -> tuple[float, float]:
    """Legs per second, and the cores that this process had in the mean."""
    busy, start = time.process_time(), time.perf_counter()
    n_legs = follow()
    seconds = time.perf_counter() - start
    return n_legs / seconds, (time.process_time() - busy) / seconds


def _worst_difference(ours: Any, rival: Any, starts: Any) -> float:
    """Largest difference between any two legs of the same number; ends the program if they are not alike."""
    import numpy as np

    hits, surfaces = np.zeros_like(ours.hits), np.zeros_like(ours.surfaces)
    rival.follow(starts, surfaces.shape[1], hits, surfaces)
    difference = hits - ours.hits
    difference[:, :, 2:4] = np.remainder(difference[:, :, 2:4] + math.pi, 2 * math.pi) - math.pi  # headings
    worst = float(np.abs(difference).max())
    if not (surfaces == ours.surfaces).all() or not worst <= SAME_LEG:
        raise SystemExit(f"{type(rival).__name__} follows other paths than the compiled engine ({worst:.1e})")
    return worst


# ---- the program as a whole ----------------------------------------------------------------------------------


def start_case() -> Iterator[Result]:
    """How long help takes, against what the command-line package needs alone."""
    commands = [[sys.executable, "-c", "import typer"], [sys.executable, "-m", "swarmpush", "--help"]]
    for command in commands:
        _run_quietly(command)
    rounds = [tuple(_seconds(lambda c=c: _run_quietly(c)) for c in commands) for _ in range(ROUNDS)]
    typer, ours = (statistics.median(column) for column in zip(*rounds, strict=True))
    ratio = statistics.median(b / a for a, b in rounds)
    is_met = ratio <= MAX_START
    row = {
        "case": "start-up", "unit": "s", "ours": ours, "bare": typer, "ours_to_bare": ratio,
        "bar": f"at most {MAX_START:g} times import typer", "is_met": is_met,
    }  # fmt: skip
    yield Result(
        row,
        [
            f"\nstart-up, medians of {ROUNDS} rounds by turns",
            f"swarmpush --help {ours:.3f} s, import typer {typer:.3f} s, ratio {ratio:.2f}",
            f"        bar: at most {MAX_START:g}: {_verdict(is_met)}",
        ],
    )


def audit_case() -> Iterator[Result]:
    """A whole audit as its user waits for it, after a first one that compiles."""
    with tempfile.TemporaryDirectory() as folder:
        command = [sys.executable, "-m", "swarmpush", "audit", "service_passage", "--json", "--out"]
        _run_quietly([*command, str(Path(folder, "first")), "--replicates", "2"])
        seconds = _seconds(lambda: _run_quietly([*command, str(Path(folder, "second"))]))
    row = {"case": "audit of the service passage, warm", "unit": "s", "ours": seconds}
    yield Result(row, [f"\naudit of the service passage, warm, once: {seconds:.1f} s (no bar)"])


def _run_quietly(command: list[str]) -> None:
    subprocess.run(command, cwd=PROJECT, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, check=True)


CASES: dict[str, Callable[[], Iterator[Result]]] = {
    "body": body_cases,
    "point": point_case,
    "basin": basin_case,
    "start": start_case,
    "audit": audit_case,
}


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
