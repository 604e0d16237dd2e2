"""A test that is refused before it begins, by what its shell had to show first."""

from autotune.experiment.ending import refuse_start
from autotune.experiment.machine import begin
from autotune.experiment.phases import Phase
from autotune.experiment.state import EndKind
from autotune.loop.outcome import Refusal
from tests.experiment.bench import plan_for

REFUSAL = Refusal("SETTING_READ_ONLY", "gain is locked", "open it")


def test_it_ends_aborted_with_its_reason_and_nothing_to_hand_back() -> None:
    refused = refuse_start(begin(plan_for()), REFUSAL)
    assert refused.phase is Phase.ABORTED
    assert refused.end is EndKind.REFUSED
    assert refused.refusals == (REFUSAL,)
    assert refused.as_found is None
    assert refused.because == str(REFUSAL)
