"""Sentences that several member kinds share."""

NOT_A_RATING = (
    "A recovered load rates no structure: capacity, safety factors and permits are for a "
    "qualified engineer under the local code."
)
NOT_ABSENT = (
    "What was not detected is not thereby absent: compare the detection limit with what matters."
)
NO_ALARM = "The result is an estimate made afterwards: do not use it for alarms or protection."
GENERAL: tuple[str, ...] = (NOT_ABSENT, NO_ALARM)
HOT_LIVE = (
    "Hot and live parts are for qualified people under the local electrical code: take readings "
    "only by an approved method."
)
DIRECTION_LATERAL = ("down", "up")
DIRECTION_AXIAL = ("right", "left")
