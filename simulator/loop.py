"""One loop of the plant as the PLC sees it: field devices, block, guard, mailbox and named tags.

The tags of ``readings`` and ``write`` are the same for every wire; addresses live in ``registers``.
"""

from dataclasses import dataclass, replace
from math import isfinite

from simulator.block import BlockSpec, Mode, Settings
from simulator.controller import PidBlock
from simulator.guard import Guard, GuardInputs, GuardLimits, GuardWrites
from simulator.process import Process, ProcessSpec
from simulator.transmitter import Transmitter, TransmitterSpec
from simulator.valve import Valve, ValveSpec

SETTINGS = ("gain", "integral", "derivative")
MAILBOX_LIMITS = {"holder_request": 2**32 - 1, "heartbeat": 2**16 - 1, "sequence": 2**16 - 1}


class WriteRefused(ValueError):
    """A write that the PLC doesn't take; the text says why, ``is_read_only`` tells no right from no sense."""

    def __init__(self, reason: str, *, is_read_only: bool = False) -> None:
        super().__init__(reason)
        self.is_read_only = is_read_only


@dataclass(frozen=True, slots=True)
class LoopSpec:
    """One loop as engineered, at rest at ``sp_eu`` and ``op_pct``.

    ``int_scales`` maps a mirrored tag to counts per unit.  ``read_only`` names writable tags that this plant
    locks.  ``cascade_master`` feeds the setpoint in CAS; ``input_from`` names the loop whose PV feeds the process.
    """

    name: str
    service: str
    unit: str
    pv_low_eu: float
    pv_high_eu: float
    pv_unit: str
    sp_eu: float
    op_pct: float
    mode: Mode
    process: ProcessSpec
    valve: ValveSpec
    transmitter: TransmitterSpec
    block: BlockSpec
    settings: Settings
    guard: GuardLimits
    watch: tuple[tuple[str, int], ...]
    int_scales: tuple[tuple[str, float], ...]
    read_only: tuple[str, ...]
    is_op_refused_in_auto: bool
    cascade_master: str | None
    input_from: str | None

    def to_pct(self, reading_eu: float) -> float:
        """Engineering units to percent of span."""
        return 100.0 * (reading_eu - self.pv_low_eu) / (self.pv_high_eu - self.pv_low_eu)

    def to_eu(self, reading_pct: float) -> float:
        """Percent of span to engineering units."""
        return self.pv_low_eu + (self.pv_high_eu - self.pv_low_eu) * reading_pct / 100.0


@dataclass(slots=True)
class Mailbox:
    """What a remote holder writes; the guard reads it once per scan."""

    holder_request: int = 0
    heartbeat: int = 0
    sequence: int = 0
    op_request: float = 0.0


