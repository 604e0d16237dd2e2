"""The write of settings: ``step(state, event) -> (state, commands)``.

One command is out at a time.  Each field is read back before the next is written; nothing on the wire is
ever taken to mean "not applied".  What fails after a write is put back as found.  The mode is never
fought over: once a person has changed it, nothing more is written, and the end says what was read.  The same
holds once a person has moved the output that we hold in manual; then the loop stays in manual, and that is said loudly.
Settings that are neither the old nor the new ones are left alone, in the mode that they are in, and the
end is loud: automatic isn't given back onto settings that nobody chose.
"""

from collections.abc import Callable
from dataclasses import replace
from typing import Any, assert_never, cast

from autotune.confirmed_write.commands import Command, ReadSettings, SetMode, SetSetpoint, WriteField
from autotune.confirmed_write.confirmation import check_confirmation
from autotune.confirmed_write.events import (
    CancelAsked,
    Event,
    FieldWritten,
    ModeSet,
    ReadFailed,
    SetpointSet,
    SettingsRead,
    TimePassed,
)
from autotune.confirmed_write.limits import changed_fields, check_plan
from autotune.confirmed_write.phases import TRANSITIONS, Phase, Trigger
from autotune.confirmed_write.plan import Confirmation, WritePlan
from autotune.confirmed_write.reasons import (
    AUTO_NOT_SHOWN_SAFE,
    cancelled,
    mode_taken,
    mode_unsuited,
    not_held,
    not_manual,
    not_read,
    output_taken,
    settings_differ,
    unverified,
    write_refused,
)
from autotune.confirmed_write.state import Step, WritePace, WriteState
from autotune.errors import IllegalEvent
from autotune.loop.block_units import FIELD_NAMES, is_same_number, number_of
from autotune.loop.mode import LoopMode
from autotune.loop.outcome import Refusal
from autotune.loop.settings import BlockFields
from autotune.loop.write import WriteOutcome

SP_SAME_PCT = 0.05
"""Setpoints closer than this are one: half a unit in the first decimal of a percent display."""

OP_HELD_PCT = 0.5
"""An output held in manual reads no farther from where it was than this: coarse read-backs of positions included."""


def begin(
    plan: WritePlan,
    confirmation: Confirmation,
    spent: frozenset[Confirmation],
    now_s: float,
    pace: WritePace | None = None,
) -> Step | Refusal:
    """Start the write that was confirmed; the caller adds ``confirmation`` to ``spent`` before anything else.

    Refuses what ``check_plan`` and ``check_confirmation`` refuse; then nothing was read or written.
    """
    refusal = check_plan(plan) or check_confirmation(plan, confirmation, spent, now_s)
    if refusal is not None:
        return refusal
    pace = pace or WritePace()
    planned = WriteState(Phase.PLANNED, plan, confirmation, pace, give_up_s=now_s + pace.within_s)
    return _go(planned, Trigger.CONFIRMED, ReadSettings())


def next_deadline_s(state: WriteState) -> float | None:
    """When ``TimePassed`` is due; ``None`` while a command is out or the write is over."""
    return None if state.is_over else state.read_at_s


def step(state: WriteState, event: Event) -> Step:
    """The next state and what to do.  Raises ``IllegalEvent`` for an event that the phase doesn't await."""
    match event:
        case SettingsRead(mode=LoopMode.NOT_KNOWN):
            return _not_read(replace(state, last_read=event), event.t_s, "the actual mode could not be read")
        case SettingsRead():
            return _settings_read(replace(state, last_read=event), event)
        case ReadFailed():
            return _not_read(state, event.t_s, event.detail)
        case FieldWritten():
            return _field_written(state, event)
        case ModeSet():
            return _mode_set(state, event)
        case SetpointSet() if state.phase in (Phase.RETURNING, Phase.RELEASING):
            return _go(state, Trigger.WAITED, ReadSettings())
        case SetpointSet():
            raise _illegal(state, event)
        case TimePassed():
            if state.read_at_s is None or not event.t_s >= state.read_at_s:
                return _go(state, Trigger.WAITED)
            return _go(state, Trigger.WAITED, ReadSettings(), read_at_s=None)
        case CancelAsked():
            return _go(state, Trigger.WAITED, cancelled_by=event.by)
        case _:
            assert_never(event)


