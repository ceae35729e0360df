"""Names of the plan's claims, in the order in which they are judged."""

LAP_TIME = "lap time"
LOCK = "lock"
STRIKES_PER_LAP = "strikes per lap"
STRIKE_RATE = "strike rate"
NUDGE = "nudge per strike"
MOMENTUM = "momentum per strike"
BLOCK_SPEED = "block speed"
ARRIVAL = "arrival"

CLAIMS = (LAP_TIME, LOCK, STRIKES_PER_LAP, STRIKE_RATE, NUDGE, MOMENTUM, BLOCK_SPEED, ARRIVAL)
