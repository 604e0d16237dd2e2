"""From tables that were found right to the frozen types of the pure rooms, in percent of span."""

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any
from urllib.parse import urlsplit

from autotune.config.digest import block_digest, loop_digest
from autotune.config.node_places import NodePlace
from autotune.config.numbers import Table
from autotune.config.places import SETTINGS, Place
from autotune.config.schema import ControllerTable, LoopTable
from autotune.config.schema_opc_ua import OpcUaControllerTable
from autotune.config.schema_settings import BlockTable, SettingLimitTable
from autotune.config.schema_site import SiteLimitsTable
from autotune.config.test_plan import timed_limits
from autotune.config.types import (
    AddressRange,
    Controller,
    GuardCodes,
    LoopConfig,
    ModbusEndpoint,
    ModeCodes,
    OpcUaEndpoint,
)
from autotune.confirmed_write.plan import FieldLimit
from autotune.experiment.plan import ConvergencePlan, RelayPlan
from autotune.loop.limits import Limits, WatchLimit
from autotune.loop.mode import LoopMode
from autotune.loop.settings import BlockDescription, FieldRange
from autotune.loop.span import Span

_OPC_UA_KEYS = {
    "request_timeout_s",
    "connect_gap_s",
    "channel_lifetime_s",
    "security",
    "server_thumbprint",
    "server_name",
    "user",
    "password_from",
    "user_certificate",
    "user_key",
    "source_time_is_sampling",
}
_OPC_UA_PORT = 4840  # OPC 10000-6, 7.2
_ENDPOINT_KEYS = {
    "request_timeout_s",
    "connect_gap_s",
    "registers_per_read",
    "registers_per_write",
    "read_gap_registers",
}
_SPAN_RATES = {
    "pv_rate_eu_per_s": "pv_rate_pct_per_s",
    "pv_deviation_eu": "pv_deviation_pct",
    "drift_eu_per_s": "drift_pct_per_s",
}


def controller_from(name: str, table: ControllerTable, never_written: tuple[AddressRange, ...]) -> Controller:
    """A controller with its endpoint; what its table leaves out keeps the endpoint's own defaults."""
    endpoint = ModbusEndpoint(
        host=table.host,
        port=table.port,
        device_id=table.device_id,
        never_written=never_written,
        **_told(table, _ENDPOINT_KEYS),
    )
    return Controller(name, endpoint, table.plc_scan_s, table.io_time_s)


def opc_ua_controller_from(
    name: str, table: OpcUaControllerTable, never_written: tuple[str, ...], folder: Path, data_dir: Path
) -> Controller:
    """The same for an OPC UA server; ``folder`` is what file names in the table are relative to."""
    parts = urlsplit(table.url)
    host = f"[{parts.hostname}]" if ":" in (parts.hostname or "") else parts.hostname
    policy: dict[str, Any] = {} if table.security_policy is None else {"policy": table.security_policy}
    endpoint = OpcUaEndpoint(
        url=f"opc.tcp://{host}:{parts.port or _OPC_UA_PORT}{parts.path}",
        never_written=never_written,
        folder=folder,
        pki_dir=data_dir / "pki",
        **policy,
        **_told(table, _OPC_UA_KEYS),
    )
    return Controller(name, endpoint, table.plc_scan_s, table.io_time_s)


def block_from(table: BlockTable) -> BlockDescription:
    """A block's description; what the file doesn't tell is absent, never assumed to be there."""
    told = _told(table, {"derivative_on", "derivative_kind", "sign", "algorithm", "anti_windup"})
    for name in SETTINGS:
        held = getattr(table, f"{name}_range")
        if held is not None:
            told[f"{name}_range"] = FieldRange(held.low, held.high, held.resolution)
    if table.panel_labels is not None:
        gain, integral, derivative = table.panel_labels
        told["panel_labels"] = (gain, integral, derivative)
    return BlockDescription(
        form=table.form,
        gain_kind=table.gain_kind,
        gain_per=table.gain_per,
        integral_kind=table.integral_kind,
        integral_off=table.integral_off,
        derivative_off=table.derivative_off,
        has_derivative=table.has_derivative,
        derivative_filter_ratio=table.derivative_filter_ratio,
        pv_filter_time_s=table.pv_filter_time_s,
        setpoint_weight=table.setpoint_weight,
        sp_tracks_in_manual=table.sp_tracks_in_manual,
        scan_s=table.scan_s,
        **told,
    )


