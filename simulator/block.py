"""What a PID block is set up as, and its settings turned into plain gains.

The settings are the numbers in the block's own registers; ``to_terms`` is the one place that knows
their forms and units.
"""

from dataclasses import dataclass
from enum import Enum, IntEnum
from math import isfinite


class Mode(IntEnum):
    """Codes of the mode register."""

    MAN = 0
    AUTO = 1
    CAS = 2


class Form(Enum):
    """How gain, integral and derivative combine."""

    IDEAL = "ideal"
    SERIES = "series"
    PARALLEL = "parallel"


class GainKind(Enum):
    """What the gain setting holds."""

    GAIN = "gain"
    PROPORTIONAL_BAND = "proportional band"


class GainPer(Enum):
    """What one unit of gain (or of proportional band) relates to."""

    PERCENT = "percent"
    ENGINEERING_UNIT = "engineering unit"


class IntegralKind(Enum):
    """What the integral setting holds."""

    TIME_S = "time in s"
    TIME_MIN = "time in min"
    REPEATS_PER_S = "repeats per s"
    REPEATS_PER_MIN = "repeats per min"
    GAIN_PER_S = "gain per s"
    GAIN_PER_MIN = "gain per min"
    GAIN_PER_EXECUTION = "gain per execution"


class DerivativeKind(Enum):
    """What the derivative setting holds."""

    TIME_S = "time in s"
    TIME_MIN = "time in min"
    GAIN_S = "gain in s"
    GAIN_MIN = "gain in min"
    GAIN_PER_EXECUTION = "gain per execution"


class Sign(Enum):
    """How the block tells direct from reverse action."""

    ACTION_FLAG = "action flag"
    SIGNED_GAIN = "signed gain"


class Action(Enum):
    """Reverse: PV up, output down.  Direct: PV up, output up."""

    REVERSE = "reverse"
    DIRECT = "direct"


class Algorithm(Enum):
    """What is computed in each scan: the output, or its increment."""

    POSITIONAL = "positional"
    INCREMENTAL = "incremental"


class AntiWindup(Enum):
    """What happens to the integral of the positional algorithm beyond a clamp; increments need nothing."""

    STOP = "stop"
    CONDITIONAL = "conditional"
    TRACKING = "tracking"


@dataclass(frozen=True, slots=True)
class BlockSpec:
    """The block as engineered.  ``derivative_filter_ratio`` is N in Td/N (``None``: no filter).

    ``tracking_time_s`` ``None`` takes the integral time.  ``integral_off`` and ``derivative_off`` switch a term off.
    """

    scan_s: float
    span_width_eu: float = 100.0
    form: Form = Form.IDEAL
    gain_kind: GainKind = GainKind.GAIN
    gain_per: GainPer = GainPer.PERCENT
    integral_kind: IntegralKind = IntegralKind.TIME_S
    integral_off: float = 0.0
    derivative_kind: DerivativeKind = DerivativeKind.TIME_S
    derivative_off: float = 0.0
    is_derivative_on_error: bool = False
    derivative_filter_ratio: float | None = 10.0
    setpoint_weight: float = 1.0
    sign: Sign = Sign.ACTION_FLAG
    action: Action = Action.REVERSE
    algorithm: Algorithm = Algorithm.POSITIONAL
    anti_windup: AntiWindup = AntiWindup.CONDITIONAL
    tracking_time_s: float | None = None
    sp_tracks_in_manual: bool = False
    op_low_pct: float = 0.0
    op_high_pct: float = 100.0


@dataclass(frozen=True, slots=True)
class Settings:
    """Gain, integral and derivative as the block's registers hold them, in its own units."""

    gain: float
    integral: float
    derivative: float = 0.0


@dataclass(frozen=True, slots=True)
class Terms:
    """Plain gains: %OP/%PV, 1/s and s.  ``sign`` is +1 for reverse and -1 for direct action."""

    sign: int
    gain: float
    integral_gain_per_s: float
    derivative_gain_s: float
    derivative_time_s: float
    filter_time_s: float
    tracking_time_s: float | None


def to_terms(spec: BlockSpec, settings: Settings) -> Terms:
    """Settings in the block's units to plain gains.  Raises ``ValueError`` on numbers that the block can't run on."""
    if not all(isfinite(number) for number in (settings.gain, settings.integral, settings.derivative)):
        raise ValueError("settings must be finite")
    if settings.integral < 0.0 or settings.derivative < 0.0:
        raise ValueError("integral and derivative must not be negative")
    sign, gain = _sign_and_gain(spec, settings.gain)
    to_pct = spec.span_width_eu / 100.0 if spec.gain_per is GainPer.ENGINEERING_UNIT else 1.0
    gain *= to_pct
    integral_gain_per_s = _integral_gain(spec, settings.integral, gain, to_pct)
    derivative_gain_s = _derivative_gain(spec, settings.derivative, gain, to_pct)
    derivative_time_s = derivative_gain_s / gain if gain > 0.0 else 0.0
    filter_time_s = derivative_time_s / spec.derivative_filter_ratio if spec.derivative_filter_ratio else 0.0
    tracking_time_s = spec.tracking_time_s
    if tracking_time_s is None and integral_gain_per_s > 0.0:
        tracking_time_s = gain / integral_gain_per_s
    return Terms(sign, gain, integral_gain_per_s, derivative_gain_s, derivative_time_s, filter_time_s, tracking_time_s)


def _sign_and_gain(spec: BlockSpec, setting: float) -> tuple[int, float]:
    if spec.sign is Sign.SIGNED_GAIN:
        sign, setting = (-1 if setting < 0.0 else 1), abs(setting)
    else:
        sign = -1 if spec.action is Action.DIRECT else 1
    if spec.gain_kind is GainKind.PROPORTIONAL_BAND:
        if not setting > 0.0:
            raise ValueError("a proportional band must be positive")
        return sign, 100.0 / setting
    if setting < 0.0:
        raise ValueError("the gain must not be negative: this block has an action flag")
    return sign, setting


def _integral_gain(spec: BlockSpec, setting: float, gain: float, to_pct: float) -> float:
    if setting == spec.integral_off:
        return 0.0
    if spec.integral_kind in (IntegralKind.TIME_S, IntegralKind.TIME_MIN) and setting == 0.0:
        raise ValueError(f"an integral time of 0 has no meaning; {spec.integral_off} switches the integral off")
    match spec.integral_kind:
        case IntegralKind.TIME_S:
            return gain / setting
        case IntegralKind.TIME_MIN:
            return gain / (60.0 * setting)
        case IntegralKind.REPEATS_PER_S:
            return gain * setting
        case IntegralKind.REPEATS_PER_MIN:
            return gain * setting / 60.0
        case IntegralKind.GAIN_PER_S:
            return to_pct * setting
        case IntegralKind.GAIN_PER_MIN:
            return to_pct * setting / 60.0
        case IntegralKind.GAIN_PER_EXECUTION:
            return to_pct * setting / spec.scan_s


def _derivative_gain(spec: BlockSpec, setting: float, gain: float, to_pct: float) -> float:
    if setting == spec.derivative_off:
        return 0.0
    match spec.derivative_kind:
        case DerivativeKind.TIME_S:
            return gain * setting
        case DerivativeKind.TIME_MIN:
            return gain * 60.0 * setting
        case DerivativeKind.GAIN_S:
            return to_pct * setting
        case DerivativeKind.GAIN_MIN:
            return to_pct * 60.0 * setting
        case DerivativeKind.GAIN_PER_EXECUTION:
            return to_pct * setting * spec.scan_s
