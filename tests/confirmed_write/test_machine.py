"""The write of settings: written, put back, or loud."""

from collections.abc import Callable
from dataclasses import replace
from math import nan

import pytest

from autotune.confirmed_write.commands import Command, ReadSettings, SetMode, SetSetpoint, WriteField
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
from autotune.confirmed_write.machine import begin, next_deadline_s, step
from autotune.confirmed_write.phases import TERMINAL_PHASES, TRANSITIONS, Phase, Trigger
from autotune.confirmed_write.state import WritePace, WriteState
from autotune.errors import IllegalEvent
from autotune.loop.mode import LoopMode
from autotune.loop.sample import Stamp
from autotune.loop.settings import BlockFields
from autotune.loop.write import WriteOutcome, WriteReport
from tests.confirmed_write.controller import (
    APPLIED,
    NEW,
    NOT_HEARD,
    OLD,
    PLAN,
    REFUSED,
    Controller,
    confirmed,
    run,
    started,
)

MAN, AUTO, CAS, NOT_KNOWN = LoopMode.MAN, LoopMode.AUTO, LoopMode.CAS, LoopMode.NOT_KNOWN


def _codes(state: WriteState) -> list[str]:
    return [refusal.code for refusal in state.because]


def _before(
    kind: type[Command], count: int, act: Callable[[Controller], None]
) -> Callable[[Controller, Command], None]:
    """Let ``act`` happen once, just before the ``count``-th command of that kind."""

    def on_command(controller: Controller, command: Command) -> None:
        earlier = sum(isinstance(sent, kind) for sent in controller.commands)
        if isinstance(command, kind) and earlier == count - 1:
            act(controller)

    return on_command


def _on_write(*outcomes: tuple[WriteOutcome, bool]) -> Callable[[str, float], tuple[WriteOutcome, bool]]:
    """These outcomes one after the other, then all goes well."""
    left = list(outcomes)
    return lambda *_: left.pop(0) if left else (APPLIED, True)


# The straight way


def test_a_loop_in_automatic_goes_to_manual_is_written_field_by_field_and_goes_back() -> None:
    controller = Controller()
    state = run(controller)
    assert state.phase is Phase.WRITTEN
    assert controller.commands == [
        ReadSettings(),
        SetMode(MAN),
        ReadSettings(),
        WriteField("gain", 1.5),
        ReadSettings(),
        WriteField("derivative", 3.0),
        ReadSettings(),
        WriteField("integral", 20.0),
        ReadSettings(),
        SetMode(AUTO),
        ReadSettings(),
    ]
    assert (controller.fields, controller.mode) == (NEW, AUTO)
    assert state.because == ()
    assert state.last_read is not None
    assert state.last_read.fields == NEW


def test_a_loop_in_manual_is_written_where_it_stands() -> None:
    controller = Controller(mode=MAN)
    state = run(controller)
    assert state.phase is Phase.WRITTEN
    assert (controller.modes, controller.mode, controller.fields) == ([], MAN, NEW)
    assert state.op_bump_pct is None


def test_the_bump_of_the_return_is_measured() -> None:
    controller = Controller(on_command=_before(SetMode, 2, lambda plant: setattr(plant, "op_pct", 42.5)))
    assert run(controller).op_bump_pct == pytest.approx(2.5)
    assert run(Controller(op_pct=None)).op_bump_pct is None


def test_a_controller_that_shows_a_write_late_is_read_again() -> None:
    shown: list[BlockFields] = []

    def lag(controller: Controller, command: Command) -> None:
        """Every write shows only at the third read after it."""
        if isinstance(command, WriteField):
            shown.append(replace(controller.fields, **{command.name: command.number}))
        elif isinstance(command, ReadSettings) and shown:
            reads = next(
                place for place, sent in enumerate(reversed(controller.commands)) if isinstance(sent, WriteField)
            )
            if reads == 2:
                controller.fields = shown.pop()

    controller = Controller(on_write=lambda *_: (APPLIED, False), on_command=lag)
    assert run(controller).phase is Phase.WRITTEN
    assert controller.fields == NEW
    assert controller.now_s > 2 * 3 * WritePace().settle_s


def test_numbers_in_single_precision_are_the_numbers_that_were_written() -> None:
    controller = Controller(holds=lambda _, number: number * (1.0 + 5e-8))
    assert run(controller).phase is Phase.WRITTEN


