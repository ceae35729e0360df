"""Names of the plan's claims, in the order in which they are judged."""

LAP_TIME = "lap time"
STRIKE_PLACE = "strike place"
STRIKE_HEADING = "strike heading"
GROWTH = "heading growth"
CAPTURE = "capture"
LOCK = "lock"
STRIKES_PER_LAP = "strikes per lap"
STRIKE_RATE = "strike rate"
NUDGE = "nudge per strike"
MOMENTUM = "momentum per strike"
BLOCK_SPEED = "block speed"
ARRIVAL = "arrival"

INSTANT_TURNS = "instant turns"
IN_BAND = "errors in band"
UNDISTURBED = "undisturbed pushers"
NO_YAW = "block yaw"
AT_REST = "block at rest"
FORCE = "force"

# what the plan takes for granted, and what it concludes from that
CONDITIONS = (INSTANT_TURNS, IN_BAND, UNDISTURBED, NO_YAW, AT_REST, FORCE)
CONCLUSIONS = (
    LAP_TIME, STRIKE_PLACE, STRIKE_HEADING, GROWTH, CAPTURE, LOCK, STRIKES_PER_LAP, STRIKE_RATE, NUDGE, MOMENTUM,
    BLOCK_SPEED, ARRIVAL,
)  # fmt: skip

CLAIMS = (*CONDITIONS, *CONCLUSIONS)
