"""A plan in words, shared by the console, the page and notebooks."""

from __future__ import annotations

import math

from swarmpush.kinematics.lap_loss import LapsKept
from swarmpush.kinematics.noise_budget import Limit, NoiseBudget
from swarmpush.kinematics.planning import Plan
from swarmpush.quantities import for_people


def plan_answer(plan: Plan) -> str:
    """Whether the plan itself arrives in time, in a sentence."""
    s, travel = plan.scenario, plan.travel
    if math.isfinite(travel.time_to_goal_s):
        by = f"{travel.strikes_to_goal:.0f} strikes of {for_people(travel.nudge_m, 'm')}"
        if travel.strikes_to_goal < 1.0:
            by = f"pushers that lean on it for {travel.leaning_share:.0%} of their time"
        lead = "In time" if travel.time_to_goal_s <= s.goal.time_limit else "Too late"
        return (
            f"{lead}: the plan promises {for_people(s.goal.travel, 'm')} in {for_people(travel.time_to_goal_s, 's')} "
            f"(limit {for_people(s.goal.time_limit, 's')}), at {for_people(travel.block_speed_m_s, 'm/s')} by {by}."
        )
    if travel.block_speed_m_s < 0.0:
        back = for_people(-travel.block_speed_m_s, "m/s")
        return f"No arrival: strikes on the front drive the block back at {back}."
    return "No arrival: no strike moves the block."


def followed(kept: LapsKept) -> str:
    """How many laps followed pushers kept; empty where none were followed."""
    if kept.n == 0:
        return ""
    return f"\n{count(kept.mean)} followed\n({count(kept.low)} to {count(kept.high)})"


def count(laps: float) -> str:
    """A number of laps."""
    if not math.isfinite(laps):
        return "-" if math.isnan(laps) else "ever"
    return f"{laps:.0f}" if laps >= 100.0 else f"{laps:.2g}"


def plan_facts(plan: Plan) -> dict[str, str]:
    """What a plan says in a sentence each, by name."""
    capture, force = plan.capture, plan.force
    shares = {"caught by a lap": capture.captured, **capture.lost, "no closed lap within the budget": capture.undecided}
    facts = {"starts": ", ".join(f"{share:.0%} {what}" for what, share in shares.items() if share >= 0.005)}
    if force.floor_friction_N > 0.0:
        facts["force"] = force_words(plan)
    if plan.noise_budget:
        facts["noise"] = noise_words(plan.noise_budget)
    facts["forecast"] = plan.travel.basis
    if plan.left_out:
        facts["left out"] = "; ".join(plan.left_out)
    facts["kit"] = ", ".join(plan.kit)
    return facts


def force_words(plan: Plan) -> str:
    """Thrust against what the floor holds, in a sentence."""
    force, n = plan.force, len(plan.scenario.blocks)
    what = "the block" if n == 1 else f"the {n} blocks"
    slope = ""
    if force.slope_N != 0.0:
        slope = f", the slope pulls {for_people(abs(force.slope_N), 'N')} {'back' if force.slope_N > 0.0 else 'ahead'}"
    return (
        f"one pusher {for_people(force.stall_N, 'N')}, the floor holds {what} with "
        f"{for_people(force.floor_friction_N, 'N')}{slope}: {force.pushers_to_move:.2f} pushers to move {what} "
        f"({force.pushers_to_move_low:.2f} with half the friction, {force.pushers_to_move_high:.2f} with twice), "
        f"of {plan.scenario.pushers.count}"
    )


def noise_words(budget: NoiseBudget) -> str:
    """The noise budget in a sentence."""

    def limit(what: str, x: Limit, unit: str) -> str:
        if x.value == 0.0:
            return f"no {what} at all (here {for_people(x.given, 'rad')}{unit})"
        if math.isinf(x.value):
            return f"any {what}"
        low, high, given = (for_people(value, "rad") for value in (x.low, x.high, x.given))
        return f"a {what} up to {for_people(x.value, 'rad')}{unit} ({low} to {high}; here {given})"

    turn = limit("turn error", budget.turn_sd_rad, "")
    diffusion = limit("heading diffusion", budget.heading_diffusion_rad_per_sqrt_s, "/sqrt(s)")
    if budget.turn_sd_rad.value == budget.heading_diffusion_rad_per_sqrt_s.value == 0.0:
        return f"without turn error or heading diffusion less than {budget.share:.0%} keep lap 1 for {budget.laps} laps"
    return f"{budget.share:.0%} of the pushers keep lap 1 for {budget.laps} laps with {turn}, or with {diffusion}"