# Refused before anything is written


def test_settings_that_are_not_as_found_are_refused() -> None:
    controller = Controller(fields=replace(OLD, integral=29.0))
    state = run(controller)
    assert (state.phase, _codes(state)) == (Phase.REFUSED, ["SETTINGS_DIFFER"])
    assert controller.commands == [ReadSettings()]
    assert "integral 29" in str(state.because[0])


@pytest.mark.parametrize("mode", [CAS, LoopMode.REMOTE, LoopMode.TRACKING, LoopMode.INITIALISING, LoopMode.LOCAL])
def test_a_loop_in_another_mode_is_refused(mode: LoopMode) -> None:
    controller = Controller(mode=mode)
    state = run(controller)
    assert (state.phase, _codes(state)) == (Phase.REFUSED, ["MODE_UNSUITED"])
    assert controller.commands == [ReadSettings()]


@pytest.mark.parametrize("controller", [Controller(mode=NOT_KNOWN), Controller(is_readable=False)])
def test_a_loop_that_can_not_be_read_is_refused_after_a_while(controller: Controller) -> None:
    state = run(controller)
    assert (state.phase, _codes(state)) == (Phase.REFUSED, ["NOT_READ"])
    assert WritePace().within_s <= controller.now_s < 2 * WritePace().within_s
    assert controller.writes == []


def test_several_fields_are_not_written_in_automatic() -> None:
    controller = Controller()
    state = run(controller, replace(PLAN, write_in_manual=False))
    assert (state.phase, _codes(state)) == (Phase.REFUSED, ["AUTO_NOT_SHOWN_SAFE"])
    assert controller.commands == [ReadSettings()]


def test_a_single_field_has_no_moment_in_between_and_is_written_in_automatic() -> None:
    controller = Controller()
    plan = replace(PLAN, fields=replace(OLD, gain=1.5), order=("gain",), write_in_manual=False)
    assert run(controller, plan).phase is Phase.WRITTEN
    assert (controller.modes, controller.fields.gain) == ([], 1.5)


def test_a_controller_that_refuses_manual_is_left_as_it_is() -> None:
    controller = Controller(on_mode=lambda _: (REFUSED, False))
    state = run(controller)
    assert (state.phase, _codes(state)) == (Phase.REFUSED, ["NOT_MANUAL"])
    assert controller.writes == []


def test_a_loop_that_does_not_go_to_manual_is_given_back_and_refused() -> None:
    controller = Controller(on_mode=lambda mode: (APPLIED, mode is AUTO))
    state = run(controller)
    assert (state.phase, _codes(state)) == (Phase.REFUSED, ["NOT_MANUAL"])
    assert controller.modes == [MAN, AUTO]
    assert controller.writes == []


@pytest.mark.parametrize(
    ("act", "code"),
    [
        (lambda plant: setattr(plant, "fields", replace(OLD, gain=2.2)), "SETTINGS_DIFFER"),
        (lambda plant: setattr(plant, "is_readable", False), "NOT_READ"),
    ],
)
def test_what_goes_wrong_before_the_first_write_gives_the_mode_back(
    act: Callable[[Controller], None], code: str
) -> None:
    def readable_again(plant: Controller) -> None:
        plant.is_readable = True

    first, second = _before(ReadSettings, 2, act), _before(SetMode, 2, readable_again)

    def on_command(controller: Controller, command: Command) -> None:
        first(controller, command)
        second(controller, command)

    controller = Controller(on_command=on_command)
    state = run(controller)
    assert (state.phase, _codes(state)) == (Phase.REFUSED, [code])
    assert (controller.modes, controller.mode, controller.writes) == ([MAN, AUTO], AUTO, [])


def test_a_link_that_stays_lost_in_manual_is_loud_though_nothing_was_written() -> None:
    controller = Controller(on_command=_before(ReadSettings, 2, lambda plant: setattr(plant, "is_readable", False)))
    state = run(controller)
    assert (state.phase, _codes(state)) == (Phase.UNVERIFIED, ["NOT_READ", "UNVERIFIED"])
    assert controller.writes == []
    assert "found in AUTO" in state.because[-1].remedy


def test_a_person_who_takes_the_mode_before_the_first_write_keeps_it() -> None:
    controller = Controller(on_command=_before(ReadSettings, 2, lambda plant: plant.set_mode(CAS)))
    state = run(controller)
    assert (state.phase, _codes(state)) == (Phase.REFUSED, ["MODE_TAKEN"])
    assert (controller.mode, controller.modes, controller.writes) == (CAS, [MAN], [])


