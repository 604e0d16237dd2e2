"""Where words go: answers to standard output, everything said meanwhile to standard error."""

import json
import sys
from collections.abc import Mapping

from pydantic import BaseModel
from rich.console import Console
from rich.theme import Theme

_PAGE_COLUMNS = 110
_THEME = Theme({"stop": "bold red", "caution": "yellow", "good": "green", "quiet": "dim", "head": "bold"})


class Voice:
    """Prints for one command.

    With ``is_json`` standard output carries one JSON object and nothing else; people are spoken to on
    standard error.
    """

    def __init__(self, *, is_json: bool = False) -> None:
        self.is_json = is_json
        self.console = Console(stderr=is_json, theme=_THEME, highlight=False, soft_wrap=False)
        if not self.console.is_terminal:
            self.console.width = _PAGE_COLUMNS  # a file or a pipe has no width of its own

    def say(self, text: str = "", style: str | None = None) -> None:
        """One paragraph for a person; never read as markup."""
        self.console.print(text, style=style, markup=False, soft_wrap=not self.console.is_terminal)

    def answer(self, model: BaseModel | Mapping[str, object]) -> None:
        """The command's answer as one JSON object, when it was asked for."""
        if self.is_json:
            text = model.model_dump_json() if isinstance(model, BaseModel) else json.dumps(model, allow_nan=False)
            sys.stdout.write(text + "\n")
            sys.stdout.flush()


def complain(text: str) -> None:
    """A fault, on standard error."""
    Console(stderr=True, theme=_THEME, highlight=False, soft_wrap=True).print(text, style="stop", markup=False)
