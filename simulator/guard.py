"""The PLC's own guard of one loop: it lends the loop to a remote holder and takes it back.

One call of ``scan`` per PLC scan, after the PID block and before the output card.  Nothing here
knows a clock, a wire or a block: everything comes in as ``GuardInputs`` and leaves as ``GuardWrites``
and the guard's own registers, so that the same logic stands in IEC 61131-3 Structured Text.

    idle       enabled, not stopped, a token asks               -> armed; the loop is remembered as found
    armed      token withdrawn                                  -> idle; nothing is written
    armed      heartbeat late, PV out of limits, stop pressed   -> gave back
    gave back  token withdrawn and enable pressed afresh        -> idle

Giving back writes output, setpoint and mode as found, but only while the block is in manual and the
output is still the one passed on last: otherwise a person has the loop, and nothing is written.  Onto a failed PV
the mode is left in manual.  Comparisons are written so that NaN gives back and passes nothing on.
"""

from dataclasses import dataclass
from enum import IntEnum

MODE_MAN = 0
"""Code of manual in the mode register."""
CLOCK_MODULUS = 2**32
"""The PLC clock counts milliseconds in an unsigned 32-bit register."""
SEQUENCE_MODULUS = 2**16
"""Sequence numbers live in an unsigned 16-bit register; the newer of two is ahead by less than half of it."""


class GuardState(IntEnum):
    """Codes of the guard's state register."""

    IDLE = 0
    ARMED = 1
    GAVE_BACK = 2


@dataclass(frozen=True, slots=True)
class GuardLimits:
    """What the plant engineer set: the guard's own output and PV limits, its timeout and how long enable lasts."""

    op_low_pct: float
    op_high_pct: float
    pv_low_eu: float
    pv_high_eu: float
    timeout_s: float = 2.0
    enable_s: float = 900.0


@dataclass(frozen=True, slots=True)
class GuardInputs:
    """What the guard sees in one scan: the panel, the holder's mailbox and the block."""

    clock_ms: int
    is_enable_pressed: bool
    is_stop_pressed: bool
    holder_request: int
    heartbeat: int
    sequence: int
    op_request_pct: float
    pv_eu: float
    is_pv_failed: bool
    op_pct: float
    sp_eu: float
    mode: int


@dataclass(frozen=True, slots=True)
class GuardWrites:
    """What the guard writes into the block in this scan, in this order; ``None`` is not written."""

    op_pct: float | None = None
    sp_eu: float | None = None
    mode: int | None = None


NOTHING = GuardWrites()