# Put back


def test_a_refused_field_puts_back_what_was_written_before_it() -> None:
    controller = Controller(on_write=_on_write((APPLIED, True), (APPLIED, True), (REFUSED, False)))
    state = run(controller)
    assert (state.phase, _codes(state)) == (Phase.PUT_BACK, ["WRITE_REFUSED"])
    assert (controller.fields, controller.mode) == (OLD, AUTO)
    assert controller.writes[3:] == [WriteField("derivative", 4.0), WriteField("gain", 2.0)]


def test_an_unheard_write_that_landed_is_read_and_goes_on() -> None:
    controller = Controller(on_write=_on_write((NOT_HEARD, True)))
    assert run(controller).phase is Phase.WRITTEN
    assert len(controller.writes) == 3


def test_an_unheard_write_that_did_not_land_is_put_back_and_not_sent_again() -> None:
    controller = Controller(on_write=_on_write((APPLIED, True), (NOT_HEARD, False)))
    state = run(controller)
    assert (state.phase, _codes(state)) == (Phase.PUT_BACK, ["NOT_HELD"])
    assert [write.name for write in controller.writes] == ["gain", "derivative", "gain"]
    assert controller.fields == OLD


def test_a_refusal_that_is_not_true_is_found_by_reading() -> None:
    controller = Controller(on_write=_on_write((REFUSED, True)))
    assert run(controller).phase is Phase.PUT_BACK
    assert controller.fields == OLD


def test_a_controller_that_holds_another_number_gets_the_old_one_back() -> None:
    controller = Controller(holds=lambda name, number: 18.0 if (name, number) == ("integral", 20.0) else number)
    state = run(controller)
    assert (state.phase, _codes(state)) == (Phase.PUT_BACK, ["NOT_HELD"])
    assert "written as 20.0 and reads 18.0" in state.because[0].reason
    assert controller.fields == OLD


def test_a_put_back_that_is_not_heard_is_sent_again() -> None:
    controller = Controller(on_write=_on_write((APPLIED, True), (REFUSED, False), (NOT_HEARD, False)))
    assert run(controller).phase is Phase.PUT_BACK
    assert [write.number for write in controller.writes] == [1.5, 3.0, 2.0, 2.0]


def test_a_link_that_comes_back_is_enough_to_put_back() -> None:
    def lose(plant: Controller) -> None:
        plant.is_readable = False

    def find(controller: Controller, _: Command) -> None:
        if controller.now_s > 8.0:
            controller.is_readable = True

    lost = _before(ReadSettings, 4, lose)

    def on_command(controller: Controller, command: Command) -> None:
        lost(controller, command)
        find(controller, command)

    controller = Controller(on_command=on_command)
    state = run(controller)
    assert (state.phase, _codes(state)) == (Phase.PUT_BACK, ["NOT_READ"])
    assert (controller.fields, controller.mode) == (OLD, AUTO)


@pytest.mark.parametrize("phase", [Phase.CHECKING, Phase.TAKING, Phase.WRITING, Phase.VERIFYING])
def test_a_cancel_ends_as_it_began(phase: Phase) -> None:
    controller = Controller()
    asked: list[Phase] = []

    def interfere(state: WriteState) -> Event | None:
        if state.phase is phase and not asked:
            asked.append(phase)
            return CancelAsked(controller.now_s, "A. Person")
        return None

    state = run(controller, interfere=interfere)
    wanted = Phase.REFUSED if phase in (Phase.CHECKING, Phase.TAKING) else Phase.PUT_BACK
    assert (state.phase, _codes(state)) == (wanted, ["CANCELLED"])
    assert "A. Person" in state.because[0].reason
    assert (controller.fields, controller.mode) == (OLD, AUTO)


