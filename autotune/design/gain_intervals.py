"""Which gains a loop may have: every frequency forbids an interval, and what no frequency forbids is admissible.

With L0 the loop at a gain of 1 and k the gain, a limit on |S| = 1/|1 + k L0|, on |T| = |k L0|/|1 + k L0| or on
|C S| is a quadratic inequality in k at each frequency (the circles of Astrom, Panagopoulos and Hagglund,
Automatica 34 (1998) 585, solved for the gain).
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]


@dataclass(frozen=True, slots=True)
class LoopLimits:
    """Largest Ms and Mt, and largest |C S|, OP's answer to noise in PV (``None``: no limit).

    The last holds where C0 is given: a caller leaves out low frequencies, where it is 1/Kp for any settings.
    """

    peak_sensitivity: float
    peak_complementary_sensitivity: float
    control_noise_gain: float | None = None


def admissible_tops(loop: Complex, controller: Complex, limits: LoopLimits) -> Array:
    """The upper end of every gap between forbidden gains, ascending; ``inf`` where nothing bounds the gain.

    ``loop`` and ``controller`` are L0 and C0 on the same grid, at a gain of 1.
    """
    size, real = np.abs(loop) ** 2, loop.real
    lows, highs = [], []
    for leading, constant in (
        (size, 1.0 - limits.peak_sensitivity**-2),
        (size * (1.0 - limits.peak_complementary_sensitivity**-2), 1.0),
    ):
        low, high = _forbidden(leading, real, constant)
        lows.append(low)
        highs.append(high)
    if limits.control_noise_gain is not None:
        leading = size - (np.abs(controller) / limits.control_noise_gain) ** 2
        bent_down = leading < 0.0
        low, high = _forbidden(leading[~bent_down], real[~bent_down], 1.0)
        # A negative leading term forbids every gain above the positive root.
        above = -(real + np.sqrt(real**2 - leading, where=bent_down, out=np.zeros_like(real)))[bent_down]
        above = above / leading[bent_down]
        lows += [low, above]
        highs += [high, np.full(len(above), np.inf)]
    return _tops(np.concatenate(lows), np.concatenate(highs))


def _forbidden(leading: Array, real: Array, constant: float) -> tuple[Array, Array]:
    """Both roots of leading k^2 + 2 real k + constant where they are positive."""
    discriminant = real**2 - leading * constant
    at = (real < 0.0) & (discriminant > 0.0) & (leading > 0.0)
    root = np.sqrt(discriminant[at])
    # The smaller root by the product of both, which keeps it exact.
    high = (root - real[at]) / leading[at]
    return constant / (leading[at] * high), high


def _tops(lows: Array, highs: Array) -> Array:
    if len(lows) == 0:
        return np.array([np.inf])
    order = np.argsort(lows)
    lows, reached = lows[order], np.maximum.accumulate(highs[order])
    starts = np.concatenate(([True], lows[1:] > reached[:-1]))
    tops = lows[starts]
    return tops if np.isinf(reached[-1]) else np.append(tops, np.inf)
