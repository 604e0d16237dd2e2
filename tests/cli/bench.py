"""A recording operator and a voice on a terminal of a given width, for commands in virtual time."""

import io
import json
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from typing import Any

import pytest
from rich.console import Console
from rich.theme import Theme

from autotune.cli.printing import Voice
from autotune.loop.outcome import Refusal

STYLES = Theme(dict.fromkeys(("stop", "caution", "good", "quiet", "head"), "bold"))


@dataclass
class RecordingOperator:
    """Says what it was told to say, and keeps what it was shown."""

    permission: str | None = "permit 77"
    digest: Callable[[str], str | Refusal] = lambda shown: shown
    name: str | None = "R. Lind"
    shown: list[str] = field(default_factory=list)

    def allows(self, cautions: Sequence[str], loop: str) -> str | None:
        self.shown += [*cautions, loop]
        return self.permission

    def types_digest(self, cautions: Sequence[str], short_digest: str) -> str | Refusal:
        self.shown += [*cautions, short_digest]
        return self.digest(short_digest)


class TerminalVoice(Voice):
    """A voice on a terminal in memory."""

    def __init__(self, width: int) -> None:
        super().__init__()
        self.screen = io.StringIO()
        self.console = Console(file=self.screen, force_terminal=True, width=width, height=50, highlight=False)
        self.console.push_theme(STYLES)


def one_object(capsys: pytest.CaptureFixture[str]) -> dict[str, Any]:
    """Standard output is one line with one strict JSON object."""

    def refuse(word: str) -> None:
        raise AssertionError(f"{word} is no JSON")

    out = capsys.readouterr().out
    assert out.count("\n") == 1, out
    answer: dict[str, Any] = json.loads(out, parse_constant=refuse)
    return answer