def test_a_write_that_shows_only_after_a_scan_is_not_mistaken_for_one_that_did_not_land() -> None:
    """Cancelled at once after the first write, whose number shows 0.3 s later."""
    controller = Controller(on_write=_on_write((APPLIED, False)))
    written_s: list[float] = []

    def interfere(state: WriteState) -> Event | None:
        if state.phase is Phase.VERIFYING and not written_s:
            written_s.append(controller.now_s)
            return CancelAsked(controller.now_s, "A. Person")
        return None

    def show(plant: Controller, _: Command) -> None:
        if written_s and len(plant.writes) == 1 and plant.now_s >= written_s[0] + 0.3:
            plant.fields = replace(OLD, gain=1.5)

    controller.on_command = show
    state = run(controller, interfere=interfere)
    assert (state.phase, _codes(state)) == (Phase.PUT_BACK, ["CANCELLED"])
    assert controller.writes == [WriteField("gain", 1.5), WriteField("gain", 2.0)]
    assert controller.fields == OLD


def test_a_cancel_while_nothing_can_be_read_ends_at_once() -> None:
    controller = Controller(is_readable=False)
    state = run(controller, interfere=lambda _: CancelAsked(0.0, "A. Person"))
    assert (state.phase, _codes(state)) == (Phase.REFUSED, ["CANCELLED"])


@pytest.mark.parametrize("phase", [Phase.PROVING, Phase.PUTTING_BACK, Phase.RETURNING])
def test_the_way_back_is_deaf_to_a_cancel(phase: Phase) -> None:
    def once_more(state: WriteState) -> Event | None:
        return CancelAsked(0.0, "A. Person") if state.phase is phase else None

    controller = Controller(on_write=_on_write((APPLIED, True), (REFUSED, False)))
    state = run(controller, interfere=once_more)
    assert (state.phase, _codes(state)) == (Phase.PUT_BACK, ["WRITE_REFUSED"])


# Never fight


def _by_a_person(mode: LoopMode, write: int) -> Callable[[Controller, Command], None]:
    """A person changes the mode right after the ``write``-th write."""

    def on_command(controller: Controller, command: Command) -> None:
        if isinstance(command, ReadSettings) and len(controller.writes) == write and controller.mode is MAN:
            controller.set_mode(mode)

    return on_command


@pytest.mark.parametrize("mode", [AUTO, CAS, LoopMode.LOCAL])
def test_a_person_who_takes_the_mode_in_between_stops_the_writing_loudly(mode: LoopMode) -> None:
    controller = Controller(on_command=_by_a_person(mode, 1))
    state = run(controller)
    assert (state.phase, _codes(state)) == (Phase.UNVERIFIED, ["MODE_TAKEN", "UNVERIFIED"])
    assert controller.writes == [WriteField("gain", 1.5)]
    assert (controller.modes, controller.mode) == ([MAN], mode)
    for words in ("as found: gain 2, integral 30, derivative 4", "proposed: gain 1.5, integral 20, derivative 3"):
        assert words in state.because[-1].remedy
    assert f"last read: gain 1.5, integral 30, derivative 4, in {mode.value}" in state.because[-1].remedy


def test_a_mode_taken_after_the_last_write_ends_as_written_with_a_notice() -> None:
    controller = Controller(on_command=_by_a_person(CAS, 3))
    state = run(controller)
    assert (state.phase, _codes(state)) == (Phase.WRITTEN, ["MODE_TAKEN"])
    assert (controller.modes, controller.mode) == ([MAN], CAS)


def test_a_mode_taken_when_nothing_had_landed_ends_as_put_back_with_a_notice() -> None:
    controller = Controller(on_write=_on_write((NOT_HEARD, False)), on_command=_by_a_person(AUTO, 1))
    state = run(controller)
    assert (state.phase, _codes(state)) == (Phase.PUT_BACK, ["MODE_TAKEN"])
    assert (controller.fields, controller.modes) == (OLD, [MAN])


def test_a_mode_taken_during_the_return_is_left_with_a_notice() -> None:
    controller = Controller(on_command=_before(ReadSettings, 6, lambda plant: plant.set_mode(CAS)))
    state = run(controller)
    assert (state.phase, _codes(state)) == (Phase.WRITTEN, ["MODE_TAKEN"])
    assert controller.mode is CAS


def _moves_output(controller: Controller) -> None:
    controller.op_pct = 20.0


@pytest.mark.parametrize("write", [1, 2, 3])
def test_an_output_that_a_person_moves_in_manual_is_theirs_and_the_loop_stays_in_manual_loudly(write: int) -> None:
    def on_command(controller: Controller, command: Command) -> None:
        if isinstance(command, ReadSettings) and len(controller.writes) == write:
            _moves_output(controller)

    controller = Controller(on_command=on_command)
    state = run(controller)
    assert (state.phase, _codes(state)) == (Phase.UNVERIFIED, ["OUTPUT_TAKEN", "UNVERIFIED"])
    assert (len(controller.writes), controller.modes, controller.op_pct) == (write, [MAN], 20.0)
    assert "from 40.00 % to 20.00 %" in state.because[0].reason
    assert "is in manual and was found in AUTO" in state.because[1].reason


