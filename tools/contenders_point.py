"""The point world in vectorised NumPy, against which `bench.py` holds the compiled engine.

All starts of a batch go from leg to leg together. An act of the routine is carried out at once for all that stand at
it; a branch splits them by a mask. They know the acts run, depart, tally, and the branches on contact and counter, and
neither errors nor random numbers. There are two:
- `InNumPy` takes any channel with any block, as the compiled engine does, and looks at one surface after the other.
- `CorridorInNumPy` is what somebody at home in NumPy would write for a straight corridor alone: walls and faces lie
  along the axes, so of two opposite ones only the one ahead needs a look, and the block's corners matter only to rays
  that come alongside the block.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from swarmpush.kinematics.boundary import REAR, SURFACES, boundary_of, surface_names
from swarmpush.program import FIRST_COUNTER, MEMORY, Op, compile_routine

BATCH = 16384  # starts; what they need at one time fits into a core's own cache
SLACK, BEHIND, PARALLEL = 1e-12, 1e-9, 1e-12  # of the pusher's radius, of it, rad


class InNumPy:
    """The point world of one scenario, the block standing still."""

    def __init__(self, s: Any) -> None:
        self._boundary, self._speed = boundary_of(s), s.pushers.free_speed
        self._slack, self._behind = SLACK * self._boundary.scale, -BEHIND * self._boundary.scale
        self._program = compile_routine(s.routine, surface_names(s))

    def follow(self, starts: Any, n_legs: int, hits: Any = None, surfaces: Any = None) -> int:
        """Follow all starts, keep where each ends, and return the number of legs.

        Arguments:
            starts: (n, 3) x, y in m, heading in rad. n_legs: for each of them.
            hits, surfaces: (n, n_legs, 6) and (n, n_legs), filled with every leg as by `trace`, where given.
        """
        self.ends, self.surfaces = np.empty((len(starts), 3)), np.empty(len(starts), dtype=np.int64)
        for a in range(0, len(starts), BATCH):
            part = slice(a, a + BATCH)
            self._follow(part, starts[part], n_legs, None if hits is None else (hits[part], surfaces[part]))
        return len(starts) * n_legs

    def _follow(self, part: slice, starts: Any, n_legs: int, records: Any) -> None:
        x, y, heading = (column.copy() for column in starts.T)
        contact, normal = np.zeros(len(x), dtype=np.int64), heading + math.pi
        counters = np.zeros((MEMORY - FIRST_COUNTER, len(x)), dtype=np.int64)
        standing = {0: [np.arange(len(x))]}
        for leg in range(n_legs):
            standing = self._decide(standing, counters, heading, contact, normal)
            ux, uy = np.cos(heading), np.sin(heading)
            run, surface = self._next_hit(x, y, ux, uy)
            x += run * ux
            y += run * uy
            contact, normal = self._boundary.kinds[surface], self._normals(x, y, surface)
            if records is not None:
                hits, surfaces = records
                if leg > 0:
                    hits[:, leg - 1, 3] = heading
                hits[:, leg] = np.column_stack([x, y, heading, heading, run, run / self._speed])
                surfaces[:, leg] = surface
        self.ends[part] = np.column_stack([x, y, heading])
        self.surfaces[part] = surface

    def _decide(self, standing: Any, counters: Any, heading: Any, contact: Any, normal: Any) -> Any:
        """Carry out acts until all run; `standing` holds who stands at which act."""
        running: dict[int, list[Any]] = {}
        while standing:
            at = min(standing)
            groups = standing.pop(at)
            who = groups[0] if len(groups) == 1 else np.concatenate(groups)
            if len(who) == 0:
                continue
            step, following = self._program[at], at + 1
            op, number, value = int(step["op"]), int(step["number"]), float(step["value"])
            if op == Op.RUN:
                running.setdefault(following, []).append(who)
                continue
            if op in (Op.IF_CONTACT, Op.IF_COUNTER):
                holds = contact[who] == number if op == Op.IF_CONTACT else counters[number][who] >= value
                standing.setdefault(int(step["go"]), []).append(who[holds])
                who = who[~holds]
            elif op == Op.JUMP:
                following = int(step["go"])
            elif op == Op.ADD:
                counters[number][who] += step["amount"]
            elif op == Op.SET:
                counters[number][who] = step["amount"]
            elif op == Op.DEPART and number in (-1, 1) and step["spread"] == 0.0:
                heading[who] = normal[who] + number * value  # up to full turns, which do not matter
            else:
                raise SystemExit(f"the NumPy version does not know {Op(op).name} as this routine uses it")
            standing.setdefault(following, []).append(who)
        return running

    def _next_hit(self, x: Any, y: Any, ux: Any, uy: Any) -> tuple[Any, Any]:
        """Length of the run and number of the surface; within a closed channel there always is one."""
        run, surface = np.full(len(x), np.inf), np.full(len(x), -1)
        for number, (ax, ay, tx, ty, length, nx, ny, _) in enumerate(self._boundary.segments.tolist()):
            approach = -(ux * nx + uy * ny)
            px, py = x - ax, y - ay
            distance = px * nx + py * ny
            is_near = (approach > PARALLEL) & (distance >= self._behind) & (distance < run * approach)
            who = np.flatnonzero(is_near)
            to_line = np.maximum(distance[who] / approach[who], 0.0)
            along = (px[who] + to_line * ux[who]) * tx + (py[who] + to_line * uy[who]) * ty
            is_met = (along >= -self._slack) & (along <= length + self._slack)
            who = who[is_met]
            run[who], surface[who] = to_line[is_met], number
        everyone = np.arange(len(x))
        for number, arc in enumerate(self._boundary.arcs.tolist(), len(self._boundary.segments)):
            self._meet_arc(arc, number, everyone, x, y, ux, uy, run, surface)
        return run, surface

    def _meet_arc(
        self, arc: Any, number: int, rays: Any, x: Any, y: Any, ux: Any, uy: Any, run: Any, surface: Any
    ) -> None:
        """Shorten the runs that meet an arc."""
        qx, qy = x[rays] - arc[0], y[rays] - arc[1]
        approach = -(qx * ux[rays] + qy * uy[rays])
        is_near = (approach > 0.0) & (approach - arc[2] < run[rays])
        rays, qx, qy, approach = rays[is_near], qx[is_near], qy[is_near], approach[is_near]
        outside = qx * qx + qy * qy - arc[2] * arc[2]
        discriminant = approach * approach - outside
        meets = discriminant >= 0.0
        rays = rays[meets]
        to_arc = np.maximum(outside[meets] / (approach[meets] + np.sqrt(discriminant[meets])), 0.0)
        is_first = to_arc < run[rays]
        run[rays[is_first]], surface[rays[is_first]] = to_arc[is_first], number

    def _normals(self, x: Any, y: Any, surface: Any) -> Any:
        """Directions of the touched surfaces' normals."""
        segments, arcs = self._boundary.segments, self._boundary.arcs
        normal = segments[:, 7][np.minimum(surface, len(segments) - 1)]
        who = np.flatnonzero(surface >= len(segments))
        if len(who):
            touched = arcs[surface[who] - len(segments)]
            normal[who] = np.arctan2(y[who] - touched[:, 1], x[who] - touched[:, 0])
        return normal


