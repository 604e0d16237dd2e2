"""What each class of OPC UA status codes does to a test that is under way, from the code on the wire to the hand-back.

The codes are the standard's own (OPC 10000-6, StatusCode.csv).
"""

import pytest

from autotune.experiment.interlocks import TripCode
from autotune.experiment.phases import Phase
from autotune.experiment.state import Stage
from autotune.field.opc_ua.status import to_quality
from tests.fakes.plant import WITH_GUARD
from tests.field.reference import expected
from tests.service.bench import Ran, assert_as_found, assert_journal_replays, assert_s1_on_the_wire, begin, run

CODES: dict[str, int] = {name: int(code, 16) for name, code in expected("ST-UA1").items()}
LIMITED_HIGH = 0x0600  # the info type DataValue with the limit bits "high", over Good

DISTURBED = {
    name: code for name, code in CODES.items() if name not in ("Good", "GoodOverload") and not name.startswith("Bad")
} | {"limited": LIMITED_HIGH}
FAILED = {name: code for name, code in CODES.items() if name.startswith("Bad")}


def run_with(name: str, code: int) -> Ran:
    """A test during whose cycles the tag takes this status, and keeps it."""
    ran = begin(WITH_GUARD)
    quality = to_quality(code)

    def colour(_number: int) -> None:
        if ran.experiment.stage is Stage.CYCLING:
            ran.link.qualities[name] = quality

    return run(ran, on_pass=colour)


@pytest.mark.parametrize("name", ["Good", "GoodOverload"])
def test_a_good_status_lets_a_test_go_to_its_end(name: str) -> None:
    ran = run_with("pv", CODES[name])
    assert ran.experiment.phase is Phase.COMPLETE, ran.said


@pytest.mark.parametrize("name", DISTURBED)
def test_a_pv_that_is_forced_clamped_or_doubted_ends_the_test_and_the_loop_is_as_found(name: str) -> None:
    ran = run_with("pv", DISTURBED[name])
    assert ran.experiment.phase is Phase.ABORTED, ran.said
    assert ran.experiment.trip is not None
    assert ran.experiment.trip.code == TripCode.PV_QUALITY.name
    assert_as_found(ran)
    assert_s1_on_the_wire(ran)
    assert_journal_replays(ran)


@pytest.mark.parametrize("name", FAILED)
def test_onto_a_failed_pv_automatic_is_not_given_back(name: str) -> None:
    """S3: manual at the output as found, and loudly so."""
    ran = run_with("pv", FAILED[name])
    assert ran.experiment.phase is Phase.STRANDED, ran.said
    assert ran.experiment.trip is not None
    assert ran.experiment.trip.code == TripCode.PV_QUALITY.name
    assert ran.experiment.as_found is not None
    assert ran.link.image["op"] == pytest.approx(ran.experiment.as_found.op_pct, abs=1e-3)
    assert_s1_on_the_wire(ran)
    assert_journal_replays(ran)
