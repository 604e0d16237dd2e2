"""What can be judged only from several keys together: blocks, the site's limits and a loop's settings.

Comparisons read "not low < high", so that nothing undefined passes.
"""

from collections.abc import Iterator

from autotune.config.complaints import Flaw, Loc
from autotune.config.places import SETTINGS
from autotune.config.schema import LoopTable
from autotune.config.schema_settings import BlockTable, RangeTable, SettingLimitTable
from autotune.config.schema_site import SiteLimitsTable
from autotune.loop.settings import DerivativeKind, GainKind, IntegralKind, SignConvention

_ALLOWED_ORDER = ("never", "in manual", "in automatic")


def block_flaws(block: BlockTable) -> Iterator[Flaw]:
    """Faults of one block description."""
    for name in SETTINGS:
        told: RangeTable | None = getattr(block, f"{name}_range")
        if told is not None and not told.low < told.high:
            yield Flaw((f"{name}_range", "low"), f"low {told.low:g} is not below high {told.high:g}", "swap them")
    if block.gain_kind is GainKind.PROPORTIONAL_BAND and block.gain_range is not None and not block.gain_range.low > 0:
        fault = f"a proportional band of {block.gain_range.low:g} % has no gain"
        yield Flaw(("gain_range", "low"), fault, "write the smallest band above 0, in percent")
    if block.has_derivative and block.derivative_kind is None:
        kinds = ", ".join(f'"{kind.value}"' for kind in DerivativeKind)
        yield Flaw(("derivative_kind",), "missing", f"add one of {kinds}, or has_derivative = false")
    if not block.has_derivative:
        for key in (
            "derivative_kind",
            "derivative_off",
            "derivative_on",
            "derivative_filter_ratio",
            "derivative_range",
        ):
            if getattr(block, key) is not None:
                yield Flaw((key,), "told, but has_derivative = false", "take one of the two out")
    by_execution = (
        ("integral_kind", block.integral_kind is IntegralKind.GAIN_PER_EXECUTION),
        ("derivative_kind", block.derivative_kind is DerivativeKind.GAIN_PER_EXECUTION),
    )
    for key, needs_scan in by_execution:
        if needs_scan and block.scan_s is None:
            yield Flaw(
                (key,), "gain per execution needs the block's execution", "add scan_s, the block's own scan in s"
            )


def site_flaws(site: SiteLimitsTable) -> Iterator[Flaw]:
    """Faults of the site's limits by themselves."""
    if not site.op_low_pct < site.op_high_pct:
        yield Flaw(
            ("op_low_pct",), not_below("op_low_pct", "op_high_pct", site.op_low_pct, site.op_high_pct), "swap them"
        )
    for block, limits in site.settings_limits.items():
        for name in SETTINGS:
            told: SettingLimitTable | None = getattr(limits, name)
            if told is not None:
                yield from _floor_flaws(("settings_limits", block, name), told)


def settings_flaws(loop: LoopTable, block: BlockTable | None, site: SiteLimitsTable | None) -> Iterator[Flaw]:
    """Faults of a loop's settings tags and their limits, against its block and the site."""
    yield from _settings_tags(loop, block)
    yield from _settings_limits(loop, block)
    if site is not None:
        yield from _settings_against_site(loop, site)


def _settings_tags(loop: LoopTable, block: BlockTable | None) -> Iterator[Flaw]:
    tags = loop.tags
    has_any = any(getattr(tags, name) is not None for name in SETTINGS)
    wanted = ("gain", "integral") if has_any or loop.write_settings != "never" else ()
    if loop.prove_writable and loop.write_settings == "never":
        fault = 'nothing is written while write_settings = "never"'
        yield Flaw(("prove_writable",), fault, "allow confirmed settings to be written, or take the key out")
    for name in wanted:
        if getattr(tags, name) is None:
            yield Flaw(("tags", name), "missing among the settings", f"add the tag {name}, or leave all settings out")
    if block is not None and wanted:
        if block.has_derivative and tags.derivative is None:
            yield Flaw(
                ("tags", "derivative"), "missing: the block has a derivative", "add the tag, or has_derivative = false"
            )
        if not block.has_derivative and tags.derivative is not None:
            fault = f"block {loop.block} has no derivative"
            yield Flaw(("tags", "derivative"), fault, "take the tag out, or describe the derivative in the block")


def _settings_limits(loop: LoopTable, block: BlockTable | None) -> Iterator[Flaw]:
    for name in SETTINGS:
        told: SettingLimitTable | None = getattr(loop.settings_limits, name)
        if told is None:
            continue
        yield from _floor_flaws(("settings_limits", name), told)
        if name == "derivative" and block is not None and not block.has_derivative:
            yield Flaw(("settings_limits", name), f"block {loop.block} has no derivative", "take the table out")
        if name == "gain" and block is not None:
            yield from _gain_floor(block, told)


def _gain_floor(block: BlockTable, told: SettingLimitTable) -> Iterator[Flaw]:
    loc = ("settings_limits", "gain", "low")
    if block.gain_kind is GainKind.PROPORTIONAL_BAND and told.low == 0:
        fault = "a proportional band of 0 % is an endless gain"
        yield Flaw(loc, fault, "write the smallest band above 0, in percent")
    if block.sign is SignConvention.SIGNED_GAIN and (
        told.low is None or told.high is None or told.low <= 0 <= told.high
    ):
        fault = "a gain of either sign would pass, and the sign tells direct from reverse"
        yield Flaw(loc, fault, "write low and high both on the loop's own side of 0")


def _floor_flaws(loc: Loc, told: SettingLimitTable) -> Iterator[Flaw]:
    if told.low is not None and told.high is not None and not told.low < told.high:
        yield Flaw((*loc, "low"), f"low {told.low:g} is not below high {told.high:g}", "swap them")


def _settings_against_site(loop: LoopTable, site: SiteLimitsTable) -> Iterator[Flaw]:
    if _ALLOWED_ORDER.index(loop.write_settings) > _ALLOWED_ORDER.index(site.write_settings):
        fault = f'"{loop.write_settings}" is more than the site allows ("{site.write_settings}")'
        yield Flaw(("write_settings",), fault, f'write "{site.write_settings}"')
    for name in SETTINGS:
        told: SettingLimitTable | None = getattr(loop.settings_limits, name)
        ceiling: SettingLimitTable | None = getattr(site.settings_limits.get(loop.block), name, None)
        if told is None:
            continue
        loc = ("settings_limits", name)
        if told.factor_at_most is not None and not told.factor_at_most <= site.factor_at_most:
            fault = f"{told.factor_at_most:g} is more than the site's factor_at_most {site.factor_at_most:g}"
            yield Flaw(
                (*loc, "factor_at_most"), fault, "write a smaller factor; the site's limits can't be widened here"
            )
        if ceiling is None:
            continue
        if told.low is not None and ceiling.low is not None and not told.low >= ceiling.low:
            fault = f"{told.low:g} is below the site's floor {ceiling.low:g}"
            yield Flaw((*loc, "low"), fault, "write the site's floor or more")
        if told.high is not None and ceiling.high is not None and not told.high <= ceiling.high:
            fault = f"{told.high:g} is above the site's ceiling {ceiling.high:g}"
            yield Flaw((*loc, "high"), fault, "write the site's ceiling or less")


def not_below(low_key: str, high_key: str, low: float, high: float) -> str:
    """Two bounds in the wrong order, in words."""
    return f"{low_key} {low:g} is not below {high_key} {high:g}"
