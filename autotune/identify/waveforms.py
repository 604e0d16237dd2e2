"""A record as plain arrays: PV about its level at rest, OP about the centre, on the record's clock.

Stamps that are hulls are taken at their middles; ``delay_hull_s`` says by how much the delay from OP
to PV can then be wrong, either way.
"""

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from autotune.loop.record import Record
from autotune.loop.sample import Stamp

Array = NDArray[np.float64]

REST_SAMPLES_AT_LEAST = 5


@dataclass(frozen=True, slots=True)
class Waveforms:
    """PV at its sampling instants and OP from each effect on.

    ``sample_s``, ``pv_pct`` have one entry a sample, PV counted so that it follows OP with a positive
    gain; ``effect_s``, ``op_pct`` one entry an effect, OP held until the next.  ``noise_pct`` is the
    standard deviation of PV at rest and ``rest_sd_pct`` the standard error of its level there.
    ``drift_doubt_pct_per_s`` is how fast PV may drift by itself for all that the baseline tells (percent/s).
    ``delay_hull_s`` is half the width of what the stamps leave unknown between OP and PV.
    """

    sample_s: Array
    pv_pct: Array
    effect_s: Array
    op_pct: Array
    noise_pct: float
    drift_doubt_pct_per_s: float
    rest_sd_pct: float
    delay_hull_s: float


def waveforms(record: Record) -> Waveforms:
    """The arrays of a record.  PV's level at rest is its mean before the relay, or the reference if too short."""
    sample_s = np.array([sample.taken.middle_s for sample in record.samples])
    pv_pct = np.array([sample.pv_pct for sample in record.samples])
    at_rest = pv_pct[sample_s < record.relay_from_s]
    knows_rest = len(at_rest) >= REST_SAMPLES_AT_LEAST
    rest_pct = float(np.mean(at_rest)) if knows_rest else record.reference_pct
    sample_width_s = _mean_width_s(sample.taken for sample in record.samples)
    effect_width_s = _mean_width_s(effect.effect for effect in record.effects[1:])
    return Waveforms(
        sample_s=sample_s,
        pv_pct=record.action.process_sign * (pv_pct - rest_pct),
        effect_s=np.array([effect.effect.middle_s for effect in record.effects]),
        op_pct=np.array([effect.op_pct for effect in record.effects]) - record.centre_pct,
        noise_pct=record.noise_pct,
        drift_doubt_pct_per_s=_drift_doubt_pct_per_s(record, sample_s[sample_s < record.relay_from_s])
        if knows_rest
        else abs(record.drift_pct_per_s),
        rest_sd_pct=record.noise_pct / len(at_rest) ** 0.5 if knows_rest else record.noise_pct,
        delay_hull_s=0.5 * (sample_width_s + effect_width_s),
    )


def _drift_doubt_pct_per_s(record: Record, at_rest_s: Array) -> float:
    """The drift at rest where it exceeds twice its own standard error, else that standard error."""
    spread_s = float(np.sqrt(np.sum((at_rest_s - np.mean(at_rest_s)) ** 2)))
    standard_error = record.noise_pct / spread_s
    drift = abs(record.drift_pct_per_s)
    return drift if drift > 2 * standard_error else standard_error


def _mean_width_s(stamps: Iterable[Stamp]) -> float:
    widths = [stamp.width_s for stamp in stamps]
    return float(np.mean(widths)) if widths else 0.0
