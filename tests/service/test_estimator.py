"""Identification in a worker process: the same findings, one thread, and our own environment left alone."""

import os

from autotune.identify.findings import Findings
from autotune.service.estimator import THREADS_OF_NUMPY, InlineEstimator, WorkerEstimator
from tests.identify.exact_relay import Bench, reference_batch, sampled_relay

RECORD = sampled_relay(reference_batch()[9], Bench(), 1)


async def test_a_worker_finds_what_the_calling_process_finds() -> None:
    here, there = await InlineEstimator().measure(RECORD), await WorkerEstimator().measure(RECORD)
    assert isinstance(here, Findings)
    assert isinstance(there, Findings)
    assert abs(there.ultimate.ultimate_gain.best / here.ultimate.ultimate_gain.best - 1) < 1e-9


async def test_the_limit_of_threads_is_the_workers_alone() -> None:
    before = {name: os.environ.get(name) for name in THREADS_OF_NUMPY}
    await WorkerEstimator().measure(RECORD)
    assert {name: os.environ.get(name) for name in THREADS_OF_NUMPY} == before
