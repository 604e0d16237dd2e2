"""The one entry: a record in, findings or a refusal out."""

from autotune.identify.cautions import cautions
from autotune.identify.cycles import usable_cycles, whole_cycles
from autotune.identify.describing_function import describing_function_point
from autotune.identify.findings import Cycle, Findings, FindingsOrRefusal
from autotune.identify.fourier import harmonic_points
from autotune.identify.model_conclusion import conclude, cross_checked
from autotune.identify.refusals import CYCLES_AT_LEAST, refusal_of_cycles, refusal_of_point
from autotune.identify.static_gain import balance, static_gain
from autotune.identify.ultimate import infer
from autotune.identify.waveforms import Waveforms, waveforms
from autotune.loop.record import Record


def measure(record: Record) -> FindingsOrRefusal:
    """What was seen in a relay test and what it means, or why it can't be told and what to do.

    Seen: whole cycles, the textbook's describing function and the Fourier point of the fundamental, counted for a
    positive process gain.  Concluded: static gain (signed) where the test shows it; ultimate gain and period by the
    plant fitted to the whole test, checked against all plants through the Fourier points.
    """
    signals = waveforms(record)
    cycles, short = _cycles(signals)
    if refusal := refusal_of_cycles(record, signals, cycles):
        return refusal
    points = harmonic_points(signals, cycles)
    if refusal := refusal_of_point(signals, points[0]):
        return refusal
    means = balance(signals, cycles)
    gain = static_gain(means, points[0], record.action.process_sign)
    ultimate, model = infer(signals, cycles, points), None
    said: tuple[str, ...] = ("No fitted plant has an ultimate point: the points of the oscillation speak alone.",)
    by_model = conclude(signals, sum(cycle.period_s for cycle in cycles) / len(cycles))
    if by_model is not None:
        ultimate, contradiction = cross_checked(by_model, ultimate)
        model, said = by_model.model, (*contradiction, *by_model.cautions)
    return Findings(
        time_base=record.time_base,
        cycles=cycles,
        describing_function=describing_function_point(cycles, record.hysteresis_pct),
        fourier=points[0],
        static_gain=gain,
        ultimate=ultimate,
        cautions=(*said, *short, *cautions(record, signals, cycles, means, has_static_gain=gain is not None)),
        model=model,
    )


def _cycles(signals: Waveforms) -> tuple[tuple[Cycle, ...], tuple[str, ...]]:
    """The cycles to read; of a short test the first as well, with a word about it."""
    whole = whole_cycles(signals)
    settled = usable_cycles(whole)
    if len(settled) >= CYCLES_AT_LEAST or len(usable_cycles(whole, discard=0)) < CYCLES_AT_LEAST:
        return settled, ()
    return usable_cycles(whole, discard=0), (
        "The test was short: the cycles shown still hold the way from rest, and only the fitted plant allows for it.",
    )
