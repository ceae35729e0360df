"""`attach`: crew and ledger in a pymunk space of the user's own, whatever is in it."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

import pymunk

from swarmpush.dynamics.asking import Decide
from swarmpush.dynamics.attached import ATTACHED, Crew, is_disc, solid_shapes
from swarmpush.dynamics.chipmunk import LAYOUT_IS_KNOWN
from swarmpush.dynamics.drive import Drive
from swarmpush.dynamics.steps import Units
from swarmpush.routine import Routine
from swarmpush.scenario import Errors

SI = Units(1.0, 1.0, 1.0)


def attach(
    space: pymunk.Space,
    *,
    dt: float,
    pushers: Sequence[pymunk.Body] = (),
    routine: Routine | Sequence[Mapping[str, Any]] | Decide | None = None,
    drive: Drive | None = None,
    watch: Mapping[str, pymunk.Body] | None = None,
    units: Units = SI,
    errors: Errors | None = None,
    seed: int = 1,
) -> Crew:
    """Let bodies of a space behave as pushers, and log every contact.

    Arguments:
        space: any space; its bodies, shapes, joints, callbacks, gravity and damping stay the user's own. Bodies, joints
            and shapes may come and go while the crew is attached, up to `SPARE` new bodies and as many static ones.
        dt: time step with which the space will be stepped, in its own unit of time; fixed until `detach`. A pusher
            should run no farther in it than a hundredth of its radius.
        pushers: dynamic bodies of the space; their present angles are their headings, and the x axis of a body points
            ahead. None: only the ledger works.
        routine: what they do: a `Routine`, a list of stages as in a scenario file, or a Python function
            (see `asking.Asker`). It cannot look for faces, which only a scenario has. A static body is a "wall" to it,
            a pusher a "pusher", all else a "block".
        drive: what drives them. Half a percent of its free speed is the approach above which a touch is an impact (5
            mm/s without a drive).
        watch: names of dynamic bodies to keep momentum books of; their masses must stay as they are. All other bodies
            are partners in visits as well.
        units: one of the space's units in m, s and kg.
        errors: of the pushers, in SI units; none unless given. There is no spread of masses, which are the bodies' own.
        seed: of all random draws.

    Returns:
        A `Crew`: call its `step` in place of `space.step`. Until `detach`, the mass of a pusher in touch or on a joint
        (and the moment of a free heading) holds the drag of one step, a held heading has an infinite moment and sets
        the body's angle, no pair's impulse is carried over from an earlier touch (`collision_persistence` is 1), and
        nothing falls asleep by itself; do not put a pusher to sleep. A pusher's own `velocity_func` must call
        `Body.update_velocity`, or it is not driven. Masses and moments that are set meanwhile are lost at `detach`.

    Raises:
        ValueError: when the arguments do not fit together.
        RoutineError: when the routine cannot be carried out in a space.
        RuntimeError: when the space has a crew already, or this build of the engine keeps its bodies in an unknown way.

    >>> space = pymunk.Space()
    >>> space.gravity = 0.0, -10.0
    >>> ball = pymunk.Body(2.0, 1.0)
    >>> space.add(ball, pymunk.Circle(ball, 0.1))
    >>> with attach(space, dt=0.01, watch={"ball": ball}) as crew:
    ...     crew.step(100)
    >>> float(crew.books["else_y_Ns"][0].round(9))
    -20.0
    """
    if not LAYOUT_IS_KNOWN:
        raise RuntimeError(
            "this build of pymunk keeps its bodies in an unknown way; use one that pyproject.toml allows"
        )
    if space in ATTACHED:
        raise RuntimeError("the space has a crew already; detach it first, or give one crew all the pushers")
    watched, listed, errors = dict(watch or {}), list(pushers), errors or Errors()
    _check(space, dt, listed, routine, drive, watched, units, errors)
    return Crew(space, dt, listed, routine, drive or Drive(1.0, 1.0), watched, units, errors, seed)


def _check(
    space: pymunk.Space,
    dt: float,
    pushers: Sequence[pymunk.Body],
    routine: object,
    drive: Drive | None,
    watched: Mapping[str, pymunk.Body],
    units: Units,
    errors: Errors,
) -> None:
    if not (math.isfinite(dt) and dt > 0.0):
        raise ValueError(f"dt = {dt}; it must be more than 0")
    for name in ("length", "time", "mass"):
        if not 0.0 < getattr(units, name) < math.inf:
            raise ValueError(f"the unit of {name} is {getattr(units, name)}; it must be more than 0")
    if pushers and (routine is None or drive is None):
        raise ValueError("pushers need a routine and a drive")
    if routine is not None and not pushers:
        raise ValueError("there is a routine, but no pusher to carry it out")
    if len(set(pushers)) < len(pushers):
        raise ValueError("a body is listed twice among the pushers")
    if len(set(watched.values())) < len(watched):
        raise ValueError("a body is watched under two names")
    for name in watched:
        if name in ("pusher", "wall") or name.startswith("body "):
            raise ValueError(f"no body can be called {name!r}: other bodies are called so")
    for kind, body in [
        *(("pusher", body) for body in pushers),
        *((f"watched body {n!r}", b) for n, b in watched.items()),
    ]:
        if body.space is not space:
            raise ValueError(f"a {kind} is not in the space; add it first")
        if body.body_type != pymunk.Body.DYNAMIC:
            raise ValueError(f"a {kind} is not dynamic; only dynamic bodies have momentum")
        if not body.mass > 0.0:
            raise ValueError(f"a {kind} has no mass")
    if set(pushers) & set(watched.values()):
        raise ValueError("a pusher cannot be watched as well; its visits are logged anyway")
    if any(not solid_shapes(body) for body in pushers):
        raise ValueError("a pusher has no shape that could touch anything")
    if drive and drive.heading == "free" and any(math.isinf(body.moment) for body in pushers):
        raise ValueError("a free heading needs bodies with a finite moment")
    if errors.mass_spread > 0.0:
        raise ValueError("errors cannot have a mass_spread: the pushers' masses are those of the bodies")
    if drive and math.isinf(drive.turn_rate) and not all(is_disc(body) for body in pushers):
        raise ValueError("a pusher that is no disc about its centre needs a finite turn_rate: it cannot turn at once")
