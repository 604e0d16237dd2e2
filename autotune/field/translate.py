"""Between what a link speaks, tags and raw values, and what the pure rooms speak, percent and commands.  Pure."""

from math import isfinite

from autotune.config.types import DataType, LoopConfig, Tag
from autotune.errors import WriteForbidden
from autotune.experiment.commands import ClaimLoop, DriveOutput, ReleaseLoop, SetMode, SetSetpoint
from autotune.field.codec import held_type, representable
from autotune.field.codec import to_eu as to_eu  # whoever shows raw values finds it beside the rest
from autotune.field.link import RawValue, ReadReport
from autotune.field.write_list import SETTINGS
from autotune.loop.mode import LoopMode
from autotune.loop.quality import Quality
from autotune.loop.sample import GuardState, GuardView, Sample, Stamp, WatchReading
from autotune.loop.settings import BlockFields
from autotune.loop.span import Span

WireCommand = ClaimLoop | SetMode | DriveOutput | SetSetpoint | ReleaseLoop
"""The commands that are one write each; a hand-back is several of them."""

_WATCH = "watch."
_LOOP_TAGS = ("pv", "sp", "op", "mode", "plc_clock_ms", "boot_count")
_GUARD_TAGS = (
    "guard_state",
    "holder",
    "heartbeat_echo",
    "enable",
    "stop",
    "guard_alarm",
    "guard_timeout_s",
    "op_effect_count",
    "op_effect_ms",
)
_AT_AN_END_PCT = 1e-6  # a clipped reading may miss the end of its span by rounding


def sample_tags(loop: LoopConfig) -> tuple[str, ...]:
    """The tags that one sample is made of, as far as the loop has them."""
    guard = _GUARD_TAGS if loop.has_guard else ()
    watch = tuple(_WATCH + entry.name for entry in loop.watch)
    return tuple(name for name in (*_LOOP_TAGS, *guard, *watch) if loop.tag(name) is not None)


def settings_tags(loop: LoopConfig) -> tuple[str, ...]:
    """The tags of the block's settings, as far as the loop has them."""
    return tuple(name for name in SETTINGS if loop.tag(name) is not None)


def to_sample(loop: LoopConfig, report: ReadReport) -> Sample:
    """One reading of the loop, in percent of span.

    PV was sampled between the request, less a scan of the PLC and its I/O time, and the reply; where the
    file gives no scan (clock tags make it unnecessary) none is subtracted.  PV at or beyond an end of
    its span is ``SUSPECT``.  What can't be read is ``None`` and its quality says so.
    """
    controller = loop.controller
    sent = report.sent
    pv_pct, pv_quality = _to_pct(loop, report, "pv", loop.pv_span)
    op_pct, op_quality = _to_pct(loop, report, "op", loop.op_span)
    if pv_pct is not None and pv_quality is Quality.GOOD and not _is_inside(pv_pct):
        pv_quality = Quality.SUSPECT
    return Sample(
        t_s=sent.latest_s,
        taken=Stamp(sent.earliest_s - (controller.plc_scan_s or 0.0) - controller.io_time_s, sent.latest_s),
        pv_pct=pv_pct,
        pv_quality=pv_quality,
        sp_pct=_to_pct(loop, report, "sp", loop.pv_span)[0],
        op_pct=op_pct,
        op_quality=op_quality,
        mode=_to_mode(loop, report),
        guard=_to_guard_view(loop, report) if loop.has_guard else None,
        watch=tuple(_to_watch_reading(loop, report, entry.name) for entry in loop.watch),
        plc_clock_ms=_to_u32(report, "plc_clock_ms"),
        boot_count=_to_u32(report, "boot_count"),
    )


def to_raw(loop: LoopConfig, command: WireCommand) -> dict[str, RawValue]:
    """The tags that carry out one command, in the order of writing where they don't lie side by side.

    A drive writes the sequence last: a guard that saw it before the output would pass on the former output.  A
    claim writes it first and no output: what the guard finds in its mailbox when it arms counts as old, so a number
    that an earlier test left there would hide our first moves.  Raises ``WriteForbidden`` where the loop has
    no such tag, mode code, or a tag that can't hold the number.
    """
    match command:
        case ClaimLoop(token, heartbeat, sequence):
            return {"sequence": sequence, "holder_request": token, "heartbeat": heartbeat}
        case SetMode(mode):
            return {"mode": _to_mode_code(loop, mode)}
        case DriveOutput(op_pct, token, heartbeat, sequence) if loop.has_guard:
            op_request = _from_pct(loop, "op_request", loop.op_span, op_pct)
            return {"holder_request": token, "heartbeat": heartbeat, "op_request": op_request, "sequence": sequence}
        case DriveOutput(op_pct):
            return {"op": _from_pct(loop, "op", loop.op_span, op_pct)}
        case SetSetpoint(sp_pct):
            return {"sp": _from_pct(loop, "sp", loop.pv_span, sp_pct)}
        case ReleaseLoop():
            return {"holder_request": 0}


