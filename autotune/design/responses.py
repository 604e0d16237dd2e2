"""How the closed loop answers: exact sampled responses of plant and block, and the figures read off them.

The loop is linear here; limits are judged by the figures.  Steps are of 1 %, so that percent of a step and
percent of span are the same number.
"""

from dataclasses import dataclass
from math import ceil

import numpy as np
from numpy.typing import NDArray
from scipy.signal import lfilter

from autotune.design.block_response import BlockEquation
from autotune.design.held import HeldPlant

Array = NDArray[np.float64]

_SETTLED_PCT = 2.0
"""Band around the end value within which a response counts as settled (common practice, no source)."""

_PERIODS = 12.0
_LONGEST_PERIODS = 40.0

_REVERSAL_PCT = 0.5
"""What OP must go back by, of the whole move, to count as a reversal."""


@dataclass(frozen=True, slots=True, eq=False)
class ClosedLoop:
    """Polynomials in z^-1: PV and OP from load (added to OP) and from setpoint, over one denominator."""

    scan_s: float
    pv_from_load: Array
    op_from_load: Array
    pv_from_sp: Array
    op_from_sp: Array
    op_from_noise: Array
    denominator: Array

    def step(self, top: Array, scans: int) -> Array:
        """Answer of one of the above to a step of 1 at the first scan."""
        return np.asarray(lfilter(top, self.denominator, np.ones(scans)), dtype=np.float64)


@dataclass(frozen=True, slots=True)
class StepFigures:
    """What one step of 1 % does.

    ``overshoot_pct`` of the step beyond the end value (for a load: PV's peak deviation, in % per % of load),
    ``settling_time_s`` into 2 % of the step (for a load: of the peak) or ``None`` if not within the horizon,
    ``iae_pct_s`` the integral of the absolute error, ``travel_pct`` all movement of OP, ``reversals`` how often OP
    turns back, ``op_peak_pct`` OP's largest excursion.
    """

    overshoot_pct: float
    settling_time_s: float | None
    iae_pct_s: float
    travel_pct: float
    reversals: int
    op_peak_pct: float


def closed_loop(plant: HeldPlant, block: BlockEquation) -> ClosedLoop:
    """Plant and block with the same scan, joined; nothing is said about stability."""
    late = np.concatenate((np.zeros(plant.delay_scans), plant.numerator))
    around = np.convolve(late, block.from_pv)
    return ClosedLoop(
        scan_s=plant.scan_s,
        pv_from_load=np.convolve(late, block.denominator),
        op_from_load=-around,
        pv_from_sp=np.convolve(late, block.from_sp),
        op_from_sp=np.convolve(plant.denominator, block.from_sp),
        op_from_noise=-np.convolve(plant.denominator, block.from_pv),
        denominator=_sum(around, np.convolve(plant.denominator, block.denominator)),
    )


def pv_after_steps(plant: HeldPlant, block: BlockEquation, scans: int) -> tuple[Array, Array]:
    """PV after a setpoint step and after a load step of 1 %: all that a band over many draws needs."""
    late = np.concatenate((np.zeros(plant.delay_scans), plant.numerator))
    denominator = _sum(np.convolve(late, block.from_pv), np.convolve(plant.denominator, block.denominator))
    steps = np.ones(scans)
    return (
        np.asarray(lfilter(np.convolve(late, block.from_sp), denominator, steps), dtype=np.float64),
        np.asarray(lfilter(np.convolve(late, block.denominator), denominator, steps), dtype=np.float64),
    )


def load_iae_pct_s(loop: ClosedLoop, scans: int, lasting_pct_s: float | None) -> float:
    """Integral of |error| after a load step of 1 %.

    ``lasting_pct_s`` is the whole integral of the error, Ti/K for a block that integrates: what the horizon has
    not seen of it is added as a tail of one sign.  ``None`` without integral: the horizon alone.
    """
    pv = loop.step(loop.pv_from_load, scans)
    seen = loop.scan_s * float(np.sum(np.abs(pv)))
    return seen if lasting_pct_s is None else seen + abs(lasting_pct_s - loop.scan_s * float(np.sum(pv)))


