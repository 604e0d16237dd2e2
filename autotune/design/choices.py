"""What a person chooses before settings are designed, in plain words."""

from enum import Enum


class Purpose(Enum):
    """What the loop is for."""

    REGULATE = "regulate"  # hold PV against upsets
    FOLLOW = "follow"  # go to a new setpoint quickly and without overshoot
    AVERAGING = "averaging"  # use a vessel's band to smooth what goes on downstream
    GENTLE = "gentle"  # spare the valve


class Caution(Enum):
    """How much of what the model may be instead has to be safe too: a price paid in speed."""

    BRISK = "brisk"  # the best estimate alone
    MIDDLE = "middle"  # nine of ten draws
    CAREFUL = "careful"  # every draw