def _settings_read(state: WriteState, reading: SettingsRead) -> Step:
    match state.phase:
        case Phase.CHECKING:
            return _check(state, reading)
        case Phase.TAKING:
            return _take(state, reading)
        case Phase.VERIFYING:
            return _verify(state, reading)
        case Phase.PROVING:
            return _prove(state, reading)
        case Phase.RETURNING | Phase.RELEASING:
            return _return(state, reading)
        case _:
            raise _illegal(state, reading)


def _check(state: WriteState, reading: SettingsRead) -> Step:
    plan = state.plan
    state = replace(state, mode_found=reading.mode, mode_held=reading.mode, sp_found_pct=reading.sp_pct)
    if state.cancelled_by is not None:
        return _refuse(state, cancelled(state))
    if changed_fields(plan.as_found, reading.fields):
        return _refuse(state, settings_differ(plan, reading.fields))
    match reading.mode:
        case LoopMode.MAN:
            return _write_next(state, Trigger.READY, reading.t_s)
        case LoopMode.AUTO if plan.write_in_manual:
            return _go(state, Trigger.MANUAL_NEEDED, SetMode(LoopMode.MAN), give_up_s=_soon_s(state, reading.t_s))
        case LoopMode.AUTO if len(plan.order) == 1:
            return _write_next(state, Trigger.READY, reading.t_s)
        case LoopMode.AUTO:
            # In automatic each moment in between runs the loop, and nobody has judged those combinations.
            return _refuse(state, AUTO_NOT_SHOWN_SAFE)
        case _:
            return _refuse(state, mode_unsuited(reading.mode))


def _take(state: WriteState, reading: SettingsRead) -> Step:
    if reading.mode not in (LoopMode.MAN, state.mode_found):
        return _refuse(state, mode_taken(reading.mode))
    if state.cancelled_by is not None:
        return _release(state, cancelled(state), reading.t_s)
    if changed_fields(state.plan.as_found, reading.fields):
        return _release(state, settings_differ(state.plan, reading.fields), reading.t_s)
    if reading.mode is state.mode_found:
        return _wait_or(state, reading.t_s, lambda: _release(state, not_manual(reading.mode.value), reading.t_s))
    held = replace(state, mode_held=LoopMode.MAN, op_held_pct=reading.op_pct)
    return _write_next(held, Trigger.READY, reading.t_s)


def _write_next(state: WriteState, trigger: Trigger, t_s: float) -> Step:
    name = state.plan.order[state.written]
    return _go(
        state,
        trigger,
        WriteField(name, _number(state.plan.fields, name)),
        written=state.written + 1,
        last_sent=name,
        give_up_s=_soon_s(state, t_s),
    )


def _field_written(state: WriteState, event: FieldWritten) -> Step:
    if state.phase not in (Phase.WRITING, Phase.PUTTING_BACK) or event.name != state.last_sent:
        raise _illegal(state, event)
    if state.phase is Phase.PUTTING_BACK:
        # Whatever became of it on the wire: what the controller holds after a scan decides.
        return _go(state, Trigger.FIELD_WRITTEN, read_at_s=event.t_s + state.pace.settle_s)
    if event.report.outcome is WriteOutcome.REFUSED:
        refused = write_refused(event.name, event.report.detail)
        return _put_back(state, Trigger.FIELD_REFUSED, refused, event.t_s)
    return _go(state, Trigger.FIELD_WRITTEN, ReadSettings())


def _verify(state: WriteState, reading: SettingsRead) -> Step:
    plan, name = state.plan, state.plan.order[state.written - 1]
    if reading.mode is not state.mode_held:
        return _put_back(state, Trigger.NOT_HELD, mode_taken(reading.mode), reading.t_s)
    if (moved := _output_taken(state, reading)) is not None:
        return _put_back(state, Trigger.NOT_HELD, moved, reading.t_s)
    if state.cancelled_by is not None:
        return _put_back(state, Trigger.NOT_HELD, cancelled(state), reading.t_s)
    if any(not _is_expected(state, other, reading.fields) for other in FIELD_NAMES if other != name):
        return _put_back(state, Trigger.NOT_HELD, settings_differ(plan, reading.fields), reading.t_s)
    held = number_of(reading.fields, name)
    if not is_same_number(held, number_of(plan.fields, name)):
        refusal = not_held(name, number_of(plan.fields, name), held)
        return _wait_or(state, reading.t_s, lambda: _put_back(state, Trigger.NOT_HELD, refusal, reading.t_s))
    if state.written < len(plan.order):
        return _write_next(state, Trigger.FIELD_HOLDS, reading.t_s)
    return _give_back(state, Trigger.ALL_HOLD, Trigger.SEEN_NEW, reading.t_s)