def load_figures(loop: ClosedLoop, scans: int, lasting_pct_s: float | None) -> StepFigures:
    """A load step of 1 % of OP, at the plant's input."""
    pv = loop.step(loop.pv_from_load, scans)
    op = loop.step(loop.op_from_load, scans)
    peak = float(np.max(np.abs(pv)))
    tail = 0.0 if lasting_pct_s is None else abs(lasting_pct_s - loop.scan_s * float(np.sum(pv)))
    return StepFigures(
        overshoot_pct=peak,
        settling_time_s=_settling_s(pv - (0.0 if lasting_pct_s is not None else pv[-1]), peak, loop.scan_s),
        iae_pct_s=loop.scan_s * float(np.sum(np.abs(pv))) + tail,
        travel_pct=float(np.sum(np.abs(np.diff(op, prepend=0.0)))),
        reversals=_reversals(op),
        op_peak_pct=float(np.max(np.abs(op))),
    )


def setpoint_figures(loop: ClosedLoop, scans: int) -> StepFigures:
    """A setpoint step of 1 %."""
    pv = loop.step(loop.pv_from_sp, scans)
    op = loop.step(loop.op_from_sp, scans)
    return StepFigures(
        overshoot_pct=100.0 * max(0.0, float(np.max(pv)) - 1.0),
        settling_time_s=_settling_s(pv - 1.0, 1.0, loop.scan_s),
        iae_pct_s=loop.scan_s * float(np.sum(np.abs(1.0 - pv))),
        travel_pct=float(np.sum(np.abs(np.diff(op, prepend=0.0)))),
        reversals=_reversals(op),
        op_peak_pct=float(np.max(np.abs(op))),
    )


def noise_gain_ratio(loop: ClosedLoop, scans: int) -> float:
    """Standard deviation of OP over that of white noise on PV, one draw a scan."""
    pulse = np.zeros(scans)
    pulse[0] = 1.0
    return float(np.sqrt(np.sum(lfilter(loop.op_from_noise, loop.denominator, pulse) ** 2)))


def horizon_scans(scan_s: float, period_s: float, integral_time_s: float | None) -> int:
    """Scans that show a loop settle: twelve periods, or more of the tail of a slow integral, up to forty."""
    tail_s = min(4.0 * (integral_time_s or 0.0), _LONGEST_PERIODS * period_s)
    return ceil(max(_PERIODS * period_s, tail_s) / scan_s)


def _sum(one: Array, other: Array) -> Array:
    """Of two polynomials in z^-1."""
    longer, shorter = (one, other) if len(one) >= len(other) else (other, one)
    total = longer.copy()
    total[: len(shorter)] += shorter
    return total


def _settling_s(error: Array, scale: float, scan_s: float) -> float | None:
    outside = np.flatnonzero(np.abs(error) > _SETTLED_PCT / 100.0 * scale)
    if len(outside) == 0:
        return 0.0
    return None if outside[-1] == len(error) - 1 else float(outside[-1] + 1) * scan_s


def _reversals(op: Array) -> int:
    """Turns of OP that go back by more than a little of its whole range."""
    least = _REVERSAL_PCT / 100.0 * float(np.ptp(np.append(op, 0.0)))
    turns = op[np.flatnonzero(np.diff(np.sign(np.diff(op))) != 0) + 1]
    count, mark, heading = 0, 0.0, 0
    for level in (*turns, op[-1]):
        move = float(level) - mark
        if abs(move) > least:
            direction = 1 if move > 0 else -1
            count += heading not in (0, direction)
            mark, heading = float(level), direction
        elif heading * move > 0:
            mark = float(level)
    return count