def test_an_output_moved_while_the_settings_go_back_or_the_mode_does_is_theirs_too() -> None:
    putting_back = Controller(
        on_write=_on_write((APPLIED, True), (REFUSED, False)), on_command=_before(WriteField, 3, _moves_output)
    )
    returning = Controller(on_mode=_unheard_return(), on_command=_before(ReadSettings, 6, _moves_output))
    for controller, modes in ((putting_back, [MAN]), (returning, [MAN, AUTO])):
        state = run(controller)
        assert state.phase is Phase.UNVERIFIED
        assert _codes(state)[-2:] == ["OUTPUT_TAKEN", "UNVERIFIED"]
        assert (controller.modes, controller.mode) == (modes, MAN)


def _unheard_return() -> Callable[[LoopMode], tuple[WriteOutcome, bool]]:
    return lambda mode: (APPLIED, True) if mode is MAN else (NOT_HEARD, False)


@pytest.mark.parametrize("read_pct", [40.5, None])
def test_an_output_held_within_its_read_back_or_not_read_at_all_is_no_sign_of_a_person(read_pct: float | None) -> None:
    controller = Controller(on_command=_before(ReadSettings, 3, lambda plant: setattr(plant, "op_pct", read_pct)))
    assert run(controller).phase is Phase.WRITTEN


def test_a_mode_changed_while_the_loop_was_found_in_manual_is_left_too() -> None:
    controller = Controller(mode=MAN, on_command=_before(ReadSettings, 5, lambda plant: plant.set_mode(AUTO)))
    state = run(controller)
    assert (state.phase, _codes(state)) == (Phase.WRITTEN, ["MODE_TAKEN"])
    assert (controller.mode, controller.modes) == (AUTO, [])


@pytest.mark.parametrize("name", ["gain", "integral"])
def test_settings_that_somebody_else_changes_meanwhile_are_left_alone(name: str) -> None:
    """The gain is ours and held already; the integral has not been written yet."""

    def meddle(plant: Controller) -> None:
        plant.fields = replace(plant.fields, **{name: 7.0})

    controller = Controller(on_command=_before(ReadSettings, 4, meddle))
    state = run(controller)
    assert (state.phase, _codes(state)) == (Phase.UNVERIFIED, ["SETTINGS_DIFFER", "UNVERIFIED"])
    assert [write.name for write in controller.writes] == ["gain", "derivative"]
    assert controller.mode is MAN


def test_a_setting_that_somebody_changes_after_it_was_put_back_is_left_alone() -> None:
    def meddle(plant: Controller) -> None:
        plant.fields = replace(plant.fields, derivative=7.0)

    controller = Controller(
        on_write=_on_write((APPLIED, True), (APPLIED, True), (REFUSED, False)),
        on_command=_before(WriteField, 5, meddle),
    )
    state = run(controller)
    assert (state.phase, _codes(state)) == (Phase.UNVERIFIED, ["WRITE_REFUSED", "UNVERIFIED"])
    assert controller.fields.derivative == 7.0
    assert "somebody else" in state.because[-1].reason


# Loud


def test_a_field_that_can_not_be_put_back_is_loud_and_leaves_the_loop_in_manual() -> None:
    controller = Controller(on_write=lambda _, number: (APPLIED, True) if number == 1.5 else (REFUSED, False))
    state = run(controller)
    assert (state.phase, _codes(state)) == (Phase.UNVERIFIED, ["WRITE_REFUSED", "UNVERIFIED"])
    assert "gain could not be put back" in state.because[-1].reason
    assert (controller.mode, controller.fields.gain) == (MAN, 1.5)
    assert len(controller.writes) > 3
    assert controller.now_s > WritePace().put_back_within_s


@pytest.mark.parametrize("read", [3, 4, 6])
def test_a_link_that_stays_lost_after_a_write_is_loud(read: int) -> None:
    controller = Controller(on_command=_before(ReadSettings, read, lambda plant: setattr(plant, "is_readable", False)))
    state = run(controller)
    assert state.phase is Phase.UNVERIFIED
    assert "could not be read" in state.because[-1].reason


