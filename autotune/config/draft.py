"""Drafts of a loop's section, as TOML for a person to complete: what is known is filled in, what isn't is asked for.

Which keys there are, and the words that ask for them, come from the schema.
"""

import json
import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import get_args

from autotune.config.numbers import Table
from autotune.config.places import GUARD_NEEDS
from autotune.config.schema import GuardTable, LoopTable
from autotune.config.schema_tags import TagsTable
from autotune.config.tag_words import TAG_NAMES

Entry = str | int | float | bool
_COMMENT_COLUMN = 40


@dataclass(frozen=True, slots=True)
class LoopDraft:
    """What a list of tags tells about one loop.

    ``tags`` maps a tag's name to its keys; ``span`` holds keys of ``[loop.span]`` and ``mode_codes`` of the
    table of that name.  ``remarks`` are lines for the person who completes it.
    """

    name: str
    tags: Mapping[str, Mapping[str, Entry]]
    controller: str = ""
    service: str = ""
    span: Mapping[str, Entry] | None = None
    mode_codes: Mapping[str, Entry] | None = None
    remarks: tuple[str, ...] = ()


def draft_text(draft: LoopDraft) -> str:
    """The draft as TOML; keys to be filled in stand behind ``#`` with what they mean."""
    told: dict[str, Entry] = {"name": draft.name}
    told |= {key: text for key, text in (("controller", draft.controller), ("service", draft.service)) if text}
    lines = ["[[loop]]", *_key_lines(LoopTable, told)]
    for key, inner in _required_tables(LoopTable):
        if key == "tags":
            lines += ["", "[loop.tags]", *_tag_lines(draft)]
            continue
        known = {"span": draft.span, "mode_codes": draft.mode_codes}.get(key) or {}
        lines += ["", f"[loop.{key}]", *_key_lines(inner, known)]
    if all(name in draft.tags for name in GUARD_NEEDS):
        lines += ["", "[loop.guard]", *_key_lines(GuardTable, {})]
    return "\n".join([*lines, *(f"# {_one_line(remark)}" for remark in draft.remarks)]) + "\n"


def inline_table(entries: Mapping[str, Entry]) -> str:
    """``{ table = "holding", address = 1 }``."""
    return "{ " + ", ".join(f"{key} = {_toml(entry)}" for key, entry in entries.items()) + " }"


def _tag_lines(draft: LoopDraft) -> Iterator[str]:
    for name in TAG_NAMES:
        field = TagsTable.model_fields[name]
        if name in draft.tags:
            yield f"{name} = {inline_table(draft.tags[name])}"
        elif field.is_required():
            yield _asked(name, field.description)


def _key_lines(table: type[Table], told: Mapping[str, Entry]) -> Iterator[str]:
    for key, field in table.model_fields.items():
        if key in told:
            yield f"{key} = {_toml(told[key])}"
        elif field.is_required() and _table_of(field.annotation) is None:
            yield _asked(key, field.description)


def _asked(key: str, description: str | None) -> str:
    return f"# {key} =".ljust(_COMMENT_COLUMN) + f"# fill in: {description}"


def _required_tables(table: type[Table]) -> Iterator[tuple[str, type[Table]]]:
    for key, field in table.model_fields.items():
        inner = _table_of(field.annotation)
        if inner is not None and field.is_required():
            yield key, inner


def _table_of(annotation: object) -> type[Table] | None:
    if isinstance(annotation, type) and issubclass(annotation, Table):
        return annotation
    return next((found for part in get_args(annotation) if (found := _table_of(part)) is not None), None)


def _toml(entry: Entry) -> str:
    if isinstance(entry, str):
        return json.dumps(entry, ensure_ascii=False).replace("\x7f", "\\u007f")
    if isinstance(entry, bool):
        return "true" if entry else "false"
    return repr(entry)


def _one_line(text: str) -> str:
    return re.sub(r"\s+", " ", "".join(letter if letter.isprintable() else " " for letter in text))
