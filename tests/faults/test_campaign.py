"""A short campaign: every fault once, its moments spread over all phases of a test and of a write of settings.

``python -m tests.faults --runs N`` goes on from here: every fault at every moment, again and again.
"""

import asyncio
from collections import Counter

import pytest

from tests.faults.campaign import Outcome, Run, Tally, campaign, described
from tests.faults.evidence import End
from tests.faults.moments import OF_A_TEST, OF_SETTINGS, Moment
from tests.faults.strikes import FAULTS, Fault

pytestmark = pytest.mark.socket

PAIRS = 4


def spread() -> list[Run]:
    """Every fault once, each at that of its moments which was struck least so far."""
    struck: Counter[Moment] = Counter()
    runs = []
    for seed, fault in enumerate(FAULTS):
        moment = min(fault.moments, key=lambda one: struck[one])
        struck[moment] += 1
        runs.append(Run(fault, moment, seed))
    return runs


RUNS = spread()


@pytest.fixture(scope="module")
def tally() -> Tally:
    return asyncio.run(campaign(RUNS, PAIRS))


def outcomes(tally: Tally) -> list[Outcome]:
    assert tally.outcomes
    return tally.outcomes


def test_the_short_campaign_strikes_in_every_phase() -> None:
    assert {run.moment for run in RUNS} == {*OF_A_TEST, *OF_SETTINGS}


@pytest.mark.parametrize("fault", FAULTS, ids=[f"{index} {fault.name}" for index, fault in enumerate(FAULTS)])
def test_a_fault_ends_as_it_may(tally: Tally, fault: Fault) -> None:
    if fault.needs in tally.skipped:
        pytest.skip(f"this machine permits no {fault.needs}: {tally.skipped[fault.needs]}")
    (outcome,) = (one for one in outcomes(tally) if one.run.fault is fault)
    assert not outcome.complaints, described(outcome)


def test_no_loop_is_left_otherwise_than_found_without_a_loud_word(tally: Tally) -> None:
    assert [one.told for one in outcomes(tally) if one.verdict.end is End.SILENT] == []


def test_no_write_on_the_wire_is_beyond_the_limits(tally: Tally) -> None:
    assert sum(one.verdict.beyond_limits for one in outcomes(tally)) == 0


def test_nothing_is_written_once_the_loop_is_no_longer_ours(tally: Tally) -> None:
    assert sum(one.verdict.writes_after_release for one in outcomes(tally)) == 0


def test_every_run_is_counted_once(tally: Tally) -> None:
    report = tally.as_json()
    ends = ("as_found_restored", "released", "stranded", "silent")
    assert report["injected"] == sum(report[end] for end in ends) == len(tally.outcomes)
    assert tally.missed == []
