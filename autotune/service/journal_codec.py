"""Strict JSON for the journal: what goes in comes out equal, and nothing else goes in.

A plain number, text, Boolean or null is itself; a tuple is a list.  Everything else is an object with
exactly one key, its tag: ``{"experiment.Started": {"t_s": 1.0}}`` a dataclass with all its fields,
``{"loop.LoopMode": "MAN"}`` a member of an enumeration, ``{"float": "nan"}`` a number that JSON lacks
(hostile readings must replay too), ``{"map": {...}}`` a mapping with text keys.  A tag is room and
class name, so that a type may move within its room.  No code is ever loaded from a journal.
"""

import inspect
import math
from collections.abc import Mapping
from dataclasses import MISSING, Field, fields, is_dataclass
from enum import Enum
from types import MappingProxyType, ModuleType
from typing import Any

from autotune.confirmed_write import commands as write_commands
from autotune.confirmed_write import events as write_events
from autotune.confirmed_write import plan as write_plan
from autotune.errors import JournalError
from autotune.experiment import commands, events
from autotune.experiment import plan as experiment_plan
from autotune.loop import limits, mode, outcome, quality, record, sample, settings, span, write

_MODULES = (
    limits,
    mode,
    outcome,
    quality,
    record,
    sample,
    settings,
    span,
    write,
    commands,
    events,
    experiment_plan,
    write_commands,
    write_events,
    write_plan,
)


def _collected(modules: tuple[ModuleType, ...]) -> Mapping[str, type]:
    """Every dataclass and enumeration that the modules define, by tag."""
    types: dict[str, type] = {}
    for module in modules:
        room = module.__name__.split(".")[-2]
        for name, kind in inspect.getmembers(module, inspect.isclass):
            if kind.__module__ == module.__name__ and (is_dataclass(kind) or issubclass(kind, Enum)):
                if f"{room}.{name}" in types:
                    raise TypeError(f"two types of {room} are called {name}; a journal could not tell them apart")
                types[f"{room}.{name}"] = kind
    return MappingProxyType(types)


TYPES = _collected(_MODULES)
"""What a journal can hold, by tag."""

_TAGS = MappingProxyType({kind: tag for tag, kind in TYPES.items()})
_FIELDS: Mapping[type, tuple[Field[Any], ...]] = MappingProxyType(
    {kind: fields(kind) for kind in TYPES.values() if is_dataclass(kind)}
)
_ODD_FLOATS = MappingProxyType({"nan": math.nan, "inf": math.inf, "-inf": -math.inf})


def to_json(payload: object) -> Any:
    """What ``json.dumps(..., allow_nan=False)`` takes; raises ``JournalError`` for a type that has no code."""
    if payload is None or (isinstance(payload, bool | int | str) and not isinstance(payload, Enum)):
        return payload
    if isinstance(payload, float):
        return payload if math.isfinite(payload) else {"float": repr(payload)}
    if isinstance(payload, tuple):
        return [to_json(part) for part in payload]
    if isinstance(payload, Mapping):
        return {"map": {_text_key(key): to_json(part) for key, part in payload.items()}}
    tag = _TAGS.get(type(payload))
    if tag is None:
        raise JournalError(f"the journal has no code for {type(payload).__name__}; report it, it is our fault")
    if isinstance(payload, Enum):
        return {tag: payload.name}
    return {tag: {part.name: to_json(getattr(payload, part.name)) for part in _FIELDS[type(payload)]}}


def from_json(coded: object) -> Any:
    """The inverse of ``to_json``.

    A field that an older journal lacks takes its default.  Raises ``JournalError`` for an unknown tag,
    an unknown or missing field, and anything else that ``to_json`` doesn't make.
    """
    if coded is None or isinstance(coded, bool | int | float | str):
        return coded
    if isinstance(coded, list):
        return tuple(from_json(part) for part in coded)
    if not isinstance(coded, dict) or len(coded) != 1:
        raise JournalError(f"not an entry of a journal: {str(coded)[:80]}")
    ((tag, content),) = coded.items()
    if tag == "float" and isinstance(content, str) and content in _ODD_FLOATS:
        return _ODD_FLOATS[content]
    if tag == "map" and isinstance(content, dict):
        return {key: from_json(part) for key, part in content.items()}
    kind = TYPES.get(tag)
    if kind is None:
        raise JournalError(f"unknown tag {tag!r}: written by another version of autotune; open it with that one")
    return _member(kind, tag, content) if issubclass(kind, Enum) else _built(kind, tag, content)


def _member(kind: type[Enum], tag: str, name: object) -> Enum:
    if not isinstance(name, str) or name not in kind.__members__:
        raise JournalError(f"{tag} has no member {name!r}")
    return kind[name]


def _built(kind: type, tag: str, content: object) -> object:
    if not isinstance(content, dict):
        raise JournalError(f"{tag}: fields expected")
    known = _FIELDS[kind]
    unknown = content.keys() - {part.name for part in known}
    missing = {
        part.name
        for part in known
        if part.name not in content and part.default is MISSING and part.default_factory is MISSING
    }
    if unknown or missing:
        raise JournalError(f"{tag}: unknown fields {sorted(unknown)}, missing fields {sorted(missing)}")
    try:
        return kind(**{name: from_json(part) for name, part in content.items()})
    except (TypeError, ValueError) as fault:
        raise JournalError(f"{tag}: {fault}") from fault


def _text_key(key: object) -> str:
    if not isinstance(key, str):
        raise JournalError(f"a mapping in a journal needs text keys, not {key!r}")
    return key
