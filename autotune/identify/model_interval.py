"""How sure a fitted plant is: the covariance of its parameters, its ultimate point's interval, and draws.

The residuals' influence on a parameter is known (least squares), and residuals that hang together, because no
structure is quite the plant, count as W. K. Newey and K. D. West, Econometrica 55 (1987) 703; never less than white
noise.  Beside it stand what structures of nearly the same BIC say, and floors for what no structure has.
"""

from dataclasses import dataclass
from math import exp, hypot, log, sqrt

import numpy as np
from scipy.special import ndtri

from autotune.identify.model import ModelWithDraws, ProcessModel
from autotune.identify.model_bank import SHAPE_HIGH, SHAPE_LOW
from autotune.identify.model_point import Crossing, crossing
from autotune.identify.output_error import Fit, fitted
from autotune.identify.plant_fit import PlantFits, model_in_seconds, process_model
from autotune.identify.waveforms import Array

GAIN_FLOOR_RATIO, PERIOD_FLOOR_RATIO = 0.003, 0.0012  # standard deviations: no plant is one of the structures
LAGS_PER_PERIOD = 0.25  # over which residuals may hang together
NEAR_TIE_BIC = 6.0
WEIGHED_BIC = 12.0  # beyond, a weight of 0.2 %
PRIOR_SD = 1.0  # of a shape parameter (a logarithm) and of the dead time (periods)
KNOWN_SD = 1e-6
RIDGE = 1e-12  # what rounding leaves of a direction
COVERED = 1.959964
DRAWS = 64
DRAW_SD_AT_MOST = 2.5
DRAW_CHI_SQUARED_AT_MOST = 20.0  # by which a draw may explain the test worse: 2.5 deviations in three directions
HALVINGS = 5


@dataclass(frozen=True, slots=True)
class Sureness:
    """One structure's ultimate point (periods) and what limits it.

    ``gain_sd`` and ``period_sd`` are of the logarithms; ``covariance`` is that of shape, dead time, numerator.
    """

    fit: Fit
    point: Crossing
    gain_sd_ratio: float
    period_sd_ratio: float
    covariance: Array


Weighed = tuple[tuple[Sureness, float], ...]


@dataclass(frozen=True, slots=True)
class ModelPoint:
    """ln Ku and ln of Tu in seconds of the best structure, with half widths (95 %) by cause, as ratios.

    ``disagreeing`` are structures nearly as likely whose own interval doesn't hold the best one's point.
    """

    log_gain: float
    log_period_s: float
    gain_noise_ratio: float
    period_noise_ratio: float
    gain_spread_ratio: float
    period_spread_ratio: float
    kappa_ratio: float
    disagreeing: tuple[Sureness, ...]

    @property
    def gain_half_ratio(self) -> float:
        """Half width of ln Ku."""
        return hypot(self.gain_noise_ratio, self.gain_spread_ratio, COVERED * GAIN_FLOOR_RATIO)

    @property
    def period_half_ratio(self) -> float:
        """Half width of ln Tu."""
        return hypot(self.period_noise_ratio, self.period_spread_ratio, COVERED * PERIOD_FLOOR_RATIO)


def sureness(fit: Fit, samples_per_period: int, later_ratio: float = 0.0) -> Sureness | None:
    """Point and covariance of one structure with ``later_ratio`` periods more dead time; ``None`` without a point."""
    point = crossing(fit, later_ratio)
    if point is None:
        return None
    covariance = _covariance(fit, max(4, round(LAGS_PER_PERIOD * samples_per_period)))
    variances = np.einsum("ip,pq,iq->i", point.gradients, covariance, point.gradients)
    return Sureness(fit, point, sqrt(max(variances[0], 0.0)), sqrt(max(variances[1], 0.0)), covariance)


