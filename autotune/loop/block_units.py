"""Between ``PidSettings`` and the numbers in a controller's own fields, and what those fields can hold.

The relations are ISA's and the trade's: proportional band = 100 / gain, Ki = K/Ti, Kd = K Td,
repeats per minute = 60 / Ti in seconds, gain per percent = gain per engineering unit x span / 100.
Gains are stored positive; under ``SignConvention.SIGNED_GAIN`` a direct-acting controller holds its
gain, and every field that is a gain, as a negative number.
"""

from dataclasses import dataclass
from decimal import Decimal
from math import ceil, floor, inf, isclose, isfinite

from autotune.loop.conversion import check_settings, to_form
from autotune.loop.mode import ControlAction
from autotune.loop.outcome import Refusal
from autotune.loop.settings import (
    BlockDescription,
    BlockFields,
    DerivativeKind,
    FieldRange,
    GainKind,
    GainPer,
    IntegralKind,
    PidForm,
    PidSettings,
    SignConvention,
)
from autotune.loop.span import Span

FIELD_NAMES = ("gain", "integral", "derivative")
"""The fields of a block, in the order of ``BlockFields`` and of ``BlockDescription.panel_labels``."""

SINGLE_PRECISION_RATIO = 1e-6
"""Two field numbers closer than this are one number: a controller may hold it in 32 bits (IEEE 754)."""

_STEP_SLACK = 1e-9
_STEP_SLACK_RATIO = 1e-12
"""A number this close to a whole step of its field is on the step (the ratio: double precision itself)."""

_INTEGRAL_TIMES = (IntegralKind.TIME_S, IntegralKind.TIME_MIN)
_INTEGRAL_REPEATS = (IntegralKind.REPEATS_PER_S, IntegralKind.REPEATS_PER_MIN)
_DERIVATIVE_TIMES = (DerivativeKind.TIME_S, DerivativeKind.TIME_MIN)
_PER_MINUTE = (
    IntegralKind.TIME_MIN,
    IntegralKind.REPEATS_PER_MIN,
    IntegralKind.GAIN_PER_MIN,
    DerivativeKind.TIME_MIN,
    DerivativeKind.GAIN_MIN,
)
_PER_EXECUTION = (IntegralKind.GAIN_PER_EXECUTION, DerivativeKind.GAIN_PER_EXECUTION)


@dataclass(frozen=True, slots=True)
class Rounded:
    """Numbers that the fields can hold, and the largest relative change (percent) that this took."""

    fields: BlockFields
    largest_change_pct: float


def is_same_number(one: float | None, other: float | None) -> bool:
    """Whether two field numbers are one, as far as single precision can tell; NaN is never the same."""
    if one is None or other is None:
        return one is other
    return isclose(one, other, rel_tol=SINGLE_PRECISION_RATIO, abs_tol=0.0)


def number_of(fields: BlockFields, name: str) -> float | None:
    """The number in the field called ``name`` (one of ``FIELD_NAMES``); raises ``KeyError`` for another name."""
    return {"gain": fields.gain, "integral": fields.integral, "derivative": fields.derivative}[name]


def strength(name: str, number: float, block: BlockDescription) -> float:
    """How strongly a field acts: bigger acts more, 0.0 is off; comparable only within one field of one block."""
    if _is_off(name, number, block):
        return 0.0
    magnitude = abs(number)
    if _is_weaker_when_bigger(name, block):
        return _inverse(magnitude, 1.0)
    return magnitude


