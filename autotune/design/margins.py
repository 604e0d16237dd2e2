"""What a loop has left before it swings: gain, phase and delay margin, and the peaks of sensitivity.

On the continuous loop or on the sampled one (the plant's exact hold, the block's own difference equation,
frequencies below pi/h).  Definitions: S. Skogestad and I. Postlethwaite, Multivariable Feedback Control,
2nd ed., chapter 2; Ms also bounds the others: GM >= Ms/(Ms - 1), PM >= 2 asin(1/(2 Ms)).
"""

from collections.abc import Callable
from dataclasses import dataclass
from math import pi

import numpy as np
from numpy.typing import NDArray

from autotune.design.block_response import BlockTerms, block_terms
from autotune.design.loop_grid import SeenPlant
from autotune.loop.settings import BlockDescription, PidForm, PidSettings

Array = NDArray[np.float64]
Complex = NDArray[np.complex128]

_ZOOMS = 2
_ZOOM_POINTS = 17
_TURNS = 40
_SETTLED_RATIO = 1e-10


@dataclass(frozen=True, slots=True)
class Margins:
    """The margins of one loop; ``None`` where the loop never crosses, so that there is no bound.

    An unstable loop has none of them.

    ``gain_margin_ratio``: what the gain may grow by.  ``phase_margin_deg``: the least over all gain
    crossings.  ``delay_margin_s``: the least further delay that makes the loop swing; in executions of the
    block as ``delay_margin_scan_ratio``.  ``peak_sensitivity`` is Ms, ``peak_complementary_sensitivity`` Mt.
    """

    is_stable: bool
    gain_margin_ratio: float | None
    phase_margin_deg: float | None
    delay_margin_s: float | None
    delay_margin_scan_ratio: float | None
    peak_sensitivity: float | None
    peak_complementary_sensitivity: float | None


def sensitivity_at_least(
    settings: PidSettings, filter_ratio: float | None, ultimate_gain: float, ultimate_period_s: float
) -> float:
    """The least that the loop's peak sensitivity Ms can be with these settings (no unit).

    At wu = 2 pi/Tu the plant is -1/Ku, so the loop there is -C(j wu)/Ku, and Ms, the largest
    |1/(1 + C G)| over all frequencies, is at least its size at this one.  The true Ms may be far
    larger, so a small number here promises nothing; infinite when the loop runs through -1.
    ``filter_ratio`` is N of a derivative filter Td/N (``None``: none); Ku in %OP/%PV, Tu in seconds.
    """
    s = 2j * pi / ultimate_period_s
    ti_s, td_s = settings.integral_time_s, settings.derivative_time_s
    integral = 0.0 if ti_s is None else 1.0 / (ti_s * s)
    filter_time_s = 0.0 if td_s is None or filter_ratio is None else td_s / filter_ratio
    derivative = 0.0 if td_s is None else td_s * s / (1.0 + filter_time_s * s)
    if settings.form is PidForm.SERIES:
        controller = settings.controller_gain * (1.0 + integral) * (1.0 + derivative)
    else:
        controller = settings.controller_gain * (1.0 + integral + derivative)
    distance = abs(1.0 - controller / ultimate_gain)
    return 1.0 / distance if distance > 0.0 else float("inf")


def margins(plant: SeenPlant, block: BlockDescription, settings: PidSettings) -> Margins:
    """All margins of the plant under the block with these settings, which are in the block's form."""

    def loop(w: Array) -> Complex:
        return np.asarray(plant.response(w) * _controller(block_terms(block, w, plant.scan_s), settings))

    w = plant.w_rad_per_s
    on_grid = plant.gain * _controller(block_terms(block, w, plant.scan_s), settings)
    integrators = plant.integrators + (settings.integral_time_s is not None)
    if not turns_say_stable(on_grid, integrators):
        return Margins(False, None, None, None, None, None, None)
    phases, at = _gain_crossings(loop, w, on_grid)
    phase_margin_deg = delay_margin_s = None
    if len(at):
        phase_margin_deg = float(np.min(np.abs(np.degrees(np.angle(-np.exp(1j * phases))))))
        delay_margin_s = float(np.min(np.mod(phases + pi, 2.0 * pi) / at))
    return Margins(
        is_stable=True,
        gain_margin_ratio=_gain_margin_ratio(loop, w, on_grid),
        phase_margin_deg=phase_margin_deg,
        delay_margin_s=delay_margin_s,
        delay_margin_scan_ratio=None if delay_margin_s is None or not plant.scan_s else delay_margin_s / plant.scan_s,
        peak_sensitivity=_peak_ratio(lambda x: 1.0 / np.abs(1.0 + loop(x)), w, 1.0 / np.abs(1.0 + on_grid)),
        peak_complementary_sensitivity=max(
            _peak_ratio(lambda x: np.abs(loop(x) / (1.0 + loop(x))), w, np.abs(on_grid / (1.0 + on_grid))),
            1.0 if integrators else 0.0,  # at rest
        ),
    )