class Guard:
    """The guard of one loop.  Its public attributes are its registers.  A new one is a cold start."""

    def __init__(self, limits: GuardLimits) -> None:
        self.limits = limits
        self.state = GuardState.IDLE
        self.is_alarm = False
        self.holder = 0
        self.heartbeat_echo = 0
        self.is_enabled = False
        self.is_test_active = False
        self.op_effect_ms = 0
        self.op_effect_count = 0
        self._was_enable_pressed = False
        self._is_first_scan = True
        self._enabled_at_ms = 0
        self._heartbeat = 0
        self._heartbeat_at_ms = 0
        self._sequence = 0
        self._found_op_pct = 0.0
        self._found_sp_eu = 0.0
        self._found_mode = MODE_MAN
        self._left_op_pct = 0.0
        self._has_passed_on = False

    def scan(self, seen: GuardInputs) -> GuardWrites:
        """One PLC scan.  Returns what has to be written into the block now."""
        self.heartbeat_echo = seen.heartbeat
        is_enable_edge = seen.is_enable_pressed and not self._was_enable_pressed
        self._was_enable_pressed = seen.is_enable_pressed
        if self._is_first_scan:
            self._is_first_scan = False
            return NOTHING
        self._keep_permission(seen, is_enable_edge)
        match self.state:
            case GuardState.IDLE:
                self._arm_if_asked(seen)
                return NOTHING
            case GuardState.ARMED:
                return self._watch(seen)
            case GuardState.GAVE_BACK:
                if is_enable_edge and seen.holder_request == 0:
                    self.state = GuardState.IDLE
                    self.is_alarm = False
                    self._grant(seen)
                return NOTHING

    def _keep_permission(self, seen: GuardInputs, is_enable_edge: bool) -> None:
        if is_enable_edge and self.state is not GuardState.GAVE_BACK:
            self._grant(seen)
        if self.is_enabled and _elapsed_s(self._enabled_at_ms, seen.clock_ms) > self.limits.enable_s:
            self.is_enabled = False

    def _grant(self, seen: GuardInputs) -> None:
        self.is_enabled = True
        self._enabled_at_ms = seen.clock_ms

    def _arm_if_asked(self, seen: GuardInputs) -> None:
        if not self.is_enabled or seen.is_stop_pressed or seen.holder_request == 0:
            return
        self.state = GuardState.ARMED
        self.holder = seen.holder_request
        self.is_test_active = True
        self._found_op_pct = self._left_op_pct = seen.op_pct
        self._found_sp_eu = seen.sp_eu
        self._found_mode = seen.mode
        self._has_passed_on = False
        self._sequence = seen.sequence
        self._heartbeat = seen.heartbeat
        self._heartbeat_at_ms = seen.clock_ms

    def _watch(self, seen: GuardInputs) -> GuardWrites:
        if not self._has_passed_on and seen.mode != MODE_MAN:
            # Automatic still moves the output: as found is where it stands when manual begins.
            self._found_op_pct = self._left_op_pct = seen.op_pct
        if seen.holder_request == self.holder and seen.heartbeat != self._heartbeat:
            self._heartbeat = seen.heartbeat
            self._heartbeat_at_ms = seen.clock_ms
        if seen.holder_request == 0:
            self._let_go(GuardState.IDLE)
            return NOTHING
        is_heartbeat_late = not _elapsed_s(self._heartbeat_at_ms, seen.clock_ms) <= self.limits.timeout_s
        is_pv_inside = self.limits.pv_low_eu <= seen.pv_eu <= self.limits.pv_high_eu
        if is_heartbeat_late or not is_pv_inside or seen.is_stop_pressed:
            return self._give_back(seen)
        return self._pass_on(seen)

    def _pass_on(self, seen: GuardInputs) -> GuardWrites:
        if seen.holder_request != self.holder or not _is_newer(seen.sequence, self._sequence):
            return NOTHING
        # Used up whatever becomes of it: a request that waits for manual would be a late write.
        self._sequence = seen.sequence
        is_inside = self.limits.op_low_pct <= seen.op_request_pct <= self.limits.op_high_pct
        # An output that is not what was passed on last has been moved by somebody: it is theirs.
        if seen.mode != MODE_MAN or not is_inside or seen.op_pct != self._left_op_pct:
            return NOTHING
        self._left_op_pct = seen.op_request_pct
        self._has_passed_on = True
        self.op_effect_ms = seen.clock_ms
        self.op_effect_count = (self.op_effect_count + 1) % CLOCK_MODULUS
        return GuardWrites(op_pct=seen.op_request_pct)

    def _give_back(self, seen: GuardInputs) -> GuardWrites:
        self._let_go(GuardState.GAVE_BACK)
        self.is_alarm = True
        self.is_enabled = False
        if seen.mode != MODE_MAN or seen.op_pct != self._left_op_pct:
            return NOTHING
        return GuardWrites(self._found_op_pct, self._found_sp_eu, MODE_MAN if seen.is_pv_failed else self._found_mode)

    def _let_go(self, state: GuardState) -> None:
        self.state = state
        self.holder = 0
        self.is_test_active = False


def _elapsed_s(since_ms: int, now_ms: int) -> float:
    return ((now_ms - since_ms) % CLOCK_MODULUS) / 1000.0


def _is_newer(sequence: int, last: int) -> bool:
    return 0 < (sequence - last) % SEQUENCE_MODULUS < SEQUENCE_MODULUS // 2