def test_a_mode_that_can_no_longer_be_read_is_no_proof() -> None:
    controller = Controller(on_command=_before(ReadSettings, 3, lambda plant: plant.set_mode(NOT_KNOWN)))
    state = run(controller)
    assert (state.phase, _codes(state)) == (Phase.UNVERIFIED, ["NOT_READ", "UNVERIFIED"])


def test_a_loop_that_stays_in_manual_is_loud() -> None:
    controller = Controller(on_mode=lambda mode: (APPLIED, mode is MAN))
    state = run(controller)
    assert (state.phase, _codes(state)) == (Phase.UNVERIFIED, ["UNVERIFIED"])
    assert "still in manual and was found in AUTO" in state.because[0].reason
    assert controller.fields == NEW
    assert controller.modes == [MAN, AUTO]


def test_a_mode_request_that_was_not_heard_is_made_again() -> None:
    left = [(APPLIED, True), (NOT_HEARD, False), (REFUSED, False)]
    controller = Controller(on_mode=lambda _: left.pop(0) if left else (APPLIED, True))
    assert run(controller).phase is Phase.WRITTEN
    assert controller.modes == [MAN, AUTO, AUTO, AUTO]


def test_settings_that_change_during_the_return_are_loud() -> None:
    controller = Controller(on_command=_before(ReadSettings, 6, lambda plant: setattr(plant, "fields", OLD)))
    state = run(controller)
    assert state.phase is Phase.UNVERIFIED
    assert "changed once more" in state.because[-1].reason


# The setpoint


def test_a_setpoint_that_tracked_pv_in_manual_is_given_back_after_the_mode() -> None:
    controller = Controller(sp_tracks_to_pct=58.0)
    assert run(controller, replace(PLAN, sp_tracks_in_manual=True)).phase is Phase.WRITTEN
    assert controller.sp_pct == 60.0
    assert controller.commands[-3:] == [ReadSettings(), SetSetpoint(60.0), ReadSettings()]


@pytest.mark.parametrize(
    ("controller", "tracks"),
    [
        (Controller(sp_tracks_to_pct=58.0), False),
        (Controller(sp_tracks_to_pct=60.02), True),
        (Controller(sp_pct=None), True),
        (Controller(mode=MAN, sp_tracks_to_pct=58.0), True),
    ],
)
def test_a_setpoint_is_not_written_without_need(controller: Controller, tracks: bool) -> None:
    assert run(controller, replace(PLAN, sp_tracks_in_manual=tracks)).phase is Phase.WRITTEN
    assert not any(isinstance(command, SetSetpoint) for command in controller.commands)


@pytest.mark.parametrize("sp_pct", [58.0, None, nan])
def test_a_setpoint_that_does_not_come_back_is_loud(sp_pct: float | None) -> None:
    def keep(controller: Controller, command: Command) -> None:
        if isinstance(command, ReadSettings) and SetMode(MAN) in controller.commands:
            controller.sp_pct = sp_pct

    controller = Controller(on_command=keep)
    state = run(controller, replace(PLAN, sp_tracks_in_manual=True))
    assert state.phase is Phase.UNVERIFIED
    assert "setpoint is not back at 60 %" in state.because[-1].reason
    assert sum(isinstance(command, SetSetpoint) for command in controller.commands) == 1


# The machine itself


def test_from_a_written_setting_no_way_leads_to_refused() -> None:
    reached, new = set(), {Phase.WRITING}
    while new:
        reached |= new
        new = {target for phase in new for target in TRANSITIONS[phase].values()} - reached
    assert Phase.REFUSED not in reached
    assert reached & TERMINAL_PHASES == {Phase.WRITTEN, Phase.PUT_BACK, Phase.UNVERIFIED}


def test_every_phase_is_in_the_table_and_every_trigger_moves_something() -> None:
    assert set(TRANSITIONS) == set(Phase)
    assert {trigger for exits in TRANSITIONS.values() for trigger in exits} == set(Trigger)
    assert {phase.name for phase in TERMINAL_PHASES} == {"WRITTEN", "PUT_BACK", "UNVERIFIED", "REFUSED"}


