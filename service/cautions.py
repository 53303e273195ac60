"""What everybody who drives a hand must know; shown by `serve`, on the page, and in the reply to arming."""

CAUTIONS = (
    "Keep fingers, hair and cables out of the hand: it pinches.",
    "Servos that stall get hot and may burn; let them cool before you touch them.",
    "The supply must bear every servo stalling at once; use a fuse.",
    "A software stop is no emergency stop (ISO 13850): have a switch that cuts the supply within reach.",
    "Local codes and licensed practice go before anything said here.",
)
NOT_AN_EMERGENCY_STOP = CAUTIONS[3]