def from_block(
    fields: BlockFields, block: BlockDescription, action: ControlAction, pv_span: Span
) -> PidSettings | Refusal:
    """What the numbers in the fields mean: settings in the block's form, %OP/%PV and seconds.

    Refuses with a ``block`` that can't be understood (``SCAN_NOT_DECLARED``, ``FORM_AMBIGUOUS``), with a
    gain whose sign contradicts ``action`` (``SIGN_CONTRADICTS``), and with numbers that are no PID
    (``SETTINGS_INVALID``, ``DERIVATIVE_NOT_READ``).
    """
    if (refusal := _block_fault(block)) is not None:
        return refusal
    sign = _sign(block, action)
    gain = fields.gain * sign
    if gain < 0.0:
        return Refusal(
            "SIGN_CONTRADICTS",
            f"{_label('gain', block)} holds {fields.gain:g}, which is the other control action than {action.value}",
            "check the declared action and sign convention against the controller",
        )
    gain_per_unit = _inverse(gain, 100.0) if block.gain_kind is GainKind.PROPORTIONAL_BAND else gain
    integral_time_s = None
    if not _is_off("integral", fields.integral, block):
        integral_time_s = _integral_time_s(fields.integral, gain_per_unit * sign, block)
    derivative_time_s = None
    if block.has_derivative:
        if fields.derivative is None:
            return Refusal("DERIVATIVE_NOT_READ", "the block's derivative was not read", "read all settings again")
        if not _is_off("derivative", fields.derivative, block):
            derivative_time_s = _derivative_time_s(fields.derivative, gain_per_unit * sign, block)
    settings = PidSettings(block.form, gain_per_unit * _per_pct(block, pv_span), integral_time_s, derivative_time_s)
    return check_settings(settings) or settings


def to_block(
    settings: PidSettings, block: BlockDescription, action: ControlAction, pv_span: Span
) -> BlockFields | Refusal:
    """The numbers that make the block hold these settings; not yet rounded to what its fields can hold.

    Settings in another form are converted first.  Refuses as ``to_form`` does, with a block that can't be
    understood (``SCAN_NOT_DECLARED``, ``FORM_AMBIGUOUS``), with a derivative where the block has none
    (``NO_DERIVATIVE``), with a term off that the block can't switch off (``CANNOT_SWITCH_OFF``) and with a
    term on whose number would mean off (``MEANS_OFF``).
    """
    if (refusal := _block_fault(block)) is not None:
        return refusal
    in_form = to_form(settings, block.form)
    if isinstance(in_form, Refusal):
        return in_form
    if in_form.derivative_time_s is not None and not block.has_derivative:
        return Refusal("NO_DERIVATIVE", "the block has no derivative", "choose a P or a PI")
    gain_per_unit = in_form.controller_gain / _per_pct(block, pv_span) * _sign(block, action)
    is_band = block.gain_kind is GainKind.PROPORTIONAL_BAND
    integral = _integral_number(in_form.integral_time_s, gain_per_unit, block)
    if isinstance(integral, Refusal):
        return integral
    derivative = _derivative_number(in_form.derivative_time_s, gain_per_unit, block)
    if isinstance(derivative, Refusal):
        return derivative
    return BlockFields(_inverse(gain_per_unit, 100.0) if is_band else gain_per_unit, integral, derivative)


def rounded(fields: BlockFields, block: BlockDescription) -> Rounded | Refusal:
    """The nearest weaker numbers that the block's fields can hold; a term that is off stays as it is.

    Refuses a number outside its field's range (``OUT_OF_RANGE``; nothing is clamped, for that would be
    another setting than the one asked for) and one that its resolution would make zero or off
    (``FIELD_TOO_COARSE``).  Under ``SIGNED_GAIN`` a range from zero up is one of magnitudes.
    """
    gain = _held("gain", fields.gain, block)
    if isinstance(gain, Refusal):
        return gain
    integral = _held("integral", fields.integral, block)
    if isinstance(integral, Refusal):
        return integral
    derivative = None if fields.derivative is None else _held("derivative", fields.derivative, block)
    if isinstance(derivative, Refusal):
        return derivative
    changes_ratio = [_change_ratio(fields.gain, gain), _change_ratio(fields.integral, integral)]
    if fields.derivative is not None and derivative is not None:
        changes_ratio.append(_change_ratio(fields.derivative, derivative))
    return Rounded(BlockFields(gain, integral, derivative), 100.0 * max(changes_ratio))


