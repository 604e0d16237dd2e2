"""Tests of relay on plants that the bank holds, for the fits' own tests."""

from dataclasses import replace
from functools import cache

import numpy as np

from autotune.identify.closed_forms import Rational, ultimate_of
from autotune.identify.waveforms import Waveforms, waveforms
from tests.identify.exact_relay import Bench, Plant, sampled_relay, state_space
from tests.identify.exact_relay import hold as held


def with_truth(plant: Plant) -> Plant:
    """The plant with its exact ultimate point."""
    gain, period_s = ultimate_of(
        Rational(
            gain=plant.gain,
            lags_s=plant.lags_s,
            dead_time_s=plant.dead_time_s,
            zero_s=plant.zero_s or 0.0,
            quadratic=plant.quadratic or (0.0, 0.0),
            integrators=int(plant.is_integrating),
        )
    )
    return replace(plant, ultimate_gain=gain, ultimate_period_s=period_s)


LAG = with_truth(Plant("lag", gain=2.0, lags_s=(3.0,), dead_time_s=1.0))
TWO_LAGS = with_truth(Plant("two lags", lags_s=(3.0, 0.7), dead_time_s=0.5))
INTEGRATOR = with_truth(Plant("integrator", gain=0.4, lags_s=(0.7,), dead_time_s=0.5, is_integrating=True))
LAG_AND_PAIR = with_truth(Plant("lag and pair", lags_s=(2.0,), quadratic=(0.04, 0.2), dead_time_s=0.1))
INVERSE = with_truth(Plant("inverse response", lags_s=(1.0, 1.0, 1.0), zero_s=-0.6))
EIGHT_LAGS = with_truth(Plant("eight lags", lags_s=(1.0,) * 8))


@cache
def seen(
    plant: Plant, noise_ratio: float = 0.0, seed: int = 1, switches: int = 8, drift_ratio: float = 0.0
) -> Waveforms:
    """The arrays of a test with scan Tu/40 and a scan of latency."""
    bench = Bench(noise_ratio=noise_ratio, switches=switches, drift_ratio=drift_ratio)
    return waveforms(sampled_relay(plant, bench, seed))


def period_s(signals: Waveforms) -> float:
    """The mean time between moves up, the first left out."""
    ups = signals.effect_s[1::2]
    return float((ups[-1] - ups[1]) / (len(ups) - 2))


def loaded(signals: Waveforms, plant: Plant, from_s: float, load_pct: float) -> Waveforms:
    """PV as if the plant's input had been moved besides; the relay's switches stay as they were."""
    a, b, c = state_space(plant)
    answer = [float(c @ held(a, b, t - from_s)[1]) * load_pct if t > from_s else 0.0 for t in signals.sample_s]
    return replace(signals, pv_pct=signals.pv_pct + np.array(answer))