def _prove(state: WriteState, reading: SettingsRead) -> Step:
    plan = state.plan
    if reading.mode is not state.mode_held:
        # A person's loop now: nothing more is written, and what is read is the end.
        notice = mode_taken(reading.mode)
        state = replace(state, because=state.because if notice in state.because else (*state.because, notice))
        if not changed_fields(plan.fields, reading.fields):
            return _go(state, Trigger.SEEN_NEW)
        if not changed_fields(plan.as_found, reading.fields):
            return _go(state, Trigger.SEEN_OLD)
        return _unverified(state, "the mode was changed while the settings were neither all old nor all new")
    if (moved := _output_taken(state, reading)) is not None:
        return _leave_in_manual(state, moved)
    if _touched_by_others(state, reading.fields):
        return _unverified(state, "somebody else changed the settings meanwhile, so nothing more was written")
    left = [name for name in plan.order[: state.written] if name in changed_fields(plan.as_found, reading.fields)]
    if not left:
        return _give_back(state, Trigger.ALL_BACK, Trigger.SEEN_OLD, reading.t_s)
    if not reading.t_s < state.give_up_s:
        return _unverified(state, f"{' and '.join(left)} could not be put back")
    name = left[-1]  # backwards: what was strengthened last is weakened first
    return _go(state, Trigger.FIELD_LEFT, WriteField(name, _number(plan.as_found, name)), last_sent=name)


def _mode_set(state: WriteState, event: ModeSet) -> Step:
    outcome = event.report.outcome
    match state.phase:
        case Phase.TAKING if outcome is WriteOutcome.REFUSED:
            return _refuse(state, not_manual(f"refused: {event.report.detail}"))
        case Phase.TAKING:
            return _go(state, Trigger.WAITED, ReadSettings(), is_taken=True)
        case Phase.RETURNING | Phase.RELEASING if outcome is WriteOutcome.APPLIED:
            return _go(state, Trigger.WAITED, ReadSettings(), is_mode_acknowledged=True)
        case Phase.RETURNING | Phase.RELEASING:
            return _wait(state, event.t_s)
        case _:
            raise _illegal(state, event)


def _return(state: WriteState, reading: SettingsRead) -> Step:
    """Read everything a last time while the mode goes back."""
    expected = state.plan.fields if state.ends_at is Trigger.SEEN_NEW else state.plan.as_found
    if state.phase is Phase.RETURNING and changed_fields(expected, reading.fields):
        return _unverified(state, "the settings changed once more before the end")
    if reading.mode is state.mode_found:
        return _give_setpoint_back(state, reading)
    if not state.is_taken or reading.mode is not LoopMode.MAN:
        return _go(replace(state, because=(*state.because, mode_taken(reading.mode))), state.ends_at)
    if (moved := _output_taken(state, reading)) is not None:
        return _leave_in_manual(state, moved)
    if not reading.t_s < state.give_up_s:
        return _unverified(state, f"the loop is still in manual and was found in {state.mode_found.value}")
    if state.is_mode_acknowledged:
        return _wait(state, reading.t_s)
    # Asked for and perhaps never heard; asking again is idempotent.
    return _go(state, Trigger.WAITED, SetMode(state.mode_found))


def _give_setpoint_back(state: WriteState, reading: SettingsRead) -> Step:
    found_pct, read_pct = state.sp_found_pct, reading.sp_pct
    if not (state.plan.sp_tracks_in_manual and state.is_taken) or found_pct is None:
        return _go(state, state.ends_at)
    if read_pct is not None and abs(read_pct - found_pct) <= SP_SAME_PCT:
        return _go(state, state.ends_at)
    if not state.is_setpoint_given:
        return _go(state, Trigger.WAITED, SetSetpoint(found_pct), is_setpoint_given=True)
    return _wait_or(state, reading.t_s, lambda: _unverified(state, f"the setpoint is not back at {found_pct:g} %"))


def _not_read(state: WriteState, t_s: float, detail: str) -> Step:
    """A reading is missing: read again for as long as the phase allows."""
    refusal = not_read(detail)
    match state.phase:
        case Phase.CHECKING if state.cancelled_by is not None:
            return _refuse(state, cancelled(state))
        case Phase.CHECKING:
            return _wait_or(state, t_s, lambda: _refuse(state, refusal))
        case Phase.TAKING:
            return _wait_or(state, t_s, lambda: _release(state, refusal, t_s))
        case Phase.VERIFYING:
            return _wait_or(state, t_s, lambda: _put_back(state, Trigger.NOT_HELD, refusal, t_s))
        case Phase.PROVING | Phase.RETURNING | Phase.RELEASING:
            return _wait_or(state, t_s, lambda: _unverified(state, f"the settings could not be read: {detail}"))
        case _:
            raise IllegalEvent(f"no reading is awaited in {state.phase.value}")


