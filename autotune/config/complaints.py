"""From what is wrong to one line that names file, key, fault and remedy."""

import difflib
import json
import re
from collections.abc import Mapping
from copy import deepcopy
from dataclasses import dataclass
from typing import Any, get_args

from pydantic import ValidationError
from pydantic.fields import FieldInfo
from pydantic_core import ErrorDetails

from autotune.config.numbers import Table
from autotune.errors import Complaint

Loc = tuple[str | int, ...]
"""The way to a key inside one table: names, and positions in lists."""

_SHOWN_LENGTH = 40
_BARE_KEY = re.compile(r"[A-Za-z0-9_.\-]+")


@dataclass(frozen=True, slots=True)
class Flaw:
    """Something wrong at ``loc``, before it is known which file holds it."""

    loc: Loc
    fault: str
    remedy: str


@dataclass(frozen=True, slots=True)
class Section:
    """One table as written: its file, its name in complaints, its content and what it inherits from."""

    file: str
    head: str
    own: Mapping[str, Any]
    base: "Section | None" = None

    @property
    def merged(self) -> dict[str, Any]:
        """The content with all that it inherits; what it says itself wins."""
        return merge(self.base.merged, self.own) if self.base is not None else dict(self.own)

    def complaint(self, flaw: Flaw) -> Complaint:
        """The flaw as one line, laid at the table that really holds the key."""
        section = self.holder(flaw.loc)
        key = dotted(section.head, flaw.loc, section.merged)
        return Complaint(one_line(section.file), key, one_line(flaw.fault), one_line(flaw.remedy))

    def holder(self, loc: Loc) -> "Section":
        """The table that says what stands at ``loc``: this one, or the one it inherits from."""
        if self.base is None or _depth(self.own, loc) >= _depth(self.base.merged, loc):
            return self
        return self.base.holder(loc)


def merge(base: Mapping[str, Any], own: Mapping[str, Any]) -> dict[str, Any]:
    """Both tables in one; where both have a key, tables are merged and anything else is ``own``'s."""
    merged = dict(base)
    for key, content in own.items():
        inherited = merged.get(key)
        if isinstance(inherited, dict) and isinstance(content, dict):
            merged[key] = merge(inherited, content)
        else:
            merged[key] = content
    return merged


def dotted(head: str, loc: Loc, content: Mapping[str, Any]) -> str:
    """The key as a person looks for it: ``loop[TIC-204].watch[pump-running].low_eu``."""
    key, here = head, content
    for part in loc:
        here = _step(here, part)
        if isinstance(part, int):
            name = here.get("name") if isinstance(here, dict) else None
            key += f"[{bare(name) if isinstance(name, str) else f'no. {part + 1}'}]"
        else:
            key += f".{bare(part)}" if key else bare(part)
    return key


def bare(name: str) -> str:
    """A key or a name as it stands in a file, quoted where it has to be."""
    return name if _BARE_KEY.fullmatch(name) else shown(name)


def shown(content: object) -> str:
    """What a file says, on one line and not too long."""
    text = json.dumps(content, ensure_ascii=False) if isinstance(content, str | bool) else _plain(content)
    text = one_line(text)
    return text if len(text) <= _SHOWN_LENGTH else f"{text[: _SHOWN_LENGTH - 3]}..."


def one_line(text: str) -> str:
    """The text without line breaks and other control characters."""
    return "".join(letter if letter.isprintable() else " " for letter in text)


def meant(word: str, known: list[str]) -> str:
    """``did you mean "...", `` where a known word is close; else nothing."""
    by_unit = [key for key in known if key.startswith(f"{word}_")]
    close = by_unit or difflib.get_close_matches(word, known, n=1, cutoff=0.6)
    return f"did you mean `{close[0]}`? " if close else ""


def without_unknown_keys(content: Mapping[str, Any], error: ValidationError) -> dict[str, Any]:
    """The content without the keys that no table knows, so that the rest can be judged all the same."""
    pruned = deepcopy(dict(content))
    for detail in error.errors(include_url=False, include_input=False):
        if detail["type"] == "extra_forbidden":
            *way, last = detail["loc"]
            here: Any = pruned
            for part in way:
                here = here[part]
            del here[last]
    return pruned