def _block_fault(block: BlockDescription) -> Refusal | None:
    """Refuse a description that leaves open what a number in a field means."""
    has_derivative_per_execution = block.has_derivative and block.derivative_kind in _PER_EXECUTION
    if (block.integral_kind in _PER_EXECUTION or has_derivative_per_execution) and block.scan_s is None:
        return Refusal(
            "SCAN_NOT_DECLARED",
            "the block counts per execution, and its execution time is not declared",
            "declare the block's scan_s",
        )
    is_time = block.integral_kind in (*_INTEGRAL_TIMES, *_INTEGRAL_REPEATS) or (
        block.has_derivative and block.derivative_kind in _DERIVATIVE_TIMES
    )
    if block.form is PidForm.PARALLEL and is_time:
        # Such a block may mean 1/Ti or K/Ti; the difference is the whole gain, so nothing is guessed.
        return Refusal(
            "FORM_AMBIGUOUS",
            "a parallel block adds Kp, Ki and Kd, and this one is declared with an integral or derivative time",
            "declare the form ideal if the gain multiplies all terms, else declare integral and derivative as gains",
        )
    return None


def _integral_time_s(number: float, gain_per_unit: float, block: BlockDescription) -> float:
    unit_s = _unit_s(block.integral_kind, block)
    if block.integral_kind in _INTEGRAL_TIMES:
        return number * unit_s
    if block.integral_kind in _INTEGRAL_REPEATS:
        return _inverse(number, unit_s)
    return _inverse(number, gain_per_unit * unit_s)


def _derivative_time_s(number: float, gain_per_unit: float, block: BlockDescription) -> float:
    time_s = number * _unit_s(block.derivative_kind, block)
    return time_s if block.derivative_kind in _DERIVATIVE_TIMES else _inverse(gain_per_unit, time_s)


def _integral_number(time_s: float | None, gain_per_unit: float, block: BlockDescription) -> float | Refusal:
    if time_s is None:
        return _off_number("integral", block)
    unit_s = _unit_s(block.integral_kind, block)
    if block.integral_kind in _INTEGRAL_TIMES:
        return _unless_off("integral", time_s / unit_s, block)
    if block.integral_kind in _INTEGRAL_REPEATS:
        return _unless_off("integral", unit_s / time_s, block)
    return _unless_off("integral", gain_per_unit * unit_s / time_s, block)


def _derivative_number(time_s: float | None, gain_per_unit: float, block: BlockDescription) -> float | Refusal | None:
    if not block.has_derivative:
        return None
    if time_s is None:
        return _off_number("derivative", block)
    number = time_s / _unit_s(block.derivative_kind, block)
    if block.derivative_kind not in _DERIVATIVE_TIMES:
        number *= gain_per_unit
    return _unless_off("derivative", number, block)


def _off_number(name: str, block: BlockDescription) -> float | Refusal:
    declared = _declared_off(name, block)
    if declared is not None:
        return declared
    limits = _range(name, block)
    if _is_off(name, 0.0, block) and limits.low <= 0.0 <= limits.high:
        return 0.0
    return Refusal(
        "CANNOT_SWITCH_OFF",
        f"{_label(name, block)} has no number that switches the term off",
        "choose settings that use the term, or declare its off number",
    )


def _unless_off(name: str, number: float, block: BlockDescription) -> float | Refusal:
    if not _is_off(name, number, block):
        return number
    return Refusal(
        "MEANS_OFF",
        f"{_label(name, block)} would have to hold {number:g}, which switches the term off in this block",
        "choose other settings",
    )


def _is_off(name: str, number: float, block: BlockDescription) -> bool:
    if name == "gain":
        return False
    if is_same_number(number, _declared_off(name, block)):
        return True
    # A rate, a gain or a derivative time of zero is no action at all, whatever is declared.
    return number == 0.0 and (name == "derivative" or block.integral_kind not in _INTEGRAL_TIMES)


def _declared_off(name: str, block: BlockDescription) -> float | None:
    return block.integral_off if name == "integral" else block.derivative_off


