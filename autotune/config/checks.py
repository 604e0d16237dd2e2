"""What can be judged only from several keys together.  Each check yields flaws of one table.

Comparisons read "not low < high", so that nothing undefined passes.
"""

from collections.abc import Iterator

from autotune.config.checks_settings import not_below, settings_flaws
from autotune.config.complaints import Flaw
from autotune.config.places import CLOCK_TAGS, GUARD_NEEDS
from autotune.config.schema import ControllerTable, LoopTable, SpanTable
from autotune.config.schema_opc_ua import OpcUaControllerTable
from autotune.config.schema_settings import BlockTable
from autotune.config.schema_site import SiteLimitsTable

GUARD_SCANS_AT_LEAST = 3
"""The guard must outlast this many of our scans, or one late scan ends a test."""

AnyControllerTable = ControllerTable | OpcUaControllerTable

_NARROWEST_SPAN_EU = 1e-6


def loop_flaws(
    loop: LoopTable, controller: AnyControllerTable | None, block: BlockTable | None, site: SiteLimitsTable | None
) -> Iterator[Flaw]:
    """Faults of one loop, also against its controller, its block and the site where these are known."""
    yield from _whose_loop(loop)
    yield from _ranges(loop)
    yield from _steps(loop, site)
    yield from _relay(loop)
    yield from _times(loop, site)
    yield from _modes(loop)
    yield from _guard(loop, site)
    yield from _watch(loop)
    yield from settings_flaws(loop, block, site)
    if controller is not None:
        yield from _scans(loop, controller)


def controller_flaws(controller: AnyControllerTable, loops: list[LoopTable]) -> Iterator[Flaw]:
    """Faults of a controller that show only beside its loops."""
    untimed = [loop.name for loop in loops if not all(getattr(loop.tags, name) is not None for name in CLOCK_TAGS)]
    if controller.plc_scan_s is None and untimed:
        fault = f"missing, and {', '.join(untimed)} has not all of {', '.join(CLOCK_TAGS)}"
        yield Flaw(("plc_scan_s",), fault, "add plc_scan_s: the PLC's own scan, s, or the three clock tags")


def _whose_loop(loop: LoopTable) -> Iterator[Flaw]:
    if loop.protects != "none":
        fault = f'"{loop.protects}": a safety function depends on this loop'
        yield Flaw(("protects",), fault, "take the loop out of this file; no test is made here on such a loop")
    if loop.actuator != "continuous":
        fault = f'"{loop.actuator}" does not suit a relay test'
        yield Flaw(("actuator",), fault, 'take the loop out; only actuator = "continuous" can be tested')


def _ranges(loop: LoopTable) -> Iterator[Flaw]:
    span, limits = loop.span, loop.limits
    for what in ("pv", "op"):
        low, high = getattr(span, f"{what}_low_eu"), getattr(span, f"{what}_high_eu")
        if not high - low >= _NARROWEST_SPAN_EU:
            fault = not_below(f"{what}_low_eu", f"{what}_high_eu", low, high)
            yield Flaw(("span", f"{what}_low_eu"), fault, "write the reading at 0 % as low and at 100 % as high")
    if not limits.op_low_pct < limits.op_high_pct:
        fault = not_below("op_low_pct", "op_high_pct", limits.op_low_pct, limits.op_high_pct)
        yield Flaw(("limits", "op_low_pct"), fault, "write the lowest OP as low and the highest as high")
    if not limits.pv_low_eu < limits.pv_high_eu:
        fault = not_below("pv_low_eu", "pv_high_eu", limits.pv_low_eu, limits.pv_high_eu)
        yield Flaw(("limits", "pv_low_eu"), fault, "write the lower limit as low")
    yield from _inside_span(span, "pv_low_eu", limits.pv_low_eu)
    yield from _inside_span(span, "pv_high_eu", limits.pv_high_eu)


def _inside_span(span: SpanTable, key: str, bound_eu: float) -> Iterator[Flaw]:
    if span.pv_low_eu < span.pv_high_eu and not span.pv_low_eu <= bound_eu <= span.pv_high_eu:
        fault = f"{bound_eu:g} {span.pv_unit} is outside the span {span.pv_low_eu:g} .. {span.pv_high_eu:g}"
        yield Flaw(("limits", key), fault, "a measurement can't pass the end of its span: write a limit inside it")