def _covariance(fit: Fit, lags: int) -> Array:
    """Of shape, dead time and numerator; a dead time at its bound counts as known.

    Where two factors share a pole, a direction of the shape changes nothing at all: a wide prior holds it.
    """
    rows = np.concatenate((fit.slopes, fit.columns, fit.onset_slopes))
    count, samples = rows.shape
    variance = max(fit.misfit, fit.misfit_floor) / max(samples - count, 1)
    prior = np.zeros(count)
    prior[: len(fit.slopes)] = variance / PRIOR_SD**2
    if fit.dead_time_ratio <= 0:
        prior[len(fit.slopes) - 1] = variance / KNOWN_SD**2
    scale = np.sqrt(np.sum(rows**2, axis=1) + prior + 1e-300)
    information = (rows @ rows.T + np.diag(prior)) / np.outer(scale, scale) + RIDGE * np.eye(count)
    inverse = np.linalg.inv(information) / np.outer(scale, scale)
    kept = len(fit.slopes) + fit.structure.outputs
    moved = (inverse @ rows)[:kept] * fit.residual_pct
    together = moved @ moved.T
    for lag in range(1, min(lags, samples - 1) + 1):
        across = moved[:, lag:] @ moved[:, :-lag].T
        together += (1 - lag / (lags + 1)) * (across + across.T)
    return _larger(variance * inverse[:kept, :kept], together * samples / max(samples - count, 1))


def _larger(white: Array, together: Array) -> Array:
    """Newey and West's covariance, raised to the white one in the directions where it is the smaller."""
    scale = np.sqrt(np.maximum(np.diag(white), 1e-300))
    ratio = together / np.outer(scale, scale)
    base = white / np.outer(scale, scale)
    root_value, root = np.linalg.eigh(base)
    root_value = np.maximum(root_value, 1e-12 * root_value[-1])
    half = root * np.sqrt(root_value)
    inverse = (root / np.sqrt(root_value)).T
    value, direction = np.linalg.eigh(inverse @ ratio @ inverse.T)
    turned = half @ direction
    return np.asarray((turned * np.maximum(value, 1.0)) @ turned.T * np.outer(scale, scale))


def model_point(found: PlantFits, later_s: float = 0.0) -> tuple[ModelPoint, Weighed] | None:
    """The best structure's ultimate point with its widths, and all weighed structures; ``None`` where it has none.

    ``later_s`` is more (or less) dead time than fitted: what the stamps leave unknown.
    """
    best_bic = found.best.bic
    per_period = samples_per_period(found)
    weighed = [
        (sure, exp(-(fit.bic - best_bic) / 2))
        for fit in found.fits
        if fit.bic < best_bic + WEIGHED_BIC
        and (sure := sureness(fit, per_period, later_s / found.period_s)) is not None
    ]
    if not weighed or weighed[0][0].fit is not found.best:
        return None
    best = weighed[0][0]
    total = sum(weight for _, weight in weighed)

    def spread(points: list[float]) -> float:
        return sqrt(sum(w * (x - points[0]) ** 2 for x, (_, w) in zip(points, weighed, strict=True)) / total)

    point = ModelPoint(
        log_gain=best.point.log_gain,
        log_period_s=best.point.log_period_ratio + log(found.period_s),
        gain_noise_ratio=COVERED * best.gain_sd_ratio,
        period_noise_ratio=COVERED * best.period_sd_ratio,
        gain_spread_ratio=COVERED * spread([sure.point.log_gain for sure, _ in weighed]),
        period_spread_ratio=COVERED * spread([sure.point.log_period_ratio for sure, _ in weighed]),
        kappa_ratio=best.point.kappa_ratio,
        disagreeing=tuple(
            sure for sure, _ in weighed if sure.fit.bic < best_bic + NEAR_TIE_BIC and _disagree(best, sure)
        ),
    )
    return point, tuple((sure, weight / total) for sure, weight in weighed)


def samples_per_period(found: PlantFits) -> int:
    """Samples in one observed period, on the average."""
    at = found.trace.stairs.sample_s
    return round(len(at) / float(at[-1] - at[0]))


