"""Break a test and a write of settings on purpose: ``python -m tests.faults --runs N [--seed S] [--pairs P] [--json]``.

Tool and soft plant are processes of their own on a fast loop (ultimate period about 1 s, scan 50 ms, PLC scan 20 ms).
Every run strikes once, at a moment told by the wire; how the loop was left is read from the plant's panel.  Exits
with 1 when anything ended otherwise than ``tests.faults.strikes.FAULTS`` allows.
"""

import argparse
import asyncio
import json
import os
import signal
import sys
from collections.abc import Coroutine, Sequence
from typing import Any

from tests.faults.campaign import Tally, campaign, planned


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the campaign and print its report."""
    parser = argparse.ArgumentParser(prog="python -m tests.faults", description=__doc__)
    parser.add_argument("--runs", type=int, default=40, help="how many faults to inject (default %(default)s)")
    parser.add_argument("--seed", type=int, default=1, help="draws order, instants and lengths (default %(default)s)")
    parser.add_argument(
        "--pairs", type=int, default=2, help="how many plants and tools at a time (default %(default)s)"
    )
    parser.add_argument("--nice", type=int, default=0, help="how much to give way to other work of this machine")
    parser.add_argument("--fault", help="only faults whose name contains this")
    parser.add_argument("--json", action="store_true", help="one JSON object on standard output")
    chosen = parser.parse_args(arguments)
    os.nice(chosen.nice)
    runs = planned(chosen.runs, chosen.seed, lambda run: chosen.fault is None or chosen.fault in run.fault.name)
    tally = asyncio.run(_until_terminated(campaign(runs, chosen.pairs, tell=_tell)))
    print(json.dumps(tally.as_json(), indent=None if chosen.json else 1))
    return 1 if is_bad(tally) else 0


def _tell(line: str) -> None:
    print(line, file=sys.stderr, flush=True)


async def _until_terminated(running: Coroutine[Any, Any, Tally]) -> Tally:
    """A campaign that is asked to end leaves no process, network or disk behind."""
    task = asyncio.ensure_future(running)
    asyncio.get_running_loop().add_signal_handler(signal.SIGTERM, task.cancel)
    return await task


def is_bad(tally: Tally) -> bool:
    """Whether a run ended as it must not."""
    return any(outcome.complaints for outcome in tally.outcomes)


if __name__ == "__main__":
    sys.exit(main())
