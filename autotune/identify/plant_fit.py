"""From the arrays of a test to the bank fitted to it: what beside the output moved PV is found out on the way."""

from dataclasses import dataclass, replace

import numpy as np

from autotune.identify.model import ProcessModel
from autotune.identify.model_bank import denominator, poles
from autotune.identify.output_error import Fit, Trace, best_of, fitted
from autotune.identify.step_responses import Staircase, step_responses
from autotune.identify.structure_search import bank_fits, polished, updated_fits
from autotune.identify.waveforms import Array, Waveforms

RESOLUTION_RATIO = 1e-4  # of PV's standard deviation in the test: what no transmitter resolves
RAMP_BIC = 2.0  # by which a ramp must improve
LOAD_BIC = 10.0  # by which a step of load must: it is sought at many instants
SUSPICIOUS_CHI_SQUARED = 12.0  # of a step of load in the residuals: below, there is nothing to look for
ONSETS, COARSE_ONSETS = 40, 14
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
        misfit_floor=len(signals.pv_pct) * (RESOLUTION_RATIO * float(np.std(signals.pv_pct))) ** 2,
    )


def fit_plant(signals: Waveforms, period_s: float) -> PlantFits:
    """The bank fitted to a test that swings with about ``period_s``; with a ramp or a load step where they show."""
    trace = trace_of(signals, period_s)
    fits = bank_fits(trace)
    candidates = [(min(fit.bic for fit in fits), trace, fits)]
    suspect = _suspect(trace, fits)
    if suspect is not None:
        drifting = replace(trace, has_ramp=True)
        found = bank_fits(drifting, fits)
        candidates.append((min(fit.bic for fit in found) + RAMP_BIC, drifting, found))
        loaded = _loaded(trace, suspect)
        found = bank_fits(loaded, fits)
        loaded = _nearer(loaded, min(found, key=lambda fit: fit.bic))
        found = updated_fits(loaded, found)
        candidates.append((min(fit.bic for fit in found) + LOAD_BIC, loaded, found))
    _, trace, fits = min(candidates, key=lambda candidate: candidate[0])
    return _ranked(trace, period_s, fits)


def update_plant(signals: Waveforms, earlier: PlantFits, later_s: float = 0.0) -> PlantFits:
    """The fits of a test that has changed little since: it has grown, or its effects count as ``later_s`` later."""
    grown = trace_of(signals, earlier.period_s, later_s)
    trace = replace(grown, has_ramp=earlier.trace.has_ramp, load_from_ratio=earlier.trace.load_from_ratio)
    return _ranked(trace, earlier.period_s, updated_fits(trace, earlier.fits))


def process_model(fit: Fit, period_s: float) -> ProcessModel:
    """The fit in seconds: s in 1/period is s period_s in 1/s."""
    return model_in_seconds(fit.shape, fit.dead_time_ratio, fit.numerator, period_s)


def model_in_seconds(shape: Array, dead_time_ratio: float, numerator: Array, period_s: float) -> ProcessModel:
    """B e^(-Ls)/D from parameters in periods; ``numerator`` in ascending powers."""
    order = len(shape)
    bottom = denominator(shape) * period_s ** -np.arange(order + 1.0)
    top = (numerator * period_s ** (np.arange(len(numerator)) - float(order)))[::-1]
    return ProcessModel(tuple(map(float, top)), tuple(map(float, bottom)), dead_time_ratio * period_s)


def _ranked(trace: Trace, period_s: float, fits: tuple[Fit, ...]) -> PlantFits:
    best, *others = sorted(fits, key=lambda fit: fit.bic)
    return PlantFits(trace, period_s, (polished(trace, best), *others))


def _suspect(trace: Trace, fits: tuple[Fit, ...]) -> Fit | None:
    """The structure whose residuals a step of load would explain best; none where it would explain none much.

    A zero can play a slow disturbance's part, so only structures without one are asked.  A drift shows as well.
    """
    onsets = _onsets(trace, ONSETS)
    n = len(trace.pv_pct)
    suspect, lowest_bic = None, np.inf
    for fit in fits:
        left = max(fit.misfit, trace.misfit_floor)
        explained = float(np.max(_explained(fit, _loads(fit, trace, onsets)))) if fit.structure.zeros == 0 else 0.0
        bic = fit.bic + n * np.log1p(-explained / left)
        if n * explained > SUSPICIOUS_CHI_SQUARED * left and bic < lowest_bic:
            suspect, lowest_bic = fit, bic
    return suspect


def _loaded(trace: Trace, suspect: Fit) -> Trace:
    """The trace with its likeliest step of load: the plant is fitted anew at each of a few onsets, then nearer."""
    tried = [replace(trace, load_from_ratio=float(onset)) for onset in _onsets(trace, COARSE_ONSETS)]
    fits = [best_of(loaded, suspect.structure, [suspect.parameters]) for loaded in tried]
    best = int(np.argmin([fit.misfit for fit in fits]))
    return _nearer(tried[best], fits[best])


def _nearer(loaded: Trace, fit: Fit) -> Trace:
    """The onset sought on ever finer grids, the plant refitted in between."""
    trace = replace(loaded, load_from_ratio=None)
    onsets = _onsets(trace, ONSETS)
    for _ in range(ONSET_ROUNDS):
        explained = _explained(fitted(trace, fit.structure, fit.parameters), _loads(fit, trace, onsets))
        onset, step = float(onsets[int(np.argmax(explained))]), float(onsets[1] - onsets[0])
        loaded = replace(trace, load_from_ratio=onset)
        fit = best_of(loaded, fit.structure, [fit.parameters])
        onsets = np.linspace(onset - step, onset + step, ONSETS)
    return loaded


def _onsets(trace: Trace, count: int) -> Array:
    """Instants at which a load may have changed; the very end would not show it."""
    at = trace.stairs.sample_s
    return np.linspace(float(at[0]), float(at[-1]), count, endpoint=False)


def _loads(fit: Fit, trace: Trace, onsets: Array) -> Array:
    """PV's answer to a unit step of load: a row a sample, a column an onset."""
    return np.asarray(step_responses(poles(fit.shape), trace.stairs.sample_s[:, None] - onsets)[0])


def _explained(fit: Fit, columns: Array) -> Array:
    """How much of the residuals' sum of squares each column would explain beside those of the fit."""
    beside = columns - fit.basis @ (fit.basis.T @ columns)
    power = np.sum(beside**2, axis=0)
    return np.asarray((fit.residual_pct @ beside) ** 2 / np.maximum(power, 1e-9 * np.max(power)))
