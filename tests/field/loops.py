"""A loop of the fruit-juice skid for the tests of the wire: PV 0 .. 150 degC, OP 0 .. 100 %, REAL registers."""

from collections.abc import Mapping
from dataclasses import replace

from autotune.config.types import (
    Controller,
    DataType,
    GuardCodes,
    LoopConfig,
    ModbusEndpoint,
    ModbusTag,
    ModeCodes,
    RegisterTable,
    Tag,
)
from autotune.experiment.plan import ConvergencePlan, RelayPlan
from autotune.loop.limits import Limits
from autotune.loop.mode import ControlAction, LoopMode
from autotune.loop.settings import BlockDescription, FieldRange, PidForm
from autotune.loop.span import Span

ENDPOINT = ModbusEndpoint(host="127.0.0.1", port=1, device_id=17, request_timeout_s=0.05, connect_gap_s=0.0)


def holding(address: int, kind: DataType) -> ModbusTag:
    """A tag in the holding registers, high word first, not scaled."""
    return ModbusTag(RegisterTable.HOLDING, address, kind)


LOOP_TAGS: dict[str, Tag] = {
    "pv": holding(0, DataType.REAL),
    "sp": holding(2, DataType.REAL),
    "op": holding(4, DataType.REAL),
    "mode": holding(6, DataType.UINT),
    "plc_clock_ms": holding(8, DataType.UDINT),
    "boot_count": holding(10, DataType.UINT),
    "gain": holding(40, DataType.REAL),
    "integral": holding(42, DataType.REAL),
    "derivative": holding(44, DataType.REAL),
}

GUARD_TAGS: dict[str, Tag] = {
    "heartbeat_echo": holding(11, DataType.UINT),
    "guard_state": holding(12, DataType.UINT),
    "guard_alarm": holding(13, DataType.UINT),
    "holder": holding(14, DataType.UDINT),
    "op_effect_ms": holding(16, DataType.UDINT),
    "op_effect_count": holding(18, DataType.UDINT),
    "guard_timeout_s": holding(20, DataType.REAL),
    "enable": holding(22, DataType.UINT),
    "stop": holding(23, DataType.UINT),
    "test_active": holding(24, DataType.UINT),
    "holder_request": holding(30, DataType.UDINT),
    "heartbeat": holding(32, DataType.UINT),
    "sequence": holding(33, DataType.UINT),
    "op_request": holding(34, DataType.REAL),
}

PLAIN = LoopConfig(
    name="TIC-204",
    service="juice outlet temperature",
    controller=Controller("skid PLC", ENDPOINT, plc_scan_s=0.1, io_time_s=0.02),
    unit="pasteuriser",
    action=ControlAction.REVERSE,
    pv_span=Span(0.0, 150.0, "degC"),
    op_span=Span(0.0, 100.0, "%"),
    op_low_means="hot-water valve closed",
    op_high_means="hot-water valve open",
    failure_position="closed",
    tags=tuple(LOOP_TAGS.items()),
    mode_codes=ModeCodes(
        read=((0, LoopMode.MAN), (1, LoopMode.AUTO), (2, LoopMode.CAS)), write=((LoopMode.MAN, 0), (LoopMode.AUTO, 1))
    ),
    guard_codes=GuardCodes(),
    has_guard=False,
    allows_no_guard=True,
    block=BlockDescription(
        form=PidForm.IDEAL,
        gain_range=FieldRange(0.1, 20.0),
        integral_range=FieldRange(1.0, 900.0),
        integral_off=0.0,
        derivative_range=FieldRange(0.0, 300.0),
    ),
    limits=Limits(
        step_up_pct=10.0, step_down_pct=10.0, op_low_pct=20.0, op_high_pct=80.0, pv_low_pct=10.0, pv_high_pct=90.0
    ),
    relay=RelayPlan(step_up_pct=5.0, step_down_pct=5.0),
    convergence=ConvergencePlan(),
    scan_s=0.2,
    look_around_s=2.0,
    baseline_s=10.0,
    baseline_noise_at_most_pct=2.0,
    baseline_drift_at_most_pct_per_s=0.1,
    hand_back_within_s=30.0,
    recover_within_s=60.0,
    guard_timeout_s=None,
    protects="none",
    watch=(),
    field_limits=(),
    write_in_manual=True,
    is_writing_settings_allowed=True,
)
"""Without the PLC's guard."""

GUARDED = replace(PLAIN, tags=(*PLAIN.tags, *GUARD_TAGS.items()), has_guard=True, guard_timeout_s=2.0)
"""With the PLC's guard; its strobes and the output lie side by side in 30 .. 35."""


def with_tags(loop: LoopConfig, changes: Mapping[str, Tag]) -> LoopConfig:
    """The loop with some tags in other places, or more of them."""
    return replace(loop, tags=tuple({**dict(loop.tags), **changes}.items()))


def without_tags(loop: LoopConfig, *names: str) -> LoopConfig:
    """The loop without some of its tags."""
    return replace(loop, tags=tuple((name, tag) for name, tag in loop.tags if name not in names))


def at_endpoint(loop: LoopConfig, endpoint: ModbusEndpoint) -> LoopConfig:
    """The loop in another controller."""
    return replace(loop, controller=replace(loop.controller, endpoint=endpoint))
