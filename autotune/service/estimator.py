"""Identification and design in a worker process, so that a long calculation never delays a scan."""

import asyncio
import multiprocessing
import os
import signal
from collections.abc import Callable, Iterator
from concurrent.futures import ProcessPoolExecutor
from contextlib import contextmanager
from typing import Protocol, TypeVar

from autotune.design.proposal import ProposalSheet
from autotune.identify.findings import FindingsOrRefusal
from autotune.identify.measure import measure
from autotune.loop.record import Record
from autotune.service.proposing import DesignTask, proposals_for

Given = TypeVar("Given")
Made = TypeVar("Made")

THREADS_OF_NUMPY = ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS")


class Estimator(Protocol):
    """Turns a record into findings, and these into proposals, without holding up the caller's loop."""

    async def measure(self, record: Record) -> FindingsOrRefusal:
        """Identify one record."""
        ...

    async def propose(self, task: DesignTask) -> ProposalSheet:
        """Make the proposals for one test."""
        ...


class InlineEstimator:
    """Identifies in the calling task: for virtual time and for short records without a scan to keep."""

    async def measure(self, record: Record) -> FindingsOrRefusal:
        """Identify one record, here and now."""
        return measure(record)

    async def propose(self, task: DesignTask) -> ProposalSheet:
        """Make the proposals, here and now."""
        return proposals_for(task)


class WorkerEstimator:
    """Identifies and designs in a process of its own that comes and goes with each record, on one thread.

    The systems solved are small: more threads only wait for each other, and take the processor from the scan.
    """

    async def measure(self, record: Record) -> FindingsOrRefusal:
        """Identify one record; raises what the worker raised."""
        return await _in_worker(measure, record)

    async def propose(self, task: DesignTask) -> ProposalSheet:
        """Make the proposals for one test; raises what the worker raised."""
        return await _in_worker(proposals_for, task)


async def _in_worker(work: Callable[[Given], Made], given: Given) -> Made:
    spawn = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(max_workers=1, mp_context=spawn, initializer=_leave_ctrl_c_to_the_parent) as pool:
        with _one_thread_for_children():
            outcome = asyncio.get_running_loop().run_in_executor(pool, work, given)
        return await outcome


@contextmanager
def _one_thread_for_children() -> Iterator[None]:
    """A spawned process reads these once, when it loads numpy; ours has long done so."""
    before = {name: os.environ.get(name) for name in THREADS_OF_NUMPY}
    os.environ.update(dict.fromkeys(THREADS_OF_NUMPY, "1"))
    try:
        yield
    finally:
        for name, setting in before.items():
            if setting is None:
                del os.environ[name]
            else:
                os.environ[name] = setting


def _leave_ctrl_c_to_the_parent() -> None:
    signal.signal(signal.SIGINT, signal.SIG_IGN)
