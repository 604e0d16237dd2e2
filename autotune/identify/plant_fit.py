"""From the arrays of a test to the bank fitted to it: what beside the output moved PV is found out on the way."""

from dataclasses import dataclass, replace

import numpy as np

from autotune.identify.model import ProcessModel
from autotune.identify.model_bank import denominator, poles
from autotune.identify.output_error import Fit, Trace, best_of, fitted
from autotune.identify.step_responses import Staircase, step_responses
from autotune.identify.structure_search import bank_fits, polished
from autotune.identify.waveforms import Array, Waveforms

NUISANCE_BIC_GAIN = 4.0  # by which a ramp must improve
LOAD_BIC_GAIN = 12.0  # by which a step of load must: it is sought at many instants
RAMP_CHI_SQUARED, LOAD_CHI_SQUARED = 6.0, 14.0  # of one column in the residuals: below, there is nothing to look for
ONSETS = 40
ONSET_ROUNDS = 3


@dataclass(frozen=True, slots=True)
class PlantFits:
    """All structures fitted to one test, best first by BIC.  ``period_s`` is the unit of their time."""

    trace: Trace
    period_s: float
    fits: tuple[Fit, ...]

    @property
    def best(self) -> Fit:
        """The structure with the lowest BIC."""
        return self.fits[0]


def trace_of(signals: Waveforms, period_s: float, later_s: float = 0.0) -> Trace:
    """The test in periods, with the effects ``later_s`` later than stamped; at least one step of the output."""
    return Trace(
        stairs=Staircase(
            signals.sample_s / period_s, (signals.effect_s[1:] + later_s) / period_s, np.diff(signals.op_pct)
        ),
        pv_pct=signals.pv_pct,
    )


def fit_plant(signals: Waveforms, period_s: float) -> PlantFits:
    """The bank fitted to a test that swings with about ``period_s``; with a ramp or a load step where they show."""
    trace = trace_of(signals, period_s)
    fits = _ranked(bank_fits(trace))
    disturbed = _with_nuisances(trace, fits[0])
    if disturbed is not trace:
        trace, fits = disturbed, _ranked(bank_fits(disturbed))
    return PlantFits(trace, period_s, (polished(trace, fits[0]), *fits[1:]))


def update_plant(signals: Waveforms, earlier: PlantFits) -> PlantFits:
    """The fits of a test that has grown since ``earlier``: each structure from where it stood."""
    grown = trace_of(signals, earlier.period_s)
    trace = replace(grown, has_ramp=earlier.trace.has_ramp, load_from=earlier.trace.load_from)
    return PlantFits(trace, earlier.period_s, _ranked(_again(trace, earlier.fits)))


def refit_later(signals: Waveforms, earlier: PlantFits, later_s: float) -> PlantFits:
    """The fits if each effect came ``later_s`` later than stamped (earlier where negative)."""
    moved = trace_of(signals, earlier.period_s, later_s)
    trace = replace(moved, has_ramp=earlier.trace.has_ramp, load_from=earlier.trace.load_from)
    return PlantFits(trace, earlier.period_s, _ranked(_again(trace, earlier.fits)))


def process_model(fit: Fit, period_s: float) -> ProcessModel:
    """The fit in seconds: s in 1/period is s period_s in 1/s."""
    return model_in_seconds(fit.shape, fit.dead_time, fit.numerator, period_s)


def model_in_seconds(shape: Array, dead_time: float, numerator: Array, period_s: float) -> ProcessModel:
    """B e^(-Ls)/D from parameters in periods; ``numerator`` in ascending powers."""
    order = len(shape)
    bottom = denominator(shape) * period_s ** -np.arange(order + 1.0)
    top = (numerator * period_s ** (np.arange(len(numerator)) - float(order)))[::-1]
    return ProcessModel(tuple(map(float, top)), tuple(map(float, bottom)), dead_time * period_s)


def _ranked(fits: tuple[Fit, ...]) -> tuple[Fit, ...]:
    return tuple(sorted(fits, key=lambda fit: fit.bic))


def _again(trace: Trace, fits: tuple[Fit, ...]) -> tuple[Fit, ...]:
    return tuple(best_of(trace, fit.structure, [fit.parameters]) for fit in fits)


def _with_nuisances(trace: Trace, fit: Fit) -> Trace:
    """The trace with a ramp or a step of load, where the residuals of the best structure ask for it."""
    variance = max(fit.misfit, trace.misfit_floor) / len(fit.residual_pct)
    at = trace.stairs.sample_s
    candidates = []
    if _explained(fit, (at - np.mean(at))[:, None])[0] > RAMP_CHI_SQUARED * variance:
        candidates.append((replace(trace, has_ramp=True), NUISANCE_BIC_GAIN))
    onsets = np.linspace(float(at[0]), float(at[-1]), ONSETS)
    if np.max(_explained(fit, _loads(fit, at, onsets))) > LOAD_CHI_SQUARED * variance:
        candidates.append((_loaded(trace, fit, onsets), LOAD_BIC_GAIN))
    best, best_bic = trace, fit.bic
    for disturbed, gain in candidates:
        bic = best_of(disturbed, fit.structure, [fit.parameters]).bic + gain
        if bic < best_bic:
            best, best_bic = disturbed, bic
    return best


def _loaded(trace: Trace, fit: Fit, onsets: Array) -> Trace:
    """The trace with its likeliest step of load, sought on ever finer grids, the plant refitted in between."""
    loaded, at = trace, trace.stairs.sample_s
    for _ in range(ONSET_ROUNDS):
        explained = _explained(fitted(trace, fit.structure, fit.parameters), _loads(fit, at, onsets))
        onset, step = float(onsets[int(np.argmax(explained))]), float(onsets[1] - onsets[0])
        loaded = replace(trace, load_from=onset)
        fit = best_of(loaded, fit.structure, [fit.parameters])
        onsets = np.linspace(max(onset - step, float(at[0])), min(onset + step, float(at[-1])), ONSETS)
    return loaded


def _loads(fit: Fit, at: Array, onsets: Array) -> Array:
    """PV's answer to a unit step of load: a row a sample, a column an onset."""
    return np.asarray(step_responses(poles(fit.shape), at[:, None] - onsets)[0])


def _explained(fit: Fit, columns: Array) -> Array:
    """How much of the residuals' sum of squares each column would explain beside those of the fit."""
    beside = columns - fit.basis @ (fit.basis.T @ columns)
    power = np.sum(beside**2, axis=0)
    return np.asarray((fit.residual_pct @ beside) ** 2 / np.maximum(power, 1e-9 * np.max(power)))