def _put_back(state: WriteState, trigger: Trigger, refusal: Refusal, t_s: float) -> Step:
    """Look what the controller holds before anything else, once it had time to show it."""
    return _go(
        state,
        trigger,
        because=(*state.because, refusal),
        read_at_s=t_s + state.pace.settle_s,
        give_up_s=t_s + state.pace.put_back_within_s,
    )


def _give_back(state: WriteState, trigger: Trigger, ends_at: Trigger, t_s: float) -> Step:
    command = SetMode(state.mode_found) if state.is_taken else ReadSettings()
    return _go(
        state,
        trigger,
        command,
        ends_at=ends_at,
        op_held_pct=state.last_read.op_pct if state.last_read is not None else None,
        give_up_s=_soon_s(state, t_s),
    )


def _release(state: WriteState, refusal: Refusal, t_s: float) -> Step:
    """Give the mode back with nothing written."""
    state = replace(state, because=(*state.because, refusal))
    return _give_back(state, Trigger.TAKE_FAILED, Trigger.NOTHING_WRITTEN, t_s)


def _leave_in_manual(state: WriteState, moved: Refusal) -> Step:
    """Somebody works with the output in manual: automatic would undo what they do."""
    if moved.code not in [refusal.code for refusal in state.because]:
        state = replace(state, because=(*state.because, moved))
    return _unverified(
        state, f"the loop is in manual and was found in {state.mode_found.value}; nothing more was written"
    )


def _refuse(state: WriteState, refusal: Refusal) -> Step:
    return _go(state, Trigger.NOTHING_WRITTEN, because=(*state.because, refusal))


def _unverified(state: WriteState, reason: str) -> Step:
    return _go(state, Trigger.NOT_SEEN, because=(*state.because, unverified(state, reason)))


def _wait(state: WriteState, t_s: float) -> Step:
    return _go(state, Trigger.WAITED, read_at_s=t_s + state.pace.settle_s)


def _wait_or(state: WriteState, t_s: float, give_up: Callable[[], Step]) -> Step:
    """Read again after a while, or give up when the phase has lasted too long (or the clock is no number)."""
    return _wait(state, t_s) if t_s < state.give_up_s else give_up()


def _go(state: WriteState, trigger: Trigger, *commands: Command, **changes: Any) -> Step:
    """The only place where the phase changes."""
    phase = TRANSITIONS[state.phase].get(trigger)
    if phase is None:
        raise IllegalEvent(f"{trigger.value} can't happen in {state.phase.value}")
    return replace(state, phase=phase, **changes), commands


def _illegal(state: WriteState, event: Event) -> IllegalEvent:
    return IllegalEvent(f"{type(event).__name__} is not awaited in {state.phase.value}")


def _is_expected(state: WriteState, name: str, fields: BlockFields) -> bool:
    """Whether a field holds the new number if it was sent, and the one as found otherwise."""
    source = state.plan.fields if name in state.plan.order[: state.written] else state.plan.as_found
    return is_same_number(number_of(fields, name), number_of(source, name))


def _touched_by_others(state: WriteState, fields: BlockFields) -> bool:
    """Whether a field holds a number that can't come from us; the last one sent may hold anything."""
    others = [name for name in changed_fields(state.plan.as_found, fields) if name != state.last_sent]
    return any(not _is_expected(state, name, fields) for name in others)


def _output_taken(state: WriteState, reading: SettingsRead) -> Refusal | None:
    """What to say when the output that we hold in manual was moved; ``None`` while it stands, or can't be told."""
    held_pct, read_pct = state.op_held_pct, reading.op_pct
    if not state.is_taken or reading.mode is not LoopMode.MAN or held_pct is None or read_pct is None:
        return None
    return None if abs(read_pct - held_pct) <= OP_HELD_PCT else output_taken(held_pct, read_pct)


def _number(fields: BlockFields, name: str) -> float:
    """The number of a field in a plan's order; ``check_plan`` has shown that there is one."""
    return cast("float", number_of(fields, name))


def _soon_s(state: WriteState, t_s: float) -> float:
    return t_s + state.pace.within_s