def _disagree(one: Sureness, other: Sureness) -> bool:
    gain = abs(one.point.log_gain - other.point.log_gain)
    return gain > COVERED * hypot(max(one.gain_sd_ratio, other.gain_sd_ratio), GAIN_FLOOR_RATIO)


def model_with_draws(found: PlantFits, weighed: Weighed, hull_s: float, because: tuple[str, ...]) -> ModelWithDraws:
    """The best model, and draws from each weighed structure's covariance; their weights are the structures'.

    The draws are a fixed low-discrepancy set (J. H. Halton, Numer. Math. 2 (1960) 84) within DRAW_SD_AT_MOST
    deviations of each direction and near the best in likelihood.  Their dead times are spread evenly over what the
    stamps leave unknown (``hull_s`` either way), and are never negative.
    """
    draws: list[ProcessModel] = []
    weights: list[float] = []
    for sure, weight in weighed:
        models = _draws(found, sure, hull_s, max(8, round(DRAWS * weight)))
        draws += models
        weights += [weight / len(models)] * len(models)
    total = sum(weights)
    return ModelWithDraws(
        best=process_model(found.best, found.period_s),
        draws=tuple(draws),
        weights=tuple(weight / total for weight in weights),
        because=because,
    )


def _draws(found: PlantFits, sure: Sureness, hull_s: float, count: int) -> list[ProcessModel]:
    """In shape, dead time, ln b_0 and b_i/b_0: a fast lag moves b_0 as much as its own pole, whatever its size."""
    fit, order = sure.fit, sure.fit.structure.order
    gain, zeros = float(fit.numerator[0]), fit.numerator[1:] / fit.numerator[0]
    to_ratios = np.eye(len(sure.covariance))
    to_ratios[order + 1 :] /= gain
    to_ratios[order + 2 :, order + 1] = -zeros / gain
    covariance = to_ratios @ sure.covariance @ to_ratios.T
    from scipy.stats import qmc  # a second of loading that only a finished test pays

    cube = qmc.Halton(len(covariance) + 1, scramble=False).random(count + 1)[1:]
    normal = np.clip(ndtri(cube[:, :-1]), -DRAW_SD_AT_MOST, DRAW_SD_AT_MOST)
    scale = np.sqrt(np.maximum(np.diag(covariance), 1e-300))
    spread, direction = np.linalg.eigh(covariance / np.outer(scale, scale))
    drawn = normal @ (direction * np.sqrt(np.maximum(spread, 0.0))).T * scale
    best = np.concatenate((fit.parameters, [log(gain)], zeros))
    freedom = len(fit.residual_pct) - len(fit.slopes) - len(fit.columns)
    misfit_at_most = max(fit.misfit, fit.misfit_floor) * (1 + DRAW_CHI_SQUARED_AT_MOST / max(freedom, 1))
    models = []
    for away, unknown in zip(drawn, 2 * cube[:, -1] - 1, strict=True):
        one = _within(found, fit, best, away, misfit_at_most)
        dead_time_ratio = max(float(one[order]) + unknown * hull_s / found.period_s, 0.0)
        numerator = exp(one[order + 1]) * np.append(1.0, one[order + 2 :])
        models.append(model_in_seconds(one[:order], dead_time_ratio, numerator, found.period_s))
    return models


def _within(found: PlantFits, fit: Fit, best: Array, away: Array, misfit_at_most: float) -> Array:
    """The draw, brought back towards the best by halves until its own best numerator explains the test nearly as well.

    The covariance is that of a straight line; a lag that hardly shows bends far from it.
    """
    order = fit.structure.order
    for _ in range(HALVINGS):
        one = best + away
        one[:order] = np.clip(one[:order], SHAPE_LOW, SHAPE_HIGH)
        one[order] = max(one[order], 0.0)
        if fitted(found.trace, fit.structure, one[: order + 1]).misfit <= misfit_at_most:
            return one
        away = away / 2
    return best
