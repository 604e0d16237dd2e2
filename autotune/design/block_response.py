"""The described block as a linear system: frequency response and difference equation of ``loop.pid_block``.

Sampled: the backward differences of that module, with h the block's execution, written in the delay z^-1;
a test runs both side by side.  Continuous (``scan_s`` ``None``): what the differences stand for.  Limits
and anti-windup are no part of it.  Settings are in the block's own form.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from autotune.loop.settings import BlockDescription, DerivativeOn, PidForm, PidSettings

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]


@dataclass(frozen=True, slots=True, eq=False)
class BlockEquation:
    """OP = (``from_sp`` SP - ``from_pv`` PV) / ``denominator``, polynomials in z^-1 from z^0 up."""

    from_pv: Array
    from_sp: Array
    denominator: Array


@dataclass(frozen=True, slots=True, eq=False)
class BlockTerms:
    """Integrator 1/(Ti s), derivative Td s/(1 + Td s/N) and PV filter of a block, at each frequency, times apart.

    Made once for a grid of frequencies, so that a search over settings costs a few array expressions.
    """

    block: BlockDescription
    scan_s: float | None
    w_rad_per_s: Array
    back: Complex
    difference: Complex
    pv_filter: Complex

    def response(self, integral_time_s: float | None, derivative_time_s: float | None) -> Complex:
        """C(jw) from PV to OP (sign aside) for a gain of 1, in the form of the block."""
        integral = self._integral(integral_time_s)
        derivative = self._derivative(derivative_time_s)
        if self.block.form is PidForm.SERIES:
            return np.asarray((1.0 + integral) * (1.0 + derivative) * self.pv_filter)
        return np.asarray((1.0 + integral + derivative) * self.pv_filter)

    def _integral(self, ti_s: float | None) -> Complex | float:
        if ti_s is None:
            return 0.0
        if self.scan_s is None:
            return np.asarray(1.0 / (ti_s * self.difference))
        return np.asarray(self.scan_s / ti_s / self.difference)

    def _derivative(self, td_s: float | None) -> Complex | float:
        if td_s is None:
            return 0.0
        ratio = self.block.derivative_filter_ratio
        if self.scan_s is None:
            filter_s = 0.0 if ratio is None else td_s / ratio
            return np.asarray(td_s * self.difference / (1.0 + filter_s * self.difference))
        if ratio is None:
            return np.asarray(td_s / self.scan_s * self.difference)
        whole_s = td_s + ratio * self.scan_s
        return np.asarray(ratio * td_s / whole_s * self.difference / (1.0 - td_s / whole_s * self.back))


def block_terms(block: BlockDescription, w_rad_per_s: Array, scan_s: float | None) -> BlockTerms:
    """The block's terms on a grid; ``scan_s`` ``None`` is the continuous block."""
    if scan_s is None:
        s: Complex = np.asarray(1j * w_rad_per_s, dtype=np.complex128)
        return BlockTerms(block, None, w_rad_per_s, s, s, np.asarray(1.0 / (1.0 + block.pv_filter_time_s * s)))
    back = np.exp(-1j * w_rad_per_s * scan_s)
    difference = -np.expm1(-1j * w_rad_per_s * scan_s)
    kept = block.pv_filter_time_s / (scan_s + block.pv_filter_time_s)
    return BlockTerms(block, scan_s, w_rad_per_s, back, difference, (1.0 - kept) / (1.0 - kept * back))


def block_equation(block: BlockDescription, settings: PidSettings, scan_s: float) -> BlockEquation:
    """The difference equation with these settings (in the block's form), executed every ``scan_s``."""
    gain, ti_s, td_s = settings.controller_gain, settings.integral_time_s, settings.derivative_time_s
    step = np.array([1.0, -1.0])
    integral_top, integral_bottom = (
        (np.array([0.0]), np.array([1.0])) if ti_s is None else (np.array([scan_s / ti_s]), step)
    )
    derivative_top, derivative_bottom = _derivative_polynomials(td_s, block.derivative_filter_ratio, scan_s)
    kept = block.pv_filter_time_s / (scan_s + block.pv_filter_time_s)
    filter_bottom = np.array([1.0, -kept])
    is_series = block.form is PidForm.SERIES
    on_error = 1.0 if block.derivative_on is DerivativeOn.ERROR else 0.0

    def top(proportional: float, derivative: float) -> Array:
        """(proportional + derivative D + I (1 + derivative D in a series block)) over the common denominator."""
        lead = derivative * derivative_top
        seen = _sum(derivative_bottom, lead) if is_series else derivative_bottom
        direct = _sum(proportional * derivative_bottom, lead)
        return gain * _sum(np.convolve(direct, integral_bottom), np.convolve(seen, integral_top))

    return BlockEquation(
        from_pv=(1.0 - kept) * top(1.0, 1.0),
        from_sp=np.convolve(top(block.setpoint_weight, on_error), filter_bottom),
        denominator=np.convolve(np.convolve(integral_bottom, derivative_bottom), filter_bottom),
    )


def _derivative_polynomials(td_s: float | None, ratio: float | None, scan_s: float) -> tuple[Array, Array]:
    step = np.array([1.0, -1.0])
    if td_s is None:
        return np.array([0.0]), np.array([1.0])
    if ratio is None:
        return td_s / scan_s * step, np.array([1.0])
    whole_s = td_s + ratio * scan_s
    return ratio * td_s / whole_s * step, np.array([1.0, -td_s / whole_s])


def _sum(one: Array, other: Array) -> Array:
    """Of two polynomials in z^-1."""
    total = np.zeros(max(len(one), len(other)))
    total[: len(one)] += one
    total[: len(other)] += other
    return total