def to_block_fields(loop: LoopConfig, report: ReadReport) -> BlockFields | None:
    """The settings as the controller holds them, in its own units; ``None`` when one of them is no number."""
    fields = {name: _read_eu(loop, report, name) for name in SETTINGS}
    gain, integral, derivative = fields["gain"], fields["integral"], fields["derivative"]
    if gain is None or integral is None or (derivative is None and loop.tag("derivative") is not None):
        return None
    return BlockFields(gain, integral, derivative)


def settings_to_raw(loop: LoopConfig, fields: BlockFields) -> dict[str, RawValue]:
    """Settings in the controller's own units as the nearest raw values that its tags hold.

    Raises ``WriteForbidden`` where a field is not finite, or the loop has no tag for it or can't hold it.
    """
    wanted = {"gain": fields.gain, "integral": fields.integral, "derivative": fields.derivative}
    return {
        name: representable(_required_tag(loop, name), field) for name, field in wanted.items() if field is not None
    }


def field_to_raw(loop: LoopConfig, name: str, number: float) -> RawValue:
    """One settings field in the controller's own unit as the nearest raw value that its tag holds.

    Raises ``WriteForbidden`` where the loop has no such tag or it can't hold the number.
    """
    return representable(_required_tag(loop, name), number)


def held_fields(loop: LoopConfig, fields: BlockFields) -> BlockFields:
    """The numbers that the controller's registers will hold once ``fields`` are written, in the same units.

    Raises ``WriteForbidden`` as ``settings_to_raw`` does.
    """
    held = {name: to_eu(_required_tag(loop, name), raw) for name, raw in settings_to_raw(loop, fields).items()}
    return BlockFields(held["gain"], held["integral"], held.get("derivative"))


def _is_inside(reading_pct: float) -> bool:
    return _AT_AN_END_PCT < reading_pct < 100.0 - _AT_AN_END_PCT


def _required_tag(loop: LoopConfig, name: str) -> Tag:
    tag = loop.tag(name)
    if tag is None:
        raise WriteForbidden(f"{loop.name} has no tag {name!r}")
    return tag


def _from_pct(loop: LoopConfig, name: str, span: Span, reading_pct: float) -> RawValue:
    return representable(_required_tag(loop, name), span.to_eu(reading_pct))


def _to_mode_code(loop: LoopConfig, mode: LoopMode) -> RawValue:
    code = dict(loop.mode_codes.write).get(mode)
    if code is None:
        raise WriteForbidden(f"{loop.name}: the file gives no code to request mode {mode.value}")
    return bool(code) if held_type(_required_tag(loop, "mode")) is DataType.BOOL else code


def _read_eu(loop: LoopConfig, report: ReadReport, name: str) -> float | None:
    tag, reading = loop.tag(name), report.readings.get(name)
    if tag is None or reading is None or reading.raw is None:
        return None
    reading_eu = to_eu(tag, reading.raw)
    return reading_eu if isfinite(reading_eu) else None


def _to_pct(loop: LoopConfig, report: ReadReport, name: str, span: Span) -> tuple[float | None, Quality]:
    reading_eu = _read_eu(loop, report, name)
    if reading_eu is None:
        return None, Quality.BAD
    return span.to_pct(reading_eu), report.readings[name].quality


def _to_u32(report: ReadReport, name: str) -> int | None:
    """An unsigned 32-bit number; a controller without unsigned types shows its upper half as negative."""
    reading = report.readings.get(name)
    return None if reading is None or reading.raw is None else int(reading.raw) % 2**32


def _to_bool(report: ReadReport, name: str) -> bool | None:
    reading = report.readings.get(name)
    return None if reading is None or reading.raw is None else bool(reading.raw)


def _to_mode(loop: LoopConfig, report: ReadReport) -> LoopMode:
    reading = report.readings.get("mode")
    if reading is None or reading.raw is None:
        return LoopMode.NOT_KNOWN
    return next((mode for code, mode in loop.mode_codes.read if code == reading.raw), LoopMode.NOT_KNOWN)


def _to_guard_state(loop: LoopConfig, report: ReadReport) -> GuardState:
    codes = loop.guard_codes
    states = {codes.idle: GuardState.IDLE, codes.armed: GuardState.ARMED, codes.gave_back: GuardState.GAVE_BACK}
    code = _to_u32(report, "guard_state")
    return GuardState.NOT_KNOWN if code is None else states.get(code, GuardState.NOT_KNOWN)


def _to_guard_view(loop: LoopConfig, report: ReadReport) -> GuardView:
    return GuardView(
        state=_to_guard_state(loop, report),
        holder=_to_u32(report, "holder"),
        heartbeat_echo=_to_u32(report, "heartbeat_echo"),
        is_enabled=_to_bool(report, "enable"),
        is_stop_pressed=_to_bool(report, "stop"),
        is_alarm=_to_bool(report, "guard_alarm"),
        timeout_s=_read_eu(loop, report, "guard_timeout_s"),
        op_effect_count=_to_u32(report, "op_effect_count"),
        op_effect_ms=_to_u32(report, "op_effect_ms"),
    )


def _to_watch_reading(loop: LoopConfig, report: ReadReport, name: str) -> WatchReading:
    reading_eu = _read_eu(loop, report, _WATCH + name)
    quality = Quality.BAD if reading_eu is None else report.readings[_WATCH + name].quality
    return WatchReading(name, reading_eu, quality)
