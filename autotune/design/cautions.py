"""What a technician reads beside a proposal before anything is written: sentences, each with its number."""

from math import sqrt

from autotune.identify.findings import UltimatePoint
from autotune.loop.block_units import rounded, to_block
from autotune.loop.mode import ControlAction
from autotune.loop.outcome import Interval, Refusal
from autotune.loop.settings import BlockDescription, PidSettings
from autotune.loop.span import Span

WIDE_INTERVAL_RATIO = 1.2
"""High over low from which an interval is worth a sentence (common practice, no source)."""

GAIN_AT_MOST_RATIO = 0.6
"""Largest gain over the low end of Ku without a caution: the briskest share that Ziegler & Nichols 1942 print."""

LARGE_CHANGE_RATIO = 3.0
"""Change against as found from which a person goes half-way first (common practice, no source)."""

SENSITIVITY_AT_MOST = 2.0
"""Upper end of the usual range of Ms, 1.2 to 2 (Astrom & Hagglund, Advanced PID Control, 2006)."""

ROUNDING_AT_MOST_PCT = 5.0
OP_NOISE_AT_MOST_PCT = 1.0
"""Noise on the output from which a valve is kept busy for nothing (common practice, no source)."""


def caution_interval(ultimate: UltimatePoint) -> list[str]:
    """Say how wide the ultimate point is where it is wide."""
    gain, period_s = ultimate.ultimate_gain, ultimate.ultimate_period_s
    sentences = []
    if not gain.high <= WIDE_INTERVAL_RATIO * gain.low:
        sentences.append(
            f"The ultimate gain is known only between {gain.low:.3g} and {gain.high:.3g} %OP/%PV; "
            f"this rule took {gain.best:.3g}."
        )
    if not period_s.high <= WIDE_INTERVAL_RATIO * period_s.low:
        sentences.append(
            f"The ultimate period is known only between {period_s.low:.3g} and {period_s.high:.3g} s; "
            f"this rule took {period_s.best:.3g} s."
        )
    return sentences


def caution_gain(settings: PidSettings, ultimate_gain: Interval) -> list[str]:
    """Warn where the gain is a large share of the least that the ultimate gain may be."""
    share_ratio = settings.controller_gain / ultimate_gain.low
    if share_ratio <= GAIN_AT_MOST_RATIO:
        return []
    return [
        f"If the ultimate gain is at the low end of its interval, {ultimate_gain.low:.3g}, this gain is "
        f"{100.0 * share_ratio:.0f} % of it: the loop may swing."
    ]


def caution_sensitivity(ms_at_least: float) -> list[str]:
    """Warn where even the bound on the peak sensitivity is above the usual range."""
    if ms_at_least <= SENSITIVITY_AT_MOST:
        return []
    return [
        f"With the ultimate gain at the low end of its interval the peak sensitivity Ms is at least "
        f"{ms_at_least:.2g}, above the usual {SENSITIVITY_AT_MOST:g}: expect ringing."
    ]


def caution_rounding(rounding_pct: float) -> list[str]:
    """Warn where the controller's fields are coarse against the numbers."""
    if rounding_pct <= ROUNDING_AT_MOST_PCT:
        return []
    return [f"The controller's fields are coarse: rounding weakens a setting by {rounding_pct:.0f} %."]


def caution_noise(settings: PidSettings, block: BlockDescription, noise_pct: float | None) -> list[str]:
    """Warn where the derivative turns noise of PV (``noise_pct``: standard deviation at rest) into moves of OP."""
    if settings.derivative_time_s is None:
        return []
    if noise_pct is None:
        return ["The noise of PV isn't known, and derivative amplifies it: watch how restless the output gets."]
    ratio = block.derivative_filter_ratio
    if ratio is None and block.scan_s is None:
        return ["The block's derivative has no declared filter: noise of PV may throw the output about."]
    # The largest gain of K(1 + Td s/(1 + Td s/N)), or of an unfiltered difference over one scan.
    amplification_ratio = ratio if ratio is not None else settings.derivative_time_s / (block.scan_s or 1.0)
    op_noise_pct = settings.controller_gain * (1.0 + amplification_ratio) * noise_pct
    if op_noise_pct <= OP_NOISE_AT_MOST_PCT:
        return []
    return [
        f"Noise of {noise_pct:.2g} % in PV can move the output by about {op_noise_pct:.2g} % through the derivative."
    ]


def caution_change(
    settings: PidSettings, present: PidSettings, block: BlockDescription, action: ControlAction, pv_span: Span
) -> list[str]:
    """Warn of a large step from the present settings (both in the block's form), with the numbers half-way."""
    pairs = (
        ("gain", settings.controller_gain, present.controller_gain),
        ("integral time", settings.integral_time_s, present.integral_time_s),
        ("derivative time", settings.derivative_time_s, present.derivative_time_s),
    )
    switched, large = [], []
    for name, new, old in pairs:
        if new is not None and old is not None:
            if not 1.0 / LARGE_CHANGE_RATIO <= new / old <= LARGE_CHANGE_RATIO:
                large.append(f"{name} x {new / old:.2g}")
        elif new is not old:
            switched.append(f"{name.removesuffix(' time')} {'off' if new is None else 'on'}")
    sentences = [f"This switches {' and '.join(switched)}, against as found."] if switched else []
    if large:
        half_way = PidSettings(
            settings.form,
            sqrt(settings.controller_gain * present.controller_gain),
            _half_way_s(settings.integral_time_s, present.integral_time_s),
            _half_way_s(settings.derivative_time_s, present.derivative_time_s),
        )
        sentences.append(
            f"A large change from as found ({', '.join(large)}): "
            f"go half-way first{_half_way_words(half_way, block, action, pv_span)}."
        )
    return sentences


def _half_way_s(new_s: float | None, old_s: float | None) -> float | None:
    """Half-way by ratio; a term that is on in one of them only stays as proposed."""
    return new_s if new_s is None or old_s is None else sqrt(new_s * old_s)


def _half_way_words(settings: PidSettings, block: BlockDescription, action: ControlAction, pv_span: Span) -> str:
    fields = to_block(settings, block, action, pv_span)
    held = fields if isinstance(fields, Refusal) else rounded(fields, block)
    if isinstance(held, Refusal):
        return ""
    numbers = (held.fields.gain, held.fields.integral, held.fields.derivative)
    words = [f"{label} {number:.4g}" for label, number in zip(block.panel_labels, numbers, strict=True) if number]
    return f", with {', '.join(words)}"