REPORT = WriteReport(APPLIED, Stamp.at(0.0))
READ = SettingsRead(0.0, OLD, AUTO, 40.0)
EVENTS: tuple[Event, ...] = (
    READ,
    replace(READ, mode=NOT_KNOWN),
    ReadFailed(0.0, "no answer"),
    FieldWritten(0.0, "gain", REPORT),
    ModeSet(0.0, REPORT),
    SetpointSet(0.0, REPORT),
    TimePassed(0.0),
    CancelAsked(0.0, "A. Person"),
)
AWAITED: dict[Phase, set[type[Event]]] = {
    Phase.CHECKING: {SettingsRead, ReadFailed},
    Phase.TAKING: {SettingsRead, ReadFailed, ModeSet},
    Phase.RELEASING: {SettingsRead, ReadFailed, ModeSet, SetpointSet},
    Phase.WRITING: {FieldWritten},
    Phase.VERIFYING: {SettingsRead, ReadFailed},
    Phase.PROVING: {SettingsRead, ReadFailed},
    Phase.PUTTING_BACK: {FieldWritten},
    Phase.RETURNING: {SettingsRead, ReadFailed, ModeSet, SetpointSet},
}


@pytest.mark.parametrize("phase", [phase for phase in Phase if phase is not Phase.PLANNED])
@pytest.mark.parametrize("event", EVENTS, ids=lambda event: type(event).__name__)
def test_an_event_that_is_not_awaited_is_our_fault_and_changes_nothing(phase: Phase, event: Event) -> None:
    begun, _ = started(Controller())
    ends_at = Trigger.SEEN_OLD if phase is Phase.RETURNING else Trigger.NOTHING_WRITTEN
    state = replace(begun, phase=phase, written=1, last_sent="gain", mode_found=AUTO, mode_held=AUTO, ends_at=ends_at)
    copy = replace(state)
    is_awaited = type(event) in AWAITED.get(phase, set())
    is_always = isinstance(event, TimePassed | CancelAsked) and phase not in TERMINAL_PHASES
    if is_awaited or is_always:
        assert step(state, event) == step(copy, event)
    else:
        with pytest.raises(IllegalEvent):
            step(state, event)
    assert state == copy


def test_an_answer_about_another_field_is_our_fault() -> None:
    begun, _ = started(Controller())
    for phase in (Phase.WRITING, Phase.PUTTING_BACK):
        state = replace(begun, phase=phase, written=1, last_sent="gain")
        with pytest.raises(IllegalEvent, match="FieldWritten is not awaited"):
            step(state, FieldWritten(0.0, "integral", REPORT))


def test_a_tick_before_its_time_and_one_that_is_no_time_do_nothing() -> None:
    begun, _ = started(Controller())
    waiting, commands = step(begun, ReadFailed(1.0, "no answer"))
    assert commands == ()
    assert next_deadline_s(waiting) == 1.5
    for early_s in (1.4, nan):
        assert step(waiting, TimePassed(early_s)) == (waiting, ())
    reading, commands = step(waiting, TimePassed(1.5))
    assert commands == (ReadSettings(),)
    assert next_deadline_s(reading) is None


def test_a_clock_that_is_no_number_gives_up_instead_of_waiting_for_ever() -> None:
    begun, _ = started(Controller())
    state, _ = step(begun, ReadFailed(nan, "no answer"))
    assert state.phase is Phase.REFUSED


def test_an_ended_write_waits_for_nothing_and_an_own_pace_is_kept() -> None:
    state = run(Controller())
    assert next_deadline_s(replace(state, read_at_s=3.0)) is None
    begun = begin(PLAN, confirmed(), frozenset(), 0.0, WritePace(settle_s=2.0))
    assert isinstance(begun, tuple)
    waiting, _ = step(begun[0], ReadFailed(1.0, "no answer"))
    assert next_deadline_s(waiting) == 3.0


def test_a_write_that_fails_before_anything_was_read_says_so() -> None:
    begun, _ = started(Controller())
    state, _ = step(replace(begun, phase=Phase.RELEASING), ReadFailed(99.0, "no answer"))
    assert "nothing was read" in state.because[-1].remedy
    without = replace(PLAN, as_found=replace(OLD, derivative=None), fields=replace(NEW, derivative=None))
    state, _ = step(replace(begun, plan=without, phase=Phase.RELEASING), ReadFailed(99.0, "no answer"))
    assert "as found: gain 2, integral 30;" in state.because[-1].remedy
