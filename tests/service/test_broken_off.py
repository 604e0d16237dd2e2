"""A test that our own fault broke off is told as what it is: the machine never came to an end of its own."""

from dataclasses import replace

import pytest

from autotune.experiment.machine import begin
from autotune.experiment.phases import Phase
from autotune.loop.mode import LoopMode
from autotune.service.sheet_mapping import outcome_section
from tests.experiment.bench import plan_for
from tests.experiment.readings import found

FAULTS = ("IllegalEvent: ours", "last-resort hand-back: restored; as found")


@pytest.mark.parametrize("phase", [Phase.BASELINE, Phase.TESTING, Phase.RESTORING])
def test_a_touched_loop_counts_as_stranded_and_is_to_be_compared_at_the_panel(phase: Phase) -> None:
    experiment = replace(begin(plan_for()), phase=phase, as_found=found(mode=LoopMode.AUTO))
    outcome = outcome_section(experiment, FAULTS)
    assert outcome.ended == "STRANDED"
    assert "broke off by our own fault. Go to the panel now" in outcome.text
    assert "output 50.00 %" in outcome.text
    assert outcome.text.endswith("; ".join(FAULTS))


@pytest.mark.parametrize("phase", [Phase.IDLE, Phase.CHECKING])
def test_a_loop_that_was_never_touched_counts_as_aborted(phase: Phase) -> None:
    outcome = outcome_section(replace(begin(plan_for()), phase=phase), FAULTS)
    assert outcome.ended == "ABORTED"
    assert FAULTS[0] in outcome.text