def flaws_of(error: ValidationError, table: type[Table]) -> list[Flaw]:
    """Every fault that the rules of single keys found in a table of a file."""
    return [_flaw(detail, table) for detail in error.errors(include_url=False, include_context=True)]


def _flaw(detail: ErrorDetails, table: type[Table]) -> Flaw:
    loc = tuple(part for part in detail["loc"] if part != "[key]")
    kind, content, context = detail["type"], detail.get("input"), detail.get("ctx", {})
    if kind == "extra_forbidden":
        known = sorted(_table_at(table, loc[:-1]).model_fields)
        word = str(loc[-1])
        remedy = f"{meant(word, known)}known here: {', '.join(known)}"
        return Flaw(loc, "unknown key", remedy)
    about = _about(table, loc)
    if kind == "missing":
        return Flaw(loc, "missing", f"add {bare(str(loc[-1]))}: {about}")
    names = [part for part in loc if isinstance(part, str)]
    return Flaw(loc, _fault(kind, content, context), f"write {bare(names[-1]) if names else 'it'} as {about}")


_WRONG_TYPE = {
    "float_type": "is no number",
    "int_type": "is no whole number",
    "int_from_float": "is no whole number",
    "bool_type": "is neither true nor false",
    "string_type": "is no text in quotes",
    "model_type": "is no table",
    "model_attributes_type": "is no table",
    "dict_type": "is no table",
    "list_type": "is no list",
    "finite_number": "is not finite",
    "string_too_short": "is empty",
    "string_too_long": "is too long",
    "too_short": "has too few entries",
    "too_long": "has too many entries",
    "string_pattern_mismatch": "has a character that doesn't belong there",
}

_BEYOND = {
    "greater_than": ("must be above", "gt"),
    "greater_than_equal": ("must be at least", "ge"),
    "less_than": ("must be below", "lt"),
    "less_than_equal": ("must be at most", "le"),
}


def _fault(kind: str, content: object, context: Mapping[str, Any]) -> str:
    if kind in _WRONG_TYPE:
        return f"{shown(content)} {_WRONG_TYPE[kind]}"
    if kind in _BEYOND:
        words, bound = _BEYOND[kind]
        return f"{shown(content)} is out of range: it {words} {context[bound]:g}"
    if kind in ("enum", "literal_error"):
        return f"{shown(content)} is not one of {context['expected']}"
    return f"{shown(content)} can't stand here"


def _about(table: type[Table], loc: Loc) -> str:
    """What the key at ``loc`` is for, in the words of the schema."""
    names = [part for part in loc if isinstance(part, str)]
    for length in range(len(names), 0, -1):
        field = _field_at(table, tuple(names[:length]))
        if field is not None and field.description:
            return field.description
    return table.__doc__ or ""


def _field_at(table: type[Table], names: tuple[str, ...]) -> FieldInfo | None:
    return _table_at(table, names[:-1]).model_fields.get(names[-1])


def _table_at(table: type[Table], loc: Loc) -> type[Table]:
    """The table that lies at ``loc``; list positions and free names of a table of tables are passed over."""
    here = table
    for part in loc:
        field = here.model_fields.get(part) if isinstance(part, str) else None
        inner = _table_in(field.annotation) if field is not None else None
        here = inner if inner is not None else here
    return here


def _table_in(annotation: object) -> type[Table] | None:
    if isinstance(annotation, type) and issubclass(annotation, Table):
        return annotation
    return next((found for part in get_args(annotation) if (found := _table_in(part)) is not None), None)


def _step(content: object, part: str | int) -> Any:
    if isinstance(part, int):
        return content[part] if isinstance(content, list) and part < len(content) else None
    return content.get(part) if isinstance(content, Mapping) else None


def _depth(content: Mapping[str, Any], loc: Loc) -> int:
    """How far along ``loc`` the content really has keys."""
    here: Any = content
    for depth, part in enumerate(loc):
        here = _step(here, part)
        if here is None:
            return depth
    return len(loc)


def _plain(content: object) -> str:
    if isinstance(content, Mapping):
        return "a table"
    if isinstance(content, list):
        return "a list"
    if isinstance(content, int) and abs(content) > 10**_SHOWN_LENGTH:
        return "a huge number"
    return str(content)
