"""The parts of DEVELOPERS.md that are drawn from the code.

``python -m tests.meta.generated --write`` puts them between their markers, ``--check`` tells which differ.
"""

import re
import sys
from collections.abc import Callable, Mapping
from pathlib import Path

from autotune.confirmed_write.phases import TRANSITIONS
from autotune.experiment import phases
from autotune.experiment.interlocks import TripCode

DOCUMENT = Path(__file__).parents[2] / "DEVELOPERS.md"


def draw_experiment() -> str:
    """The phases of a test, as a Mermaid state diagram."""
    return f"```mermaid\n{phases.to_mermaid().strip()}\n```"


def draw_confirmed_write() -> str:
    """The phases of a write of settings, as a Mermaid state diagram; waiting in a phase is left out."""
    arrows = [
        f"    {phase.name} --> {to.name}: {trigger.value}"
        for phase, ways in TRANSITIONS.items()
        for trigger, to in ways.items()
        if to is not phase
    ]
    return "\n".join(["```mermaid", "stateDiagram-v2", f"    [*] --> {next(iter(TRANSITIONS)).name}", *arrows, "```"])


def draw_trips() -> str:
    """Every trip code with what it means and what to do next, as a table."""
    rows = [f"| `{code.name}` | {code.meaning} | {code.remedy} |" for code in TripCode]
    return "\n".join(["| code | it means | do |", "| --- | --- | --- |", *rows])


PARTS: Mapping[str, Callable[[], str]] = {
    "experiment": draw_experiment,
    "confirmed_write": draw_confirmed_write,
    "trips": draw_trips,
}


def with_parts(text: str, parts: Mapping[str, Callable[[], str]] = PARTS) -> str:
    """The document's text with every part as the code draws it now.

    Raises ``LookupError`` when a part's markers, ``<!-- generated: NAME -->`` and ``<!-- end -->``, are missing.
    """
    for name, draw in parts.items():
        places = [*re.finditer(rf"<!-- generated: {name} -->\n(.*?)<!-- end -->", text, re.DOTALL)]
        if len(places) != 1:
            raise LookupError(f"needs one <!-- generated: {name} --> ... <!-- end -->, has {len(places)}")
        text = f"{text[: places[0].start(1)]}{draw()}\n{text[places[0].end(1) :]}"
    return text


def main(arguments: list[str]) -> int:
    """Write or check; returns the exit code."""
    if arguments not in (["--write"], ["--check"]):
        sys.stderr.write(f"{__doc__}\n")
        return 2
    now = DOCUMENT.read_text(encoding="utf-8")
    wanted = with_parts(now)
    if arguments == ["--write"]:
        DOCUMENT.write_text(wanted, encoding="utf-8")
    elif now != wanted:
        sys.stderr.write(f"{DOCUMENT.name} is older than the code: run python -m tests.meta.generated --write\n")
        return 1
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