def _held(name: str, exact: float, block: BlockDescription) -> float | Refusal:
    """One number as its field can hold it."""
    if _is_off(name, exact, block):
        return exact
    limits = _range(name, block)
    if not isfinite(exact):
        return _out_of_range(name, exact, block)
    held = _on_step(exact, limits.resolution, _is_weaker_when_bigger(name, block))
    if held == 0.0 or _is_off(name, held, block):
        return Refusal(
            "FIELD_TOO_COARSE",
            f"{_label(name, block)} would have to hold {exact:.6g}, which its resolution turns into {held:g}",
            "choose other settings, or check the declared resolution",
        )
    return held if _is_in_range(held, limits, block.sign) else _out_of_range(name, held, block)


def _on_step(exact: float, resolution: float, is_weaker_when_bigger: bool) -> float:
    """The next number on the field's steps towards the weaker side.

    Gain, integral and derivative each go down in strength: a loop that is a little slower than the rule
    is a nuisance, one that is a little stronger has lost margin.  Gain and integral go the same way
    together, so that their balance is kept; and a derivative time that grew could leave Ti < 4 Td.
    """
    if resolution == 0.0:
        return exact
    steps = abs(exact) / resolution
    slack = _STEP_SLACK + _STEP_SLACK_RATIO * steps
    whole = ceil(steps - slack) if is_weaker_when_bigger else floor(steps + slack)
    magnitude = float(whole * Decimal(repr(resolution)))  # 3 x 0.1 is to read 0.3, as on the panel
    return magnitude if exact > 0.0 else -magnitude


def _out_of_range(name: str, number: float, block: BlockDescription) -> Refusal:
    limits = _range(name, block)
    return Refusal(
        "OUT_OF_RANGE",
        f"{_label(name, block)} would have to hold {number:.6g}, and it holds {limits.low:g} to {limits.high:g}",
        "choose other settings, or check the declared range",
    )


def _is_in_range(number: float, limits: FieldRange, sign: SignConvention) -> bool:
    if sign is SignConvention.SIGNED_GAIN and limits.low >= 0.0:
        return limits.low <= abs(number) <= limits.high
    return limits.low <= number <= limits.high


def _is_weaker_when_bigger(name: str, block: BlockDescription) -> bool:
    if name == "gain":
        return block.gain_kind is GainKind.PROPORTIONAL_BAND
    return name == "integral" and block.integral_kind in _INTEGRAL_TIMES


def _unit_s(kind: IntegralKind | DerivativeKind, block: BlockDescription) -> float:
    """Seconds per unit of a field's time: 1, 60 or the block's execution."""
    if kind in _PER_MINUTE:
        return 60.0
    if kind in _PER_EXECUTION and block.scan_s is not None:
        return block.scan_s  # Ki per execution = Ki h, Kd per execution = Kd / h
    return 1.0


def _range(name: str, block: BlockDescription) -> FieldRange:
    return (block.gain_range, block.integral_range, block.derivative_range)[FIELD_NAMES.index(name)]


def _label(name: str, block: BlockDescription) -> str:
    return block.panel_labels[FIELD_NAMES.index(name)]


def _sign(block: BlockDescription, action: ControlAction) -> int:
    """The sign of gains as the block holds them."""
    is_negative = block.sign is SignConvention.SIGNED_GAIN and action is ControlAction.DIRECT
    return -1 if is_negative else 1


def _per_pct(block: BlockDescription, pv_span: Span) -> float:
    """What turns the block's gain into %OP/%PV: one percent of PV in the gain's own unit."""
    return pv_span.width_eu / 100.0 if block.gain_per is GainPer.ENGINEERING_UNIT else 1.0


def _inverse(number: float, numerator: float) -> float:
    """``numerator / number``, infinite where a zero can't be divided by (which no check lets through)."""
    return numerator / number if number != 0.0 else inf


def _change_ratio(exact: float, held: float) -> float:
    return abs(held - exact) / abs(exact) if held != exact else 0.0
