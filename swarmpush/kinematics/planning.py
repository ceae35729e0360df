"""The point world's answer to a scenario, in one record."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import zip_longest
from typing import Any

import numpy as np
from numpy.typing import NDArray

from swarmpush.kinematics.drift import laps_to_drift_out
from swarmpush.kinematics.forecast import PushForce, TravelForecast, forecast, push_force
from swarmpush.kinematics.lap_loss import MOST_LEGS, LapsKept, laps_kept
from swarmpush.kinematics.laps import N_STARTS, Capture, Lap, find_laps
from swarmpush.kinematics.noise_budget import NoiseBudget, noise_budget
from swarmpush.kinematics.omissions import left_out
from swarmpush.kinematics.regimes import Regime, regimes
from swarmpush.kinematics.strikes import count_strikes, point_path
from swarmpush.routine import Device
from swarmpush.scenario import Scenario

N_LAPS_FOLLOWED = 4  # the laps that most starts fall into; pushers are followed on these


@dataclass(frozen=True)
class Plan:
    """What geometry alone predicts.

    scenario: what was planned. laps: closed cycles, most frequent first. capture: what becomes of the starts.
    force: thrust against floor friction. regime: dimensionless numbers. travel: the forecast for the block.
    laps_to_drift_out: mean, per lap in `laps`, by theory. laps_to_drift_out_mc: by following pushers, for the first
    `N_LAPS_FOLLOWED` of them. noise_budget: what the main lap tolerates; None without a lap. kit: hardware the routine
    needs. left_out: in sentences, what the scenario holds that all this leaves out. path_m: see `point_path`.
    """

    scenario: Scenario
    laps: tuple[Lap, ...]
    capture: Capture
    force: PushForce
    regime: tuple[Regime, ...]
    travel: TravelForecast
    laps_to_drift_out: tuple[float, ...]
    laps_to_drift_out_mc: tuple[LapsKept, ...]
    noise_budget: NoiseBudget | None
    kit: tuple[Device, ...]
    left_out: tuple[str, ...]
    path_m: NDArray[np.float64]

    @property
    def main_lap(self) -> Lap | None:
        """The lap that most starts fall into; None when there is none."""
        return self.laps[0] if self.laps else None

    def _repr_html_(self) -> str:
        from swarmpush.reporting.notebook import plan_html

        return plan_html(self)

    def to_dict(self) -> dict[str, Any]:
        """The plan as plain values for JSON; infinite values are None."""
        from swarmpush.output import plain, provenance

        laps = [
            {
                "surfaces": lap.surfaces,
                "hits": lap.n_rear,
                "lap_length_m": lap.length_m,
                "lap_time_s": lap.time_s,
                "multipliers": [m.real if abs(m.imag) < 1e-12 else [m.real, m.imag] for m in lap.multipliers],
                "rear_hit": {"y_m": lap.rear_y_m, "heading_rad": lap.rear_heading_rad},
                "band": {"heading_rad": lap.band_rad},
                "laps_to_drift_out": drift,
                "laps_to_drift_out_mc": kept,
                "share": lap.share,
                "corners_m": lap.hits[:, :2],
            }
            for lap, drift, kept in zip_longest(self.laps, self.laps_to_drift_out, self.laps_to_drift_out_mc)
        ]
        answer: dict[str, Any] = plain(
            {
                "laps": laps,
                "capture": {
                    "captured": self.capture.captured,
                    "lost": self.capture.lost,
                    "undecided": self.capture.undecided,
                    "starts": self.capture.n_starts,
                },
                "force": self.force,
                "regime": self.regime,
                "forecast": self.travel,
                "noise_budget": self.noise_budget,
                "kit": self.kit,
                "left_out": self.left_out,
                "provenance": provenance(self.scenario),
            }
        )
        return answer


def plan(s: Scenario, *, n_starts: int = N_STARTS) -> Plan:
    """Predict laps, their stability, the starts they catch, and what the block will do, from geometry alone.

    Arguments:
        s: the scenario.
        n_starts: number of starts drawn from its start region for the shares.

    Returns:
        A `Plan`.

    >>> import swarmpush
    >>> p = swarmpush.plan(swarmpush.load(swarmpush.demo("service_passage")), n_starts=200)
    >>> p.main_lap.surfaces
    ('rear', 'top', 'bottom')
    """
    laps, capture = find_laps(s, n_starts=n_starts)
    travel = forecast(s, laps, count_strikes(s))
    followed = laps[:N_LAPS_FOLLOWED]
    return Plan(
        scenario=s,
        laps=laps,
        capture=capture,
        force=push_force(s),
        regime=regimes(s, laps, travel),
        travel=travel,
        laps_to_drift_out=tuple(laps_to_drift_out(s, lap) for lap in laps),
        laps_to_drift_out_mc=tuple(laps_kept(s, lap, most_legs=MOST_LEGS // len(followed)) for lap in followed),
        noise_budget=noise_budget(s, lap=laps[0]) if laps else None,
        kit=s.routine.kit(),
        left_out=left_out(s),
        path_m=point_path(s),
    )