def turns_say_stable(loop: Complex, integrators: int) -> bool:
    """Nyquist: whether 1 + L turns by 90 degrees per integrator of plant and block, from low frequency to the top.

    ``loop`` is L on a grid from far below the loop's own frequencies to pi/h (or to where it has died away), fine
    enough that nothing turns by 180 degrees between two points.  Plant and block are otherwise stable.
    """
    return bool(rows_say_stable(loop[None, :], np.array([integrators]))[0])


def rows_say_stable(loops: Complex, integrators: NDArray[np.int_]) -> NDArray[np.bool_]:
    """``turns_say_stable`` of each row."""
    around = 1.0 + loops
    angle = np.angle(around[:, 0])
    turned = np.sum(np.angle(around[:, 1:] * np.conj(around[:, :-1])), axis=1)
    # Each integrator starts 90 degrees lower: two of them along the negative axis, where a hair decides on which side
    # of the cut the angle lies.
    turns = np.round((-integrators * pi / 2.0 - angle) / (2.0 * pi))
    return np.asarray(np.abs(angle + turned + 2.0 * pi * turns) < 1.5)


def _controller(terms: BlockTerms, settings: PidSettings) -> Complex:
    shape = terms.response(settings.integral_time_s, settings.derivative_time_s)
    return np.asarray(settings.controller_gain * shape)


def _gain_crossings(loop: Callable[[Array], Complex], w: Array, on_grid: Complex) -> tuple[Array, Array]:
    """Phase and frequency wherever |L| = 1."""
    at = _crossings(lambda x: np.log(np.abs(loop(x))), w, np.log(np.abs(on_grid)))
    return np.angle(loop(at)), at


def _gain_margin_ratio(loop: Callable[[Array], Complex], w: Array, on_grid: Complex) -> float | None:
    """The least growth of gain that brings a crossing of -180 degrees to -1."""
    candidates = loop(_crossings(lambda x: np.sin(np.angle(loop(x))), w, np.sin(np.angle(on_grid)))).real
    # A sampled loop is real at pi/h itself: there it may meet -1 without crossing.
    candidates = np.append(candidates, on_grid[-1].real)
    ratios = -1.0 / candidates[candidates < 0.0]
    grown = ratios[ratios > 1.0]
    return float(np.min(grown)) if len(grown) else None


def _crossings(function: Callable[[Array], Array], w: Array, on_grid: Array) -> Array:
    """Where the function changes its sign, by false position (Illinois) on all brackets at once."""
    starts = np.flatnonzero(np.sign(on_grid[:-1]) * np.sign(on_grid[1:]) < 0)
    low, high = w[starts], w[starts + 1]
    at_low, at_high = on_grid[starts], on_grid[starts + 1]
    found = high
    for _ in range(_TURNS if len(starts) else 0):
        last, found = found, (low * at_high - high * at_low) / (at_high - at_low)
        seen = function(found)
        beyond = np.sign(seen) == np.sign(at_high)
        at_low = np.where(beyond, at_low / 2.0, at_high)
        low = np.where(beyond, low, high)
        high, at_high = found, seen
        if bool(np.all(np.abs(found - last) <= _SETTLED_RATIO * found)) or bool(np.any(at_high == at_low)):
            break
    return np.asarray(found)


def _peak_ratio(function: Callable[[Array], Array], w: Array, on_grid: Array) -> float:
    """The largest, by zooming in on the largest of the grid."""
    seen = on_grid
    for _ in range(_ZOOMS):
        at = int(np.argmax(seen))
        w = np.linspace(w[max(0, at - 1)], w[min(len(w) - 1, at + 1)], _ZOOM_POINTS)
        seen = function(w)
    return max(float(np.max(on_grid)), float(np.max(seen)))