def loop_from(
    table: LoopTable,
    controller: Controller,
    block: BlockDescription,
    placed: Sequence[Place | NodePlace],
    site: SiteLimitsTable | None,
) -> LoopConfig:
    """One loop with its limits in percent of span, its ceilings the tightest of loop and site, and its digests."""
    span = table.span
    pv_span = Span(span.pv_low_eu, span.pv_high_eu, span.pv_unit)
    watch = tuple(WatchLimit(one.name, one.low_eu, one.high_eu, one.meaning) for one in table.watch)
    guard = table.guard
    guard_timeout_s = guard.timeout_s if guard is not None else None
    limits = limits_from(table, pv_span, watch, site)
    loop = LoopConfig(
        name=table.name,
        service=table.service,
        controller=controller,
        unit=table.unit,
        action=table.action,
        pv_span=pv_span,
        op_span=Span(span.op_low_eu, span.op_high_eu, span.op_unit),
        op_low_means=span.op_low_means,
        op_high_means=span.op_high_means,
        failure_position=span.failure_position,
        tags=tuple((place.name, place.tag) for place in placed),
        mode_codes=_mode_codes(table),
        guard_codes=GuardCodes(**_told(guard, {"idle", "armed", "gave_back"})) if guard is not None else GuardCodes(),
        has_guard=guard is not None,
        allows_no_guard=table.without_guard == "with consent",
        block=block,
        limits=timed_limits(limits, table.scan_s, controller, guard_timeout_s),
        relay=RelayPlan(**_told(table.relay)),
        convergence=ConvergencePlan(**_told(table.convergence)),
        scan_s=table.scan_s,
        look_around_s=table.baseline.look_around_s,
        baseline_s=table.baseline.hold_s,
        baseline_noise_at_most_pct=table.baseline.noise_at_most_pct,
        baseline_drift_at_most_pct_per_s=table.baseline.drift_at_most_pct_per_s,
        hand_back_within_s=table.hand_back_within_s,
        recover_within_s=table.recover_within_s,
        guard_timeout_s=guard_timeout_s,
        protects=table.protects,
        watch=watch,
        field_limits=_field_limits(table, site),
        write_in_manual=table.write_settings != "in automatic",
        is_writing_settings_allowed=table.write_settings != "never",
        proves_writable=table.prove_writable,
    )
    return _with_digests(loop)


def limits_from(table: LoopTable, pv_span: Span, watch: tuple[WatchLimit, ...], site: SiteLimitsTable | None) -> Limits:
    """The limits of a test in percent of span, the site's ceilings on the output worked in."""
    told = _told(table.limits)
    for key, key_pct in _SPAN_RATES.items():
        if key in told:
            told[key_pct] = pv_span.delta_to_pct(told.pop(key))
    told["pv_low_pct"] = pv_span.to_pct(told.pop("pv_low_eu"))
    told["pv_high_pct"] = pv_span.to_pct(told.pop("pv_high_eu"))
    if site is not None:
        told["op_low_pct"] = max(told["op_low_pct"], site.op_low_pct)
        told["op_high_pct"] = min(told["op_high_pct"], site.op_high_pct)
    return Limits(**told, watch=watch)


def _field_limits(table: LoopTable, site: SiteLimitsTable | None) -> tuple[tuple[str, FieldLimit], ...]:
    ceilings = site.settings_limits.get(table.block) if site is not None else None
    largest = site.factor_at_most if site is not None else None
    limits: list[tuple[str, FieldLimit]] = []
    for name in SETTINGS:
        told: SettingLimitTable = getattr(table.settings_limits, name) or SettingLimitTable()
        ceiling: SettingLimitTable = getattr(ceilings, name, None) or SettingLimitTable()
        low = _tightest(max, told.low, ceiling.low)
        high = _tightest(min, told.high, ceiling.high)
        factor = _tightest(min, told.factor_at_most, ceiling.factor_at_most, largest)
        if (low, high, factor) != (None, None, None):
            limits.append((name, FieldLimit(low, high, factor)))
    return tuple(limits)


def _tightest(pick: Any, *bounds: float | None) -> float | None:
    known = [bound for bound in bounds if bound is not None]
    return float(pick(known)) if known else None


def _mode_codes(table: LoopTable) -> ModeCodes:
    read = _codes(table.mode_codes)
    requestable = (LoopMode.MAN, LoopMode.AUTO, LoopMode.CAS, LoopMode.REMOTE)
    asked = read if table.mode_request_codes is None else _codes(table.mode_request_codes)
    return ModeCodes(
        read=tuple((code, mode) for mode, code in read),
        write=tuple((mode, code) for mode, code in asked if mode in requestable),
    )


def _codes(table: Table) -> list[tuple[LoopMode, int]]:
    return [(LoopMode(name), code) for name, code in table.model_dump(exclude_none=True).items()]


def _with_digests(loop: LoopConfig) -> LoopConfig:
    return replace(loop, digest=loop_digest(loop), block_digest=block_digest(loop.block))


def _told(table: Table, keys: set[str] | None = None) -> dict[str, Any]:
    """What a table says itself, so that what it leaves out keeps the default of the pure type."""
    return {key: getattr(table, key) for key in table.model_fields_set if keys is None or key in keys}