class CorridorInNumPy(InNumPy):
    """The same for a straight channel and a rectangular block only."""

    def __init__(self, s: Any) -> None:
        super().__init__(s)
        self._radius = r = s.pushers.radius
        middle, half = s.channel.width / 2 + s.block.offset, s.block.width / 2
        x0, x1, y0, y1 = s.block.rear_at, s.block_front_at, middle - half, middle + half
        self._block_x, self._block_y = (x0, x1), (y0, y1)
        # in each pair: what stops a centre on its way down and up the axis
        self._walls_x, self._wall_numbers_x = np.array([r, s.channel.length - r]), _numbers("near end", "far end")
        self._walls_y, self._wall_numbers_y = np.array([r, s.channel.width - r]), _numbers("bottom", "top")
        self._faces_x, self._face_numbers_x = np.array([x1 + r, x0 - r]), _numbers("front", REAR)
        self._faces_y, self._face_numbers_y = np.array([y1 + r, y0 - r]), _numbers("block top", "block bottom")

    def _next_hit(self, x: Any, y: Any, ux: Any, uy: Any) -> tuple[Any, Any]:
        right, up = (ux > 0.0).astype(np.intp), (uy > 0.0).astype(np.intp)
        with np.errstate(divide="ignore", invalid="ignore"):  # along an axis, put right below
            per_x, per_y = 1.0 / ux, 1.0 / uy
            run_x = np.maximum((self._walls_x[right] - x) * per_x, 0.0)
            run = np.maximum((self._walls_y[up] - y) * per_y, 0.0)
            to_face_x, to_face_y = (self._faces_x[right] - x) * per_x, (self._faces_y[up] - y) * per_y
        run_x[np.abs(ux) <= PARALLEL] = np.inf
        run[np.abs(uy) <= PARALLEL] = np.inf
        is_x = (run_x < run) | ((run_x == run) & (right & up).astype(bool))  # equal runs go to the lower number
        run = np.where(is_x, run_x, run)
        surface = np.where(is_x, self._wall_numbers_x[right], self._wall_numbers_y[up])
        self._meet_faces(to_face_x, self._face_numbers_x[right], self._block_y, y, ux, uy, run, surface)
        self._meet_faces(to_face_y, self._face_numbers_y[up], self._block_x, x, uy, ux, run, surface)
        (x0, x1), reach, end = self._block_x, self._radius - self._slack, x + run * ux
        beside = np.flatnonzero((np.maximum(x, end) > x0 - reach) & (np.minimum(x, end) < x1 + reach))
        if len(beside):
            for number, arc in enumerate(self._boundary.arcs.tolist(), len(self._boundary.segments)):
                self._meet_arc(arc, number, beside, x, y, ux, uy, run, surface)
        return run, surface

    def _meet_faces(
        self, to_face: Any, numbers: Any, span: Any, q: Any, towards: Any, across: Any, run: Any, surface: Any
    ) -> None:
        """Shorten the runs that meet a face of the block; it spans a stretch of the other axis, where they are at q."""
        who = np.flatnonzero((to_face < run) & (np.abs(towards) > PARALLEL))
        who = who[to_face[who] * np.abs(towards[who]) >= self._behind]
        ahead = np.maximum(to_face[who], 0.0)
        place = q[who] + ahead * across[who]
        is_met = (place >= span[0] - self._slack) & (place <= span[1] + self._slack)
        who = who[is_met]
        run[who], surface[who] = ahead[is_met], numbers[who]


def _numbers(*names: str) -> Any:
    return np.array([SURFACES.index(name) for name in names])
