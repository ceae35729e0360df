"""Names of the plan's claims, in the order in which they are judged, of verdicts, and of what can be demanded."""

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
VERDICTS = ("holds", "strained", "fails", "undecided")

# name -> column of the runs' summaries and its SI unit
MEASURES = {
    ARRIVAL: ("has_arrived", "1"),
    BLOCK_SPEED: ("block_speed_m_s", "m/s"),
    "travel": ("travel_m", "m"),
    "duration": ("duration_s", "s"),
    STRIKE_RATE: ("strike_rate_1_s", "1/s"),  # of one pusher
    "nudge": ("nudge_m", "m"),
    LAP_TIME: ("lap_time_s", "s"),
    "lock share": ("lock_share", "1"),
    "impact": ("impact_Ns", "N*s"),
    "lean": ("lean_Ns", "N*s"),
}
