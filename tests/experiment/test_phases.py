"""The table of phases, and the safety claim as a theorem about its graph."""

import re

import pytest

from autotune.errors import IllegalEvent
from autotune.experiment.phases import TERMINAL, TOUCHED, TRANSITIONS, Phase, Trigger, next_phase, to_mermaid


def reached(from_phase: Phase, without: frozenset[Phase] = frozenset()) -> set[Phase]:
    """All phases that can be reached without passing through ``without``."""
    found: set[Phase] = set()
    waiting = [from_phase]
    while waiting:
        phase = waiting.pop()
        nexts = {to for (at, _), to in TRANSITIONS.items() if at is phase} - without - found
        found |= nexts
        waiting.extend(nexts)
    return found


@pytest.mark.parametrize("touched", [Phase.BASELINE, Phase.TESTING])
def test_a_touched_loop_comes_to_its_end_only_through_restoring_or_to_whoever_took_it(touched: Phase) -> None:
    ends_past_restoring = reached(touched, without=frozenset({Phase.RESTORING})) & TERMINAL
    assert ends_past_restoring == {Phase.RELEASED}


def test_released_is_entered_only_because_somebody_took_the_loop() -> None:
    assert {trigger for (_, trigger), to in TRANSITIONS.items() if to is Phase.RELEASED} == {Trigger.TAKEN}


def test_stranded_is_entered_only_when_the_hand_back_was_not_confirmed() -> None:
    ways = {(at, trigger) for (at, trigger), to in TRANSITIONS.items() if to is Phase.STRANDED}
    assert ways == {(Phase.RESTORING, Trigger.NOT_CONFIRMED)}


def test_nothing_leads_out_of_a_terminal_phase_and_every_other_phase_leads_to_one() -> None:
    assert not {at for at, _ in TRANSITIONS} & TERMINAL
    assert all(reached(phase) & TERMINAL for phase in Phase if not phase.is_terminal)


def test_every_phase_but_the_first_can_be_reached() -> None:
    assert reached(Phase.IDLE) == set(Phase) - {Phase.IDLE}


def test_an_untouched_loop_never_enters_restoring() -> None:
    assert Phase.RESTORING not in reached(Phase.CHECKING, without=frozenset({Phase.BASELINE}))
    assert {phase for phase in Phase if phase.is_touched} == TOUCHED == {Phase.BASELINE, Phase.TESTING, Phase.RESTORING}


def test_a_missing_entry_is_an_illegal_event() -> None:
    for phase in Phase:
        for trigger in Trigger:
            if (phase, trigger) in TRANSITIONS:
                assert next_phase(phase, trigger) is TRANSITIONS[phase, trigger]
            else:
                with pytest.raises(IllegalEvent, match=phase.value):
                    next_phase(phase, trigger)


def test_the_diagram_has_exactly_the_arrows_of_the_table() -> None:
    text = to_mermaid()
    arrows = set(re.findall(r"^    (\w+) --> (\w+): (.+)$", text, re.MULTILINE))
    assert arrows == {(at.value, to.value, trigger.value) for (at, trigger), to in TRANSITIONS.items()}
    assert text.startswith("stateDiagram-v2\n    [*] --> IDLE\n")
    assert set(re.findall(r"(\w+) --> \[\*\]", text)) == {phase.value for phase in TERMINAL}
