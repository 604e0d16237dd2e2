"""One run of the tool under attack, as its own process: ``python -m tests.faults.tool test|settings CONFIG LOOP``.

``test`` is the command ``autotune test --json`` as a person runs it, permission on standard input.  ``settings`` is
``autotune restore --json``: settings as found on the newest sheet are confirmed and written.  Three things differ from
the command, none of which decides anything: identification runs in place, the digest is typed as shown, and the
wall clock can be stepped while it runs.
"""

import sys
from collections.abc import Sequence
from dataclasses import replace
from datetime import datetime, timedelta
from pathlib import Path

from autotune.cli import exit_code_of
from autotune.cli.operators import PersonAtTheTerminal
from autotune.cli.printing import Voice, complain
from autotune.cli.settings import restore
from autotune.cli.signals import run_to_its_end
from autotune.cli.test import test
from autotune.config.load import load
from autotune.errors import AutotuneError
from autotune.service.clock import WallClock, utc_now
from autotune.service.estimator import InlineEstimator
from autotune.service.workplace import open_workplace

CLOCK_STEP = "clock-step-s"
"""Name of the file beside the configuration that holds by how many seconds the wall clock has been stepped."""


class TypesWhatIsShown:
    """Confirms whatever it is asked.  It may only ever be given a soft plant."""

    name = "bench of the faults"

    def allows(self, cautions: Sequence[str], loop: str) -> str:
        """Permission on the bench."""
        return f"{len(cautions)} cautions read, {loop} stands on a bench"

    def types_digest(self, cautions: Sequence[str], short_digest: str) -> str:
        """The digest as shown, whatever the cautions are."""
        return short_digest if cautions else ""


def stepped_clock(file: Path) -> WallClock:
    """The wall clock of this machine, off by the number of seconds in ``file`` as long as there is one."""

    def now() -> datetime:
        try:
            return utc_now() + timedelta(seconds=float(file.read_text("ascii")))
        except FileNotFoundError:
            return utc_now()

    return now


def main(arguments: Sequence[str]) -> int:
    """Run once; the exit code is that of the command."""
    act, config, loop_name = arguments
    voice = Voice(is_json=True)
    try:
        kept = open_workplace(load(Path(config)), may_create=True)
        workplace = replace(
            kept, estimator=InlineEstimator(), wall_clock=stepped_clock(Path(config).with_name(CLOCK_STEP))
        )
        loop = workplace.loop(loop_name)
        if act == "test":
            return run_to_its_end(test(voice, workplace, loop, PersonAtTheTerminal(voice, "bench of the faults")))
        return run_to_its_end(restore(voice, workplace, loop, None, TypesWhatIsShown()))
    except AutotuneError as fault:
        complain(str(fault))
        return exit_code_of(fault)


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
