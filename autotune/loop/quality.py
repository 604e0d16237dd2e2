"""How far a value may be trusted."""

from enum import Enum


class Quality(Enum):
    """Only ``GOOD`` may feed a test; the others say why not."""

    GOOD = "good"
    SUSPECT = "suspect"  # good by its status, but clipped at an end of its span
    UNCERTAIN = "uncertain"  # the source itself doubts it
    FORCED = "forced"  # a person or a tool holds the value
    CLAMPED = "clamped"  # held at a limit by the controller
    BAD = "bad"  # no usable value
