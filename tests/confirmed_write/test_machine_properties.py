"""Whatever the wire, the controller and people do: no write without a word, no claim without a reading."""

from collections.abc import Callable
from dataclasses import replace

from hypothesis import settings
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, initialize, invariant, precondition, rule

from autotune.confirmed_write.commands import Command, ReadSettings, SetMode, SetSetpoint, WriteField
from autotune.confirmed_write.confirmation import confirm, short_digest
from autotune.confirmed_write.events import CancelAsked, SettingsRead, TimePassed
from autotune.confirmed_write.limits import changed_fields
from autotune.confirmed_write.machine import begin, next_deadline_s, step
from autotune.confirmed_write.phases import Phase
from autotune.confirmed_write.plan import Confirmation
from autotune.confirmed_write.state import WriteState
from autotune.loop.block_units import number_of
from autotune.loop.mode import LoopMode
from autotune.loop.outcome import Refusal
from autotune.loop.write import WriteOutcome
from tests.confirmed_write.controller import APPLIED, OLD, PLAN, Controller


class ConfirmedWrite(RuleBasedStateMachine):
    """A write, its controller, and everything that may come between them."""

    def __init__(self) -> None:
        super().__init__()
        self.controller = Controller(sp_tracks_to_pct=55.0)
        self.plan = PLAN
        self.state: WriteState | None = None
        self.commands: tuple[Command, ...] = ()
        self.spent: frozenset[Confirmation] = frozenset()
        self.is_read_after_write = True
        self.late: Callable[[], None] | None = None
        self.mode_read: LoopMode | None = None

    @initialize(
        mode=st.sampled_from([LoopMode.AUTO] * 5 + [LoopMode.MAN] * 2 + [LoopMode.CAS]),
        in_manual=st.sampled_from([True] * 5 + [False]),
        tracks=st.booleans(),
        well_for=st.integers(0, 12),
    )
    def find_the_loop(self, mode: LoopMode, in_manual: bool, tracks: bool, well_for: int) -> None:
        """Each run begins somewhere on the straight way, so that trouble comes at every place."""
        self.controller.mode = mode
        self.plan = replace(PLAN, write_in_manual=in_manual, sp_tracks_in_manual=tracks)
        if well_for:
            self.begin_with_a_valid_word()
            self.all_goes_well(well_for)

    # Before: only a valid word starts a write

    @precondition(lambda self: self.state is None)
    @rule(
        typed=st.sampled_from(["", "yes", "0000-0000"]),
        late_s=st.sampled_from([0.0, 1000.0]),
    )
    def begin_without_a_valid_word(self, typed: str, late_s: float) -> None:
        now_s = self.controller.now_s
        assert isinstance(confirm(self.plan, typed, "A. Person", now_s), Refusal)
        forged = Confirmation(typed or "0", "A. Person", now_s, now_s + 10.0)
        assert isinstance(begin(self.plan, forged, self.spent, now_s), Refusal)
        if late_s:
            real = confirm(self.plan, short_digest(self.plan), "A. Person", now_s)
            assert isinstance(real, Confirmation)
            assert isinstance(begin(self.plan, real, self.spent, now_s + late_s), Refusal)

    @precondition(lambda self: self.state is None)
    @rule()
    def begin_with_a_valid_word(self) -> None:
        now_s = self.controller.now_s
        confirmation = confirm(self.plan, short_digest(self.plan), "A. Person", now_s)
        assert isinstance(confirmation, Confirmation)
        self.spent |= {confirmation}
        begun = begin(self.plan, confirmation, self.spent - {confirmation}, now_s)
        assert isinstance(begun, tuple)
        self._take(begun)

    @precondition(lambda self: bool(self.spent))
    @rule()
    def a_word_used_twice_is_refused(self) -> None:
        for confirmation in self.spent:
            assert isinstance(begin(self.plan, confirmation, self.spent, confirmation.given_s), Refusal)

    # During: the controller answers, well or badly

    @precondition(lambda self: self._is_running())
    @rule(moves=st.sampled_from([1, 2, 3, 40]))
    def all_goes_well(self, moves: int) -> None:
        for _ in range(moves):
            if self.commands:
                self._perform(APPLIED, lands=True)
            elif self._is_running():
                self.time_passes(0.0)

    @precondition(lambda self: isinstance(next(iter(self.commands), None), WriteField | SetMode))
    @rule(outcome=st.sampled_from(WriteOutcome), lands=st.sampled_from(["at once", "never", "late"]))
    def the_command_goes_wrong(self, outcome: WriteOutcome, lands: str) -> None:
        (command,) = self.commands
        self._perform(outcome, lands=lands == "at once")
        if lands == "late":
            self.late = lambda: self._land(command)

    @precondition(lambda self: self.commands == (ReadSettings(),))
    @rule()
    def the_reading_fails(self) -> None:
        self.controller.is_readable = False
        self._perform(APPLIED, lands=True)
        self.controller.is_readable = True

    @precondition(lambda self: self._deadline_s() is not None)
    @rule()
    def the_service_oversleeps(self) -> None:
        self.time_passes(30.0)

    # People

    @precondition(lambda self: self._is_running())
    @rule(
        mode=st.none() | st.sampled_from([LoopMode.AUTO, LoopMode.MAN, LoopMode.CAS, LoopMode.NOT_KNOWN]),
        name=st.sampled_from(["gain", "integral", "derivative"]),
        number=st.sampled_from([7.0, 2.0, 1.5]),
    )
    def a_person_changes_the_mode_or_a_setting(self, mode: LoopMode | None, name: str, number: float) -> None:
        if mode is None:
            self.controller.fields = replace(self.controller.fields, **{name: number})
        else:
            self.controller.set_mode(mode)

    @precondition(lambda self: self._is_running())
    @rule()
    def a_person_cancels(self) -> None:
        assert self.state is not None
        state, commands = step(self.state, CancelAsked(self.controller.now_s, "A. Person"))
        assert commands == ()
        self.state = state

    # What must hold

    @invariant()
    def no_setting_is_written_without_a_word(self) -> None:
        if self.state is None:
            assert self.controller.commands == []

    @invariant()
    def there_is_always_one_thing_to_wait_for(self) -> None:
        if self.state is not None:
            assert len(self.commands) + (self._deadline_s() is not None) == (0 if self.state.is_over else 1)

    @invariant()
    def the_end_is_what_was_read(self) -> None:
        state = self.state
        if state is None or not state.is_over:
            return
        if state.phase is Phase.REFUSED:
            assert self.controller.writes == []
            return
        assert self.is_read_after_write
        if state.phase is Phase.UNVERIFIED:
            assert state.because
            return
        assert state.last_read is not None
        expected = self.plan.fields if state.phase is Phase.WRITTEN else self.plan.as_found
        assert not changed_fields(expected, state.last_read.fields)
        assert self.controller.writes
        if "MODE_TAKEN" not in [refusal.code for refusal in state.because]:
            assert state.last_read.mode is state.mode_found

    def time_passes(self, late_s: float) -> None:
        if self.late is not None:
            self.late()
            self.late = None
        deadline_s = self._deadline_s()
        assert deadline_s is not None
        assert self.state is not None
        self.controller.now_s = max(self.controller.now_s, deadline_s) + late_s
        self._take(step(self.state, TimePassed(self.controller.now_s)))

    def _perform(self, outcome: WriteOutcome, lands: bool) -> None:
        (command,) = self.commands
        assert self.state is not None
        if isinstance(command, WriteField):
            assert self.mode_read in (LoopMode.MAN, LoopMode.AUTO)
            assert self.mode_read is LoopMode.MAN or not self.plan.write_in_manual
            assert command.number in (number_of(self.plan.fields, command.name), number_of(OLD, command.name))
            self._assert_no_foreign_number()
            self.is_read_after_write = False
        self.controller.on_write = lambda *_: (outcome, lands)
        self.controller.on_mode = lambda _: (outcome, lands)
        event = self.controller.perform(command)
        if isinstance(command, ReadSettings):
            self.is_read_after_write = True
        if isinstance(event, SettingsRead):
            self.mode_read = event.mode
        self._take(step(self.state, event))

    def _assert_no_foreign_number(self) -> None:
        """Nothing is written over numbers that can't come from us, but for the last field that was sent."""
        assert self.state is not None
        assert self.state.last_read is not None
        sent = self.controller.writes[-1].name if self.controller.writes else None
        for name in {"gain", "integral", "derivative"} - {sent}:
            read = number_of(self.state.last_read.fields, name)
            assert read in (number_of(self.plan.fields, name), number_of(OLD, name))

    def _take(self, stepped: tuple[WriteState, tuple[Command, ...]]) -> None:
        self.state, self.commands = stepped

    def _land(self, command: Command) -> None:
        match command:
            case WriteField(name, number):
                self.controller.fields = replace(self.controller.fields, **{name: number})
            case SetMode(mode):
                self.controller.set_mode(mode)
            case ReadSettings() | SetSetpoint():
                raise AssertionError(command)

    def _deadline_s(self) -> float | None:
        return None if self.state is None else next_deadline_s(self.state)

    def _is_running(self) -> bool:
        return self.state is not None and not self.state.is_over


TestConfirmedWrite = ConfirmedWrite.TestCase
TestConfirmedWrite.settings = settings(stateful_step_count=10, max_examples=400)
