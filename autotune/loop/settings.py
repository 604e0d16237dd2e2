"""PID settings as the trade writes them, and the description of the block that holds them.

The pure rooms speak ``PidSettings``: span-normalised gain (%OP/%PV, positive) and seconds.
A controller speaks ``BlockFields``: the numbers in its own registers, in the form and units that
its ``BlockDescription`` tells.
"""

from dataclasses import dataclass, field
from enum import Enum


class PidForm(Enum):
    """How gain, integral and derivative combine."""

    IDEAL = "ideal"  # K (1 + 1/(Ti s) + Td s)
    SERIES = "series"  # K (1 + 1/(Ti s)) (1 + Td s)
    PARALLEL = "parallel"  # Kp + Ki/s + Kd s


@dataclass(frozen=True, slots=True)
class PidSettings:
    """Settings in one form: gain in %OP/%PV, times in seconds; ``None`` is off.

    For ``PARALLEL`` the times are Kp/Ki and Kd/Kp, so that every form has the same three numbers.
    """

    form: PidForm
    controller_gain: float
    integral_time_s: float | None
    derivative_time_s: float | None = None


class GainKind(Enum):
    """What the gain field holds."""

    GAIN = "gain"
    PROPORTIONAL_BAND = "proportional band"  # percent: 100 / gain


class GainPer(Enum):
    """What one unit of gain relates."""

    PERCENT = "percent"  # %OP per %PV
    ENGINEERING_UNIT = "engineering unit"  # %OP per engineering unit of PV


class IntegralKind(Enum):
    """What the integral field holds."""

    TIME_S = "time in s"
    TIME_MIN = "time in min"
    REPEATS_PER_S = "repeats per s"
    REPEATS_PER_MIN = "repeats per min"
    GAIN_PER_S = "gain per s"  # Ki = K/Ti
    GAIN_PER_MIN = "gain per min"
    GAIN_PER_EXECUTION = "gain per execution"  # Ki times the block's scan


class DerivativeKind(Enum):
    """What the derivative field holds."""

    TIME_S = "time in s"
    TIME_MIN = "time in min"
    GAIN_S = "gain in s"  # Kd = K Td
    GAIN_MIN = "gain in min"
    GAIN_PER_EXECUTION = "gain per execution"  # Kd divided by the block's scan


class DerivativeOn(Enum):
    """What the derivative acts on."""

    PV = "PV"
    ERROR = "error"


class SignConvention(Enum):
    """How the block tells direct from reverse."""

    ACTION_FLAG = "action flag"  # gain positive; a separate setting tells
    SIGNED_GAIN = "signed gain"  # a negative gain is a direct-acting controller


class Algorithm(Enum):
    """What the block computes in each scan."""

    POSITIONAL = "positional"
    INCREMENTAL = "incremental"


class AntiWindup(Enum):
    """What the block does with its integral while the output is limited."""

    STOP = "stop"  # holds the integral while the output is at a limit
    CONDITIONAL = "conditional"  # holds it only when the error drives further out
    TRACKING = "tracking"  # back-calculates it towards the limited output
    NOT_DECLARED = "not declared"


@dataclass(frozen=True, slots=True)
class FieldRange:
    """What a settings field can hold, in the field's own unit; ``resolution`` 0 means as fine as its type."""

    low: float
    high: float
    resolution: float = 0.0


@dataclass(frozen=True, slots=True)
class BlockDescription:
    """A PID block, described and never named.

    ``integral_off`` and ``derivative_off`` are the values that switch the term off (``None``: can't).
    ``scan_s`` is the block's own execution.  ``derivative_filter_ratio`` is N in Td/N (``None``: no
    filter); ``setpoint_weight`` is b of the proportional term.  ``panel_labels`` are the words on the
    controller's own panel, for a person who types the values there.
    """

    form: PidForm
    gain_kind: GainKind = GainKind.GAIN
    gain_per: GainPer = GainPer.PERCENT
    integral_kind: IntegralKind = IntegralKind.TIME_S
    integral_off: float | None = 0.0
    derivative_kind: DerivativeKind = DerivativeKind.TIME_S
    derivative_off: float | None = 0.0
    has_derivative: bool = True
    derivative_on: DerivativeOn = DerivativeOn.PV
    derivative_filter_ratio: float | None = 10.0
    pv_filter_time_s: float = 0.0
    setpoint_weight: float = 1.0
    sign: SignConvention = SignConvention.ACTION_FLAG
    algorithm: Algorithm = Algorithm.POSITIONAL
    anti_windup: AntiWindup = AntiWindup.NOT_DECLARED
    sp_tracks_in_manual: bool = False
    scan_s: float | None = None
    gain_range: FieldRange = field(default=FieldRange(0.0, 1e6))
    integral_range: FieldRange = field(default=FieldRange(0.0, 1e6))
    derivative_range: FieldRange = field(default=FieldRange(0.0, 1e6))
    panel_labels: tuple[str, str, str] = ("gain", "integral", "derivative")


@dataclass(frozen=True, slots=True)
class BlockFields:
    """The numbers as the controller holds them, in its units; ``derivative`` is ``None`` where it has none."""

    gain: float
    integral: float
    derivative: float | None
