"""Who answers the questions: a person at the terminal.

The scripted operator of the rehearsal lives with the rehearsal, since it may reach nothing but the
soft plant.
"""

import signal
import sys
from collections.abc import Sequence
from typing import Protocol

from autotune.cli.printing import Voice
from autotune.loop.outcome import Refusal


class Operator(Protocol):
    """Answers with the line that a person would type."""

    @property
    def name(self) -> str | None:
        """The name to put on the sheet; ``None`` is the operating system's user."""
        ...

    def allows(self, cautions: Sequence[str], loop: str) -> str | None:
        """Show the cautions and ask for permission; the words of the permission, or ``None`` for no."""
        ...

    def types_digest(self, cautions: Sequence[str], short_digest: str) -> str | Refusal:
        """Show the cautions and ask for the digest to be typed; what was typed, or why nobody is asked."""
        ...


class PersonAtTheTerminal:
    """Asks on the terminal.  An empty line, an end of input or Ctrl-C is always a no."""

    def __init__(self, voice: Voice, name: str | None = None) -> None:
        self._voice = voice
        self._name = name

    @property
    def name(self) -> str | None:
        """The name given on the command line."""
        return self._name

    def allows(self, cautions: Sequence[str], loop: str) -> str | None:
        """Permission is the loop's tag name typed, then a line that says who allowed it."""
        self._show(cautions)
        if self._ask(f"Type the loop's tag name to accept these cautions and start ({loop}): ") != loop:
            return None
        words = self._ask("Permission: who allowed this test, under which permit? ")
        return words or None

    def types_digest(self, cautions: Sequence[str], short_digest: str) -> str | Refusal:
        """The digest typed is the confirmation; a program that feeds the answer in is no person."""
        if not (sys.stdin.isatty() and self._voice.console.file.isatty()):
            return Refusal(
                "NOT_AT_A_TERMINAL",
                "settings are confirmed by a person who reads the digest and types it at a terminal",
                "run the command in a terminal, without redirecting its input or its questions",
            )
        self._show(cautions)
        return self._ask(f"Type {short_digest} to accept these cautions and write exactly these values: ")

    def _show(self, cautions: Sequence[str]) -> None:
        self._voice.say()
        self._voice.say("Before you go on", style="head")
        for number, caution in enumerate(cautions, start=1):
            self._voice.say(f" {number}. {caution}", style="caution")
        self._voice.say()

    def _ask(self, question: str) -> str:
        """One line.

        The running event loop must not swallow Ctrl-C here, from the moment that the question can be seen.
        """
        before = signal.signal(signal.SIGINT, signal.default_int_handler)
        try:
            self._voice.console.print(question, end="", markup=False)
            sys.stdout.flush()
            return sys.stdin.readline().strip()
        except KeyboardInterrupt:
            self._voice.say()
            return ""
        finally:
            signal.signal(signal.SIGINT, before)
