"""The frozen list of what may ever be written, built once from a loop's configuration.  Pure.

Whoever asks, a link writes nothing that isn't here: not another tag, not another address, not a
number outside its range.
"""

from dataclasses import dataclass

from autotune.config.types import AddressRange, Endpoint, LoopConfig, ModbusEndpoint, ModbusTag, RegisterTable, Tag
from autotune.errors import WriteForbidden
from autotune.field.codec import check_raw, held_type, nearest_held, nearest_within, width
from autotune.field.link import RawValue
from autotune.loop.mode import ControlAction
from autotune.loop.settings import BlockDescription, FieldRange, SignConvention

SETTINGS = ("gain", "integral", "derivative")
"""The tags of a block's settings, in the order of ``BlockFields``."""

_OUTPUTS = ("op", "op_request")
_COUNTERS = ("heartbeat", "sequence")
_WRITABLE_TABLES = (RegisterTable.COIL, RegisterTable.HOLDING)


@dataclass(frozen=True, slots=True)
class Permit:
    """One tag that may be written: ``low <= raw <= high``, or ``raw`` among the ``others``."""

    name: str
    tag: Tag
    low: float | None
    high: float | None
    others: tuple[RawValue, ...] = ()
    barred_by: AddressRange | None = None

    def allows(self, raw: RawValue) -> bool:
        """Whether ``raw`` is in range; written so that NaN is not."""
        if raw in self.others:
            return True
        return self.low is not None and self.high is not None and self.low <= raw <= self.high

    def in_words(self) -> str:
        """The raw values allowed, for a person."""
        allowed = [] if self.low is None else [f"{self.low} .. {self.high}"]
        return " or ".join(allowed + [str(other) for other in self.others])


@dataclass(frozen=True, slots=True)
class WriteList:
    """All permits of one loop.  A range that the endpoint never lets write wins over every permit."""

    loop: str
    permits: tuple[Permit, ...]

    def check(self, name: str, tag: Tag, raw: RawValue) -> None:
        """Raise ``WriteForbidden`` unless ``name`` at exactly this ``tag`` may be set to ``raw``.

        The text says which rule forbids it; nothing may be sent then.
        """
        permit = next((permit for permit in self.permits if permit.name == name), None)
        if permit is None:
            raise WriteForbidden(f"{self.loop}: {name!r} is not on the write list")
        if permit.tag != tag:
            raise WriteForbidden(f"{self.loop}: {name!r} is on the write list at another place than {tag}")
        if permit.barred_by is not None:
            barred = permit.barred_by
            raise WriteForbidden(
                f"{self.loop}: {name!r} lies in {barred.table.value} {barred.first} .. {barred.last} "
                "(counted from 0), which is never written"
            )
        try:
            check_raw(tag, raw)
        except WriteForbidden as fault:
            raise WriteForbidden(f"{self.loop}: {name!r}: {fault}") from fault
        held = raw if isinstance(raw, int) else nearest_held(held_type(tag), raw)
        if held is None or not permit.allows(held):
            raise WriteForbidden(f"{self.loop}: {name!r} may be {permit.in_words()} raw, not {raw!r}")


def build_write_list(loop: LoopConfig) -> WriteList:
    """The permits of one loop: output, setpoint, mode, the guard's strobes, and its settings where allowed.

    The output keeps to the loop's own limits, the setpoint to its span, a mode to the declared codes, a
    setting to the range and the "off" value of its field.  A bound that the tag can't hold is moved to
    the nearest number that it can.  The operator's own tags, ``enable`` and ``stop``, are never here.
    """
    permits = [
        *(_in_span(loop, name, loop.limits.op_low_pct, loop.limits.op_high_pct) for name in _OUTPUTS),
        _in_span(loop, "sp", 0.0, 100.0),
        _mode(loop),
        _whole(loop, "holder_request", 2**32 - 1),
        *(_whole(loop, name, 2**16 - 1) for name in _COUNTERS),
    ]
    if loop.is_writing_settings_allowed:
        permits += [_setting(loop, name) for name in SETTINGS]
    return WriteList(loop.name, tuple(permit for permit in permits if permit is not None))


def _permit(
    loop: LoopConfig, name: str, tag: Tag, low: float | None, high: float | None, others: tuple[RawValue, ...] = ()
) -> Permit | None:
    if isinstance(tag, ModbusTag) and tag.table not in _WRITABLE_TABLES:
        return None
    return Permit(name, tag, low, high, others, _barred_by(loop.controller.endpoint, tag))


def _barred_by(endpoint: Endpoint, tag: Tag) -> AddressRange | None:
    if not (isinstance(endpoint, ModbusEndpoint) and isinstance(tag, ModbusTag)):
        return None
    last = tag.address + width(tag) - 1
    return next(
        (
            barred
            for barred in endpoint.never_written
            if barred.table is tag.table and barred.first <= last and tag.address <= barred.last
        ),
        None,
    )


def _in_span(loop: LoopConfig, name: str, low_pct: float, high_pct: float) -> Permit | None:
    tag = loop.tag(name)
    if tag is None:
        return None
    span = loop.pv_span if name == "sp" else loop.op_span
    ends = sorted((nearest_within(tag, span.to_eu(low_pct)), nearest_within(tag, span.to_eu(high_pct))))
    return _permit(loop, name, tag, ends[0], ends[1])


def _mode(loop: LoopConfig) -> Permit | None:
    tag = loop.tag("mode")
    if tag is None:
        return None
    return _permit(loop, "mode", tag, None, None, tuple(code for _, code in loop.mode_codes.write))


def _whole(loop: LoopConfig, name: str, high: int) -> Permit | None:
    tag = loop.tag(name)
    return None if tag is None else _permit(loop, name, tag, 0, high)


def _setting(loop: LoopConfig, name: str) -> Permit | None:
    tag = loop.tag(name)
    if tag is None:
        return None
    field_range, off = _range_and_off(loop.block, name)
    low, high = field_range.low, field_range.high
    if name == "gain" and loop.block.sign is SignConvention.SIGNED_GAIN and loop.action is ControlAction.DIRECT:
        low, high = -high, -low
    ends = sorted((nearest_within(tag, low), nearest_within(tag, high)))
    others = () if off is None else (nearest_within(tag, off),)
    return _permit(loop, name, tag, ends[0], ends[1], others)


def _range_and_off(block: BlockDescription, name: str) -> tuple[FieldRange, float | None]:
    return {
        "gain": (block.gain_range, None),
        "integral": (block.integral_range, block.integral_off),
        "derivative": (block.derivative_range, block.derivative_off),
    }[name]