def _steps(loop: LoopTable, site: SiteLimitsTable | None) -> Iterator[Flaw]:
    limits = loop.limits
    for key in ("step_up_pct", "step_down_pct"):
        limit_pct, first_pct = getattr(limits, key), getattr(loop.relay, key)
        if not first_pct <= limit_pct:
            fault = f"{first_pct:g} % is more than the limit of {limit_pct:g} %"
            yield Flaw(("relay", key), fault, f"start with at most limits.{key}")
        room_pct = limits.op_high_pct - limits.op_low_pct
        if room_pct > 0 and not limit_pct <= room_pct:
            fault = f"{limit_pct:g} % has no room between op_low_pct and op_high_pct ({room_pct:g} %)"
            yield Flaw(("limits", key), fault, "write a smaller step")
        if site is not None and not limit_pct <= site.step_at_most_pct:
            fault = f"{limit_pct:g} % is more than the site's step_at_most_pct of {site.step_at_most_pct:g} %"
            yield Flaw(("limits", key), fault, "write a smaller step; the site's limits can't be widened here")
    if site is not None and not max(limits.op_low_pct, site.op_low_pct) < min(limits.op_high_pct, site.op_high_pct):
        fault = f"nothing is left between the loop's and the site's {site.op_low_pct:g} .. {site.op_high_pct:g} %"
        yield Flaw(("limits", "op_low_pct"), fault, "write a range inside the site's op_low_pct .. op_high_pct")


def _relay(loop: LoopTable) -> Iterator[Flaw]:
    relay, limits = loop.relay, loop.limits
    for key in ("hysteresis_pct", "hysteresis_at_least_pct"):
        half_pct = getattr(relay, key)
        if half_pct is None:
            continue
        if relay.wanted_swing_pct is not None and not half_pct < relay.wanted_swing_pct:
            fault = f"{half_pct:g} % is not below wanted_swing_pct {relay.wanted_swing_pct:g} %"
            yield Flaw(("relay", key), fault, "write less hysteresis or a wider swing, both in percent of PV span")
        room_pct = 50 * (limits.pv_high_eu - limits.pv_low_eu) / max(_pv_width_eu(loop), _NARROWEST_SPAN_EU)
        if room_pct > 0 and not half_pct < room_pct:
            fault = f"{half_pct:g} % fills the permitted PV range (half of it is {room_pct:g} %)"
            yield Flaw(("relay", key), fault, "write less hysteresis, in percent of PV span")
    if relay.blanking_s is not None and not relay.blanking_s < limits.switch_within_s:
        fault = f"{relay.blanking_s:g} s is not below limits.switch_within_s {limits.switch_within_s:g} s"
        yield Flaw(("relay", "blanking_s"), fault, "write a shorter time")


def _times(loop: LoopTable, site: SiteLimitsTable | None) -> Iterator[Flaw]:
    limits, baseline = loop.limits, loop.baseline
    if not limits.switch_within_s < limits.test_within_s:
        fault = f"{limits.switch_within_s:g} s is not below test_within_s {limits.test_within_s:g} s"
        yield Flaw(("limits", "switch_within_s"), fault, "a test needs several switches: write a shorter time, in s")
    before_s = baseline.look_around_s + baseline.hold_s
    if not before_s < limits.test_within_s:
        fault = f"look_around_s and hold_s take {before_s:g} s of test_within_s {limits.test_within_s:g} s"
        yield Flaw(("baseline", "hold_s"), fault, "write a shorter look or a longer test, in s")
    if site is not None and site.test_within_s is not None and not limits.test_within_s <= site.test_within_s:
        fault = f"{limits.test_within_s:g} s is more than the site's {site.test_within_s:g} s"
        yield Flaw(("limits", "test_within_s"), fault, "write a shorter test; the site's limits can't be widened here")
    for loc, time_s in (
        (("limits", "switch_within_s"), limits.switch_within_s),
        (("baseline", "hold_s"), baseline.hold_s),
    ):
        if not time_s >= GUARD_SCANS_AT_LEAST * loop.scan_s:
            fault = f"{time_s:g} s holds fewer than {GUARD_SCANS_AT_LEAST} scans of {loop.scan_s:g} s"
            yield Flaw(loc, fault, "write a longer time or a shorter scan_s")
    told_cycles = loop.convergence.model_dump(exclude_unset=True)
    needed = told_cycles.get("cycles_to_agree", 3) + told_cycles.get("cycles_to_discard", 1)
    at_most = limits.cycles_at_most
    if at_most is not None and not needed <= at_most:
        fault = f"{at_most} cycles are fewer than cycles_to_discard and cycles_to_agree need ({needed})"
        yield Flaw(("limits", "cycles_at_most"), fault, "allow more cycles or ask for fewer to agree")


