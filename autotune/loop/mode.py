"""Who moves the output, and which way the controller acts."""

from enum import Enum


class LoopMode(Enum):
    """The actual mode of the block, never the requested one."""

    MAN = "MAN"
    AUTO = "AUTO"
    CAS = "CAS"
    REMOTE = "REMOTE"
    TRACKING = "TRACKING"
    INITIALISING = "INITIALISING"
    LOCAL = "LOCAL"
    NOT_KNOWN = "NOT_KNOWN"


class ControlAction(Enum):
    """Action of the controller.  Gains are stored positive; the sign lives here."""

    REVERSE = "reverse"  # PV up -> OP down; the process gain is positive
    DIRECT = "direct"  # PV up -> OP up; the process gain is negative

    @property
    def process_sign(self) -> int:
        """Sign of the process gain that this action suits: +1 for reverse, -1 for direct."""
        return 1 if self is ControlAction.REVERSE else -1
