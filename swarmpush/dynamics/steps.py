"""Engine units, and the solver settings that follow from a scenario.

Inside the engine lengths are measured in pusher radii, times in radius / free speed and masses in pusher masses, so
that one set of tolerances serves a 100 um and a 10 cm rig alike.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from swarmpush.scenario import Scenario

TRAVEL_PER_STEP = 0.008  # radii: how far a pusher may run per step; the overlap of an impact is no deeper
OVERDAMPED = 0.02  # relaxation time in units of radius / speed below which there is no coasting to resolve
STEPS_PER_RELAXATION = 20  # the mass seen by an impact is then right within 2.5 %, see `effective_mass`
STEPS_PER_LATENCY = 8
SIDEWAYS = 0.1  # radius / speed: within this a pusher in touch gains its speed, however large the drag across
ITERATIONS = 10  # of the contact solver
ITERATIONS_PER_BLOCK = 40  # of a train: with fewer, a row held by static friction lets go too early
SLOP_TO_TRAVEL = 2.0  # allowed overlap over travel per step: pushers that meet head on stay within it
TURN_PER_STEP = math.radians(5.0)
NOISE_INTERVAL = 0.1  # radius / speed: the heading noise is a random walk with steps of this length
SAMPLES = 1000  # default length of the recorded path


@dataclass(frozen=True)
class Units:
    """Engine units in SI: one engine length is `length` metres, and so on."""

    length: float
    time: float
    mass: float

    @property
    def speed(self) -> float:
        return self.length / self.time

    @property
    def acceleration(self) -> float:
        return self.length / self.time**2

    @property
    def force(self) -> float:
        return self.mass * self.length / self.time**2

    @property
    def impulse(self) -> float:
        return self.mass * self.speed

    @property
    def drag(self) -> float:
        return self.mass / self.time

    @property
    def inertia(self) -> float:
        return self.mass * self.length**2

    @property
    def turn_drag(self) -> float:
        return self.inertia / self.time

    @property
    def turn_impulse(self) -> float:
        return self.impulse * self.length

    @property
    def energy(self) -> float:
        return self.mass * self.speed**2


def engine_units(s: Scenario) -> Units:
    """The units of a scenario: pusher radius, radius over free speed, pusher mass."""
    return Units(s.pushers.radius, s.pushers.radius / s.pushers.free_speed, s.pushers.mass)


@dataclass(frozen=True)
class StepSettings:
    """Solver settings of one run.

    dt_s: time step. slop_m: overlap that is left alone. iterations: of the contact solver per step.
    sample_steps: steps between two rows of the path. noise_steps: steps between two steps of the heading's random
    walk. because: what set the step.
    """

    dt_s: float
    slop_m: float
    iterations: int
    sample_steps: int
    noise_steps: int
    because: str

    def halved(self) -> StepSettings:
        """The same run with half the step and half the slop; samples and noise keep their times."""
        return StepSettings(
            dt_s=self.dt_s / 2,
            slop_m=self.slop_m / 2,
            iterations=self.iterations,
            sample_steps=2 * self.sample_steps,
            noise_steps=2 * self.noise_steps,
            because=f"half of: {self.because}",
        )


def choose_step(s: Scenario) -> StepSettings:
    """Solver settings from the shortest thing that a run must resolve."""
    p = s.pushers
    crossing = p.radius / p.free_speed
    limits = {"travel per step": TRAVEL_PER_STEP * crossing}
    if p.relaxation_time > OVERDAMPED * crossing:
        limits["relaxation time"] = p.relaxation_time / STEPS_PER_RELAXATION
    if p.sideways_drag > 1.0:
        limits["sideways drag"] = max(p.relaxation_time, SIDEWAYS * crossing) / p.sideways_drag
    if p.latency > 0.0:
        limits["latency"] = max(p.latency / STEPS_PER_LATENCY, 1e-4 * crossing)
    if math.isfinite(p.turn_rate):
        limits["turn rate"] = TURN_PER_STEP / p.turn_rate
    if s.fluid:
        drag = max(s.fluid.drag_along, s.fluid.drag_across)
        times = [block.mass / drag for block in s.blocks if block.mass / drag > OVERDAMPED * crossing]
        if times:
            limits["relaxation time of the block"] = min(times) / STEPS_PER_RELAXATION
    because = min(limits, key=limits.__getitem__)
    dt = limits[because]
    if s.numerics.step is not None:
        dt, because = s.numerics.step, "given in the scenario"
    slop = SLOP_TO_TRAVEL * p.free_speed * dt
    interval = s.trial.sample_every or s.goal.time_limit / SAMPLES
    return StepSettings(
        dt_s=dt,
        slop_m=slop,
        iterations=s.numerics.iterations or max(ITERATIONS, ITERATIONS_PER_BLOCK * len(s.train)),
        sample_steps=max(1, round(interval / dt)),
        noise_steps=max(1, round(NOISE_INTERVAL * crossing / dt)),
        because=because,
    )


def relaxed(x: float) -> float:
    """(1 - exp(-x))/x: mean of exp(-t) from 0 to x.

    >>> relaxed(0.0), round(relaxed(1.0), 6)
    (1.0, 0.632121)
    """
    return -math.expm1(-x) / x if x > 0.0 else 1.0


def effective_mass(mass: float, drag: float, dt: float) -> float:
    """The mass to step with under linear drag, so that explicit drag is exact in both limits.

    With x = drag dt/mass, a mass of m x/(1 - exp(-x)) and the force F - drag v make one step equal the exact
    exponential relaxation v -> F/drag + (v - F/drag) exp(-x), and a body held by a contact still pushes with
    exactly F. For x -> 0 it is the mass itself plus x/2 of it (the error an impact sees), for x -> infinity it is
    drag dt, the backward Euler step of Stokes flow. (Derived here.)

    >>> effective_mass(2.0, 0.0, 0.1), round(effective_mass(1e-9, 3.0, 0.1), 12)
    (2.0, 0.3)
    """
    x = drag * dt / mass
    if x < 1e-8:
        return mass * (1.0 + 0.5 * x)
    return mass * x / -math.expm1(-x)
