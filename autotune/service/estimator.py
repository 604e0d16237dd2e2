"""Identification in a worker process, so that a long calculation never delays a scan."""

import asyncio
import multiprocessing
import signal
from concurrent.futures import ProcessPoolExecutor
from typing import Protocol

from autotune.identify.findings import FindingsOrRefusal
from autotune.identify.measure import measure
from autotune.loop.record import Record


class Estimator(Protocol):
    """Turns a record into findings without holding up the caller's loop."""

    async def measure(self, record: Record) -> FindingsOrRefusal:
        """Identify one record."""
        ...


class InlineEstimator:
    """Identifies in the calling task: for virtual time and for short records without a scan to keep."""

    async def measure(self, record: Record) -> FindingsOrRefusal:
        """Identify one record, here and now."""
        return measure(record)


class WorkerEstimator:
    """Identifies in a process of its own that comes and goes with each record."""

    async def measure(self, record: Record) -> FindingsOrRefusal:
        """Identify one record; raises what the worker raised."""
        spawn = multiprocessing.get_context("spawn")
        with ProcessPoolExecutor(max_workers=1, mp_context=spawn, initializer=_leave_ctrl_c_to_the_parent) as pool:
            return await asyncio.get_running_loop().run_in_executor(pool, measure, record)


def _leave_ctrl_c_to_the_parent() -> None:
    signal.signal(signal.SIGINT, signal.SIG_IGN)