def _modes(loop: LoopTable) -> Iterator[Flaw]:
    for key, table in (("mode_codes", loop.mode_codes), ("mode_request_codes", loop.mode_request_codes)):
        seen: dict[int, str] = {}
        for name, code in (table.model_dump(exclude_none=True) if table is not None else {}).items():
            if code in seen:
                yield Flaw((key, name), f"{code} is already the code of {seen[code]}", "give every mode its own code")
            seen.setdefault(code, name)
    codes, requests = loop.mode_codes, loop.mode_request_codes
    if codes.AUTO is None and codes.CAS is None and codes.REMOTE is None:
        yield Flaw(("mode_codes", "AUTO"), "no mode but manual can be told", "add AUTO = the code of automatic")
    if requests is not None:
        for name, code in requests.model_dump(exclude_none=True).items():
            if getattr(codes, name) is None:
                fault = f"{name} can be requested with {code}, but not read back"
                yield Flaw(("mode_request_codes", name), fault, f"add {name} to [loop.mode_codes]")


def _guard(loop: LoopTable, site: SiteLimitsTable | None) -> Iterator[Flaw]:
    if loop.guard is None:
        if loop.without_guard == "refused":
            remedy = 'describe the guard in [loop.guard], or write without_guard = "with consent"'
            yield Flaw(("guard",), "missing: the PLC itself would not give the loop back", remedy)
        elif site is not None and site.without_guard == "refused":
            remedy = "add the guard to the PLC and [loop.guard] here, or change the site's limits"
            yield Flaw(("without_guard",), "the site's limits refuse tests without a guard", remedy)
        return
    for name in GUARD_NEEDS:
        if getattr(loop.tags, name) is None:
            yield Flaw(("tags", name), "missing, though [loop.guard] is there", f"add the tag {name} to [loop.tags]")
    told = loop.guard.model_dump(include={"idle", "armed", "gave_back"}, exclude_none=True)
    codes = {"idle": 0, "armed": 1, "gave_back": 2} | told
    if len(set(codes.values())) < len(codes):
        fault = "two states have the same code ({})".format(", ".join(f"{k} = {v}" for k, v in codes.items()))
        yield Flaw(("guard",), fault, "give idle, armed and gave_back different codes")
    if not loop.guard.timeout_s >= GUARD_SCANS_AT_LEAST * loop.scan_s:
        fault = f"{loop.guard.timeout_s:g} s is shorter than {GUARD_SCANS_AT_LEAST} scans of {loop.scan_s:g} s"
        yield Flaw(("guard", "timeout_s"), fault, "write a longer timeout or a shorter scan_s, in s")


def _watch(loop: LoopTable) -> Iterator[Flaw]:
    seen: set[str] = set()
    for number, watch in enumerate(loop.watch):
        if watch.name in seen:
            yield Flaw(("watch", number, "name"), f'"{watch.name}" is told twice', "give it another name")
        seen.add(watch.name)
        if not watch.low_eu <= watch.high_eu:
            fault = f"low_eu {watch.low_eu:g} is above high_eu {watch.high_eu:g}"
            yield Flaw(("watch", number, "low_eu"), fault, "write the lower bound as low_eu")


def _scans(loop: LoopTable, controller: AnyControllerTable) -> Iterator[Flaw]:
    timeout_s = controller.request_timeout_s if controller.request_timeout_s is not None else 0.5
    patience_s = loop.guard.timeout_s if loop.guard is not None else None
    if patience_s is not None and not timeout_s < patience_s:
        fault = f"request_timeout_s {timeout_s:g} s of {loop.controller} is not below the guard's {patience_s:g} s"
        yield Flaw(
            ("guard", "timeout_s"), fault, "one missed answer must not outlast the guard: shorten request_timeout_s"
        )
    if not timeout_s <= 10 * loop.scan_s:
        fault = f"one missed answer (request_timeout_s {timeout_s:g} s) takes more than 10 scans of {loop.scan_s:g} s"
        yield Flaw(("scan_s",), fault, "shorten request_timeout_s or scan more slowly")
    if not loop.scan_s <= loop.limits.switch_within_s / 10:
        fault = f"a scan of {loop.scan_s:g} s is too slow for switch_within_s {loop.limits.switch_within_s:g} s"
        yield Flaw(("scan_s",), fault, "scan at least ten times between two switches, in s")


def _pv_width_eu(loop: LoopTable) -> float:
    return loop.span.pv_high_eu - loop.span.pv_low_eu
