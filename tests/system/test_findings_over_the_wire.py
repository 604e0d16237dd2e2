"""A whole test over a real socket finds what the soft plant really is."""

import asyncio
from cmath import rect
from math import tau
from pathlib import Path

import pytest

from autotune.identify.findings import Findings
from autotune.loop.record import TimeBase
from autotune.service.estimator import WorkerEstimator
from autotune.service.testing import SupervisedTest, TestEnd
from tests.system.bench import WITHOUT_CLOCK_TAGS, Change, bench_workplace, permission
from tests.system.plant import LOOP, soft_plant
from tests.system.together import Outcomes, Scenario, Together
from tests.system.true_plant import is_near, true_plant

pytestmark = pytest.mark.socket

CONFIGURATIONS: dict[str, tuple[Change, ...]] = {"with clock tags": (), "without them": tuple(WITHOUT_CLOCK_TAGS)}
TRUE = true_plant("fast-loop", LOOP)


MACHINE_GAVE_OUT = frozenset({"SAMPLE_STALE", "LINK_LOST", "TICKS_MISSED", "HEARTBEAT_LOST", "GUARD_GAVE_BACK"})
"""Trips of a machine that stood still for a while: right, but nothing about the findings that are looked at here."""

ATTEMPTS = 3


async def identified(folder: Path, changes: tuple[Change, ...]) -> Findings:
    for attempt in range(ATTEMPTS):
        ended = await one_test(folder / str(attempt), changes)
        if ended.sheet.outcome.code not in MACHINE_GAVE_OUT:
            break
    assert ended.sheet.outcome.ended == "COMPLETE", ended.sheet.outcome
    assert isinstance(ended.findings, Findings), ended.findings
    return ended.findings


async def one_test(folder: Path, changes: tuple[Change, ...]) -> TestEnd:
    await asyncio.to_thread(folder.mkdir, parents=True)
    async with soft_plant() as plant:
        workplace, loop = bench_workplace(folder, plant.port, changes, WorkerEstimator())
        await plant.press(f"enable {LOOP}")
        await plant.until(lambda state: state["enable"])
        async with SupervisedTest(workplace, loop) as supervised:
            supervised.prepare(is_no_guard_accepted=False)
            return await supervised.run(permission())


def _scenario(changes: tuple[Change, ...]) -> Scenario[Findings]:
    return lambda folder: identified(folder, changes)


SCENARIOS = {name: _scenario(changes) for name, changes in CONFIGURATIONS.items()}


@pytest.fixture(scope="module")
def findings(together: Together) -> Outcomes[Findings]:
    return together.of(Path(__file__).stem, SCENARIOS)


@pytest.mark.parametrize("name", ["with clock tags"])
def test_the_fourier_point_is_the_plants_own_response_within_two_percent(
    findings: Outcomes[Findings], name: str
) -> None:
    found = findings.of(name)
    assert found.time_base is TimeBase.PLC_CLOCK
    point = found.fourier
    expected = TRUE.response(point.frequency_rad_per_s)
    assert abs(rect(point.gain, point.phase_rad) - expected) <= 0.02 * abs(expected)


@pytest.mark.parametrize("name", CONFIGURATIONS)
def test_the_intervals_reach_the_true_ultimate_point(findings: Outcomes[Findings], name: str) -> None:
    found = findings.of(name)
    assert (found.time_base is TimeBase.PLC_CLOCK) is (name == "with clock tags")
    ultimate_gain, ultimate_period_s = TRUE.ultimate
    gain, period_s = found.ultimate.ultimate_gain, found.ultimate.ultimate_period_s
    assert is_near(gain.low, gain.high, ultimate_gain)
    assert is_near(period_s.low, period_s.high, ultimate_period_s)
    assert gain.high - gain.low < 0.5 * ultimate_gain


def test_the_true_ultimate_point_is_where_its_gain_brings_the_response_to_minus_one() -> None:
    ultimate_gain, ultimate_period_s = TRUE.ultimate
    assert abs(ultimate_gain * TRUE.response(tau / ultimate_period_s) + 1.0) < 1e-9