class Loop:
    """One loop at rest; ``resting_input_pct`` is what feeds its process there (its own output, or another PV)."""

    def __init__(self, spec: LoopSpec, *, seed: int, resting_input_pct: float) -> None:
        self.spec = spec
        pv_pct = spec.to_pct(spec.sp_eu)
        self.process = Process(spec.process, input_pct=resting_input_pct, output_pct=pv_pct)
        self.valve = Valve(spec.valve, position_pct=spec.op_pct)
        self.transmitter = Transmitter(spec.transmitter, seed=seed, reading_pct=pv_pct)
        self.block = self._block_as_engineered(pv_pct)
        self.guard = Guard(spec.guard)
        self.mailbox = Mailbox()
        self.watch = dict(spec.watch)
        self.fed_pct = resting_input_pct
        self.is_stop_pressed = False
        self.has_cascade_master = spec.cascade_master is not None
        self._enable_presses = 0
        self._is_enable_pressed = False

    @property
    def pv_eu(self) -> float:
        """The reading of the last scan, NaN when the transmitter gives none."""
        return self.spec.to_eu(self.transmitter.reading_pct)

    @property
    def sp_eu(self) -> float:
        """The block's setpoint."""
        return self.spec.to_eu(self.block.sp_pct)

    def press_enable(self) -> None:
        """A person presses the enable button at the plant's own panel once."""
        self._enable_presses += 1

    def restart(self, *, is_cold: bool = False) -> None:
        """The PLC starts again, with guard and mailbox empty.

        After a warm start the block has kept mode, setpoint, output and settings, after a cold one it begins as
        engineered: what IEC 61131-3 says of retained variables.
        """
        if is_cold:
            self.block = self._block_as_engineered(self.process.output_pct)
        self.guard = Guard(self.spec.guard)
        self.mailbox = Mailbox()
        self._enable_presses = 0

    def _block_as_engineered(self, pv_pct: float) -> PidBlock:
        spec = self.spec
        sp_pct = spec.to_pct(spec.sp_eu)
        return PidBlock(spec.block, spec.settings, pv_pct=pv_pct, sp_pct=sp_pct, op_pct=spec.op_pct, mode=spec.mode)

    def scan_guard(self, clock_ms: int) -> None:
        """The guard's part of one PLC scan."""
        # A button is up for at least one scan between two presses, or the second edge would be lost.
        self._is_enable_pressed = self._enable_presses > 0 and not self._is_enable_pressed
        self._enable_presses -= self._is_enable_pressed
        writes = self.guard.scan(
            GuardInputs(
                clock_ms=clock_ms,
                is_enable_pressed=self._is_enable_pressed,
                is_stop_pressed=self.is_stop_pressed,
                holder_request=self.mailbox.holder_request,
                heartbeat=self.mailbox.heartbeat,
                sequence=self.mailbox.sequence,
                op_request_pct=self.mailbox.op_request,
                pv_eu=self.pv_eu,
                is_pv_failed=self.transmitter.is_failed,
                op_pct=self.block.op_pct,
                sp_eu=self.sp_eu,
                mode=self.block.mode,
            )
        )
        self._take(writes)

    def _take(self, writes: GuardWrites) -> None:
        if writes.op_pct is not None:
            self.block.hold(writes.op_pct)
        if writes.sp_eu is not None:
            self.block.sp_pct = self.spec.to_pct(writes.sp_eu)
        if writes.mode is not None:
            self.block.mode = Mode(writes.mode)

    def readings(self) -> dict[str, float]:
        """Every tag of the loop by name, as of the last scan and the last write."""
        block, guard, mailbox, settings = self.block, self.guard, self.mailbox, self.block.settings
        is_failed, is_high, is_low = self.transmitter.is_failed, block.is_at_high_clamp, block.is_at_low_clamp
        return {
            "pv": self.pv_eu,
            "sp": self.sp_eu,
            "op": block.op_pct,
            "mode": block.mode,
            "status": is_failed | is_high << 1 | is_low << 2,
            "heartbeat_echo": guard.heartbeat_echo,
            "guard_state": guard.state,
            "guard_alarm": guard.is_alarm,
            "holder": guard.holder,
            "op_effect_ms": guard.op_effect_ms,
            "op_effect_count": guard.op_effect_count,
            "guard_timeout_s": guard.limits.timeout_s,
            "enable": guard.is_enabled,
            "stop": self.is_stop_pressed,
            "test_active": guard.is_test_active,
            "block_saturated": is_high or is_low,
            "holder_request": mailbox.holder_request,
            "heartbeat": mailbox.heartbeat,
            "sequence": mailbox.sequence,
            "op_request": mailbox.op_request,
            "gain": settings.gain,
            "integral": settings.integral,
            "derivative": settings.derivative,
            **self.watch,
        }

    def write(self, tag: str, number: float) -> None:
        """A remote write of one tag.  Raises ``WriteRefused``; an output in automatic may be ignored instead."""
        self.check_write(tag, number)
        match tag:
            case "sp":
                self.block.sp_pct = self.spec.to_pct(number)
            case "op":
                if self.block.mode is Mode.MAN:
                    self.block.hold(number)
            case "mode":
                self.block.mode = Mode(int(number))
            case "gain" | "integral" | "derivative":
                self.block.settings = replace(self.block.settings, **{tag: number})
            case "op_request":
                self.mailbox.op_request = number
            case _:
                setattr(self.mailbox, tag, int(number))

    def check_write(self, tag: str, number: float) -> None:
        """Whether ``write`` would take this now.  Raises ``WriteRefused`` with the reason."""
        if tag in self.spec.read_only:
            raise WriteRefused(f"{tag} of {self.spec.name} is read-only in this plant", is_read_only=True)
        if tag in MAILBOX_LIMITS:
            if not 0 <= number <= MAILBOX_LIMITS[tag]:
                raise WriteRefused(f"{tag} must lie between 0 and {MAILBOX_LIMITS[tag]}")
        elif tag in SETTINGS:
            try:
                self.block.check_settings(replace(self.block.settings, **{tag: number}))
            except ValueError as reason:
                raise WriteRefused(str(reason)) from reason
        elif tag != "op_request":  # that one takes any bit pattern: the guard judges it
            self._check_block_write(tag, number)

    def _check_block_write(self, tag: str, number: float) -> None:
        match tag:
            case "sp":
                if not self.spec.pv_low_eu <= number <= self.spec.pv_high_eu:
                    raise WriteRefused(f"sp {number} is outside the span of {self.spec.name}")
            case "op":
                if not isfinite(number):
                    raise WriteRefused("op must be finite")
                if self.block.mode is not Mode.MAN and self.spec.is_op_refused_in_auto:
                    raise WriteRefused(f"op of {self.spec.name} can be written in MAN only")
            case "mode":
                modes = (Mode.MAN, Mode.AUTO, Mode.CAS) if self.has_cascade_master else (Mode.MAN, Mode.AUTO)
                if number not in modes:
                    raise WriteRefused(f"{self.spec.name} has no mode {number:g}")
            case _:
                raise WriteRefused(f"{tag} is read-only", is_read_only=True)
