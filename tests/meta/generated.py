"""The parts of DEVELOPERS.md that are drawn from the code.

``python -m tests.meta.generated --write`` puts them between their markers, ``--check`` tells which differ.
"""

import re
import sys
from collections.abc import Callable, Mapping
from pathlib import Path

from autotune.experiment import phases

DOCUMENT = Path(__file__).parents[2] / "DEVELOPERS.md"


def _as_diagram(mermaid: str) -> str:
    return f"```mermaid\n{mermaid.strip()}\n```"


PARTS: Mapping[str, Callable[[], str]] = {
    "experiment": lambda: _as_diagram(phases.to_mermaid()),
}


def with_parts(text: str, parts: Mapping[str, Callable[[], str]] = PARTS) -> str:
    """The document's text with every part as the code draws it now.

    Raises ``LookupError`` when a part's markers, ``<!-- generated: NAME -->`` and ``<!-- end -->``, are missing.
    """
    for name, draw in parts.items():
        places = [*re.finditer(rf"(?<=<!-- generated: {name} -->\n).*?(?=<!-- end -->)", text, re.DOTALL)]
        if len(places) != 1:
            raise LookupError(f"needs one <!-- generated: {name} --> ... <!-- end -->, has {len(places)}")
        text = f"{text[: places[0].start()]}{draw()}\n{text[places[0].end() :]}"
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
