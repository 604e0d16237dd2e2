"""Output-error fit of one structure by variable projection.

What PV would be is linear in the numerator, the level at rest, a ramp and a load step: these are solved by least
squares inside (G. H. Golub and V. Pereyra, SIAM J. Numer. Anal. 10 (1973) 413), and the shape and the dead
time by Levenberg and Marquardt outside, with the projected Jacobian of L. Kaufman, BIT 15 (1975) 49.  Time is
counted in observed periods throughout.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from autotune.identify.model_bank import SHAPE_HIGH, SHAPE_LOW, Structure, denominator_slopes, poles
from autotune.identify.step_responses import Staircase, responses
from autotune.identify.waveforms import Array

DEAD_TIME_HIGH = 3.0  # periods: a relay swings with less than one
STEP_AT_MOST = 1.5  # of a shape parameter at once
DAMPING_LOWEST, DAMPING_HIGHEST = 1e-10, 1e10
TINY = 1e-150


@dataclass(frozen=True, slots=True)
class Trace:
    """A test in periods: PV at its samples, the staircase of OP, and what beside it moves PV.

    Below ``misfit_floor`` (a sum of squares) a fit is as good as perfect.
    ``has_ramp`` lets PV drift; ``load_from_ratio`` is when a step of load begins (periods), where one is suspected.
    """

    stairs: Staircase
    pv_pct: Array
    misfit_floor: float
    has_ramp: bool = False
    load_from_ratio: float | None = None

    @property
    def nuisances(self) -> int:
        """Parameters beside the plant's: level, ramp, and size and onset of a load step."""
        return 1 + self.has_ramp + 2 * (self.load_from_ratio is not None)


@dataclass(frozen=True, slots=True)
class Fit:
    """One structure on one trace, at these parameters.

    ``linear`` holds B's coefficients (ascending powers) and then those of the nuisances; ``columns`` what they
    multiply, ``slopes`` the derivatives of PV with respect to shape and dead time: a row a parameter.
    ``onset_slopes`` has a row for the onset of a load step, and none without; ``basis`` spans the columns.
    """

    structure: Structure
    shape: Array
    dead_time_ratio: float
    linear: Array
    residual_pct: Array
    columns: Array
    slopes: Array
    onset_slopes: Array
    basis: Array
    nuisances: int
    misfit_floor: float

    @property
    def misfit(self) -> float:
        """Sum of the squared residuals."""
        return float(self.residual_pct @ self.residual_pct)

    @property
    def parameters(self) -> Array:
        """Shape and dead time."""
        return np.append(self.shape, self.dead_time_ratio)

    @property
    def numerator(self) -> Array:
        """B's coefficients, ascending powers."""
        return self.linear[: self.structure.outputs]

    @property
    def bic(self) -> float:
        """Bayesian information criterion: n ln(misfit/n) + parameters ln n (G. Schwarz, Ann. Statist. 6 (1978) 461)."""
        n = len(self.residual_pct)
        count = self.structure.order + 1 + self.structure.outputs + self.nuisances
        return float(n * np.log(max(self.misfit, self.misfit_floor, TINY) / n) + count * np.log(n))


def fitted(trace: Trace, structure: Structure, parameters: Array) -> Fit:
    """The best linear part for this shape and dead time (the last of ``parameters``)."""
    shape, dead_time_ratio = parameters[:-1], float(parameters[-1])
    roots = poles(shape)
    seen = responses(roots, trace.stairs, dead_time_ratio)
    count = structure.outputs
    at = trace.stairs.sample_s
    rows = [seen.steps[:count], np.ones((1, len(at)))]
    if trace.has_ramp:
        rows.append(((at - at[0]) / (at[-1] - at[0]) - 0.5)[None])
    load = None
    if trace.load_from_ratio is not None:
        load = responses(roots, Staircase(at, np.array([trace.load_from_ratio]), np.ones(1)), 0.0)
        rows.append(load.steps[:1])
    columns = np.concatenate(rows)
    basis, triangle = np.linalg.qr(columns.T)
    linear = np.linalg.solve(triangle, trace.pv_pct @ basis) if _is_regular(triangle) else _least(columns, trace.pv_pct)
    moved = linear[:count] @ np.array([seen.squares[i : i + structure.order] for i in range(count)]).reshape(count, -1)
    by_coefficient = -moved.reshape(structure.order, -1)
    if load is not None:
        by_coefficient -= linear[-1] * load.squares[: structure.order]
    by_shape = denominator_slopes(shape) @ by_coefficient
    onset_slopes = np.empty((0, len(at))) if load is None else -linear[-1] * load.steps[1:2]
    by_dead_time = -(linear[:count] @ seen.steps[1 : count + 1])
    return Fit(
        structure=structure,
        shape=shape,
        dead_time_ratio=dead_time_ratio,
        linear=linear,
        residual_pct=trace.pv_pct - linear @ columns,
        columns=columns,
        slopes=np.concatenate((by_shape, by_dead_time[None])),
        onset_slopes=onset_slopes,
        basis=basis,
        nuisances=trace.nuisances,
        misfit_floor=trace.misfit_floor,
    )


def _is_regular(triangle: Array) -> bool:
    diagonal = np.abs(np.diag(triangle))
    return bool(np.min(diagonal) > 1e-10 * np.max(diagonal))


def _least(columns: Array, pv_pct: Array) -> Array:
    return np.asarray(np.linalg.lstsq(columns.T, pv_pct, rcond=1e-10)[0])


def refined(trace: Trace, start: Fit, tolerance_ratio: float = 1e-4, steps_at_most: int = 40) -> Fit:
    """Levenberg and Marquardt from a start until the misfit falls by less than ``tolerance_ratio`` of itself in a step.

    The dead time stays in 0 .. DEAD_TIME_HIGH and the shape in its bounds: a parameter that pushes against its
    bound is held there for the step.
    """
    fit, damping = start, 1e-2
    low = np.append(np.full(len(fit.shape), SHAPE_LOW), 0.0)
    high = np.append(np.full(len(fit.shape), SHAPE_HIGH), DEAD_TIME_HIGH)
    for _ in range(steps_at_most):
        projected = fit.slopes - (fit.slopes @ fit.basis) @ fit.basis.T
        gradient = projected @ fit.residual_pct
        at = fit.parameters
        free = ~((at <= low) & (gradient < 0) | (at >= high) & (gradient > 0))
        curvature = (projected @ projected.T)[np.ix_(free, free)]
        scale = np.sqrt(np.diag(curvature)) + TINY + 1e-7 * np.sqrt(np.max(np.diag(curvature), initial=0.0))
        curvature = curvature / np.outer(scale, scale)
        before = fit.misfit
        while damping < DAMPING_HIGHEST:
            step = np.zeros(len(at))
            step[free] = np.linalg.solve(curvature + damping * np.eye(len(scale)), gradient[free] / scale) / scale
            step *= min(1.0, STEP_AT_MOST / max(float(np.max(np.abs(step))), TINY))
            tried = fitted(trace, fit.structure, np.clip(at + step, low, high))
            if tried.misfit < before:
                fit, damping = tried, max(damping / 8, DAMPING_LOWEST)
                break
            damping *= 5
        if not fit.misfit < (1 - tolerance_ratio) * before or fit.misfit < tolerance_ratio * fit.misfit_floor:
            break
    return fit


def best_of(trace: Trace, structure: Structure, starts: Sequence[Array]) -> Fit:
    """The fit from the likeliest of these starts."""
    return refined(trace, min((fitted(trace, structure, start) for start in starts), key=lambda fit: fit.misfit))
