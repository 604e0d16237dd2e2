"""Which tag of a loop a name in a PLC stands for.  Common practice, no source: doubtful short forms are left out."""

import re

from autotune.config.schema_tags import TagsTable

SHARED_KEYS = ("table", "type", "namespace")
"""Keys of ``[loop.tags]`` that are no tags themselves."""

TAG_NAMES = tuple(name for name in TagsTable.model_fields if name not in SHARED_KEYS)
"""Every tag that a loop may have, in the order of a file."""

_OTHER_WORDS: dict[str, tuple[str, ...]] = {
    "pv": ("process value", "process variable", "measured value", "measurement"),
    "sp": ("set point", "actual set point"),
    "op": ("output", "out", "controller output"),
    "mode": ("mode actual", "actual mode", "act mode"),
    "gain": ("kp", "pb", "proportional band", "prop band"),
    "integral": ("ti", "ki", "reset", "integral time", "reset time"),
    "derivative": ("td", "kd", "rate", "derivative time", "rate time"),
}
_SEPARATORS = re.compile(r"[./:_\s]")
_LEVELS = re.compile(r"[./:]")
_LOOP_NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9_\-]{0,63}")


def _plain(name: str) -> str:
    return re.sub(r"[^a-z0-9]", "", name.casefold())


_TAGS_BY_WORD = {_plain(name): name for name in TAG_NAMES} | {
    _plain(word): name for name, words in _OTHER_WORDS.items() for word in words
}


def tag_of(name: str) -> str | None:
    """The tag that a name stands for, whatever its capitals and separators; ``None`` for any other name."""
    return _TAGS_BY_WORD.get(_plain(name))


def split_name(name: str) -> tuple[str, str] | None:
    """A whole name such as ``Skid/TIC-204.PV`` as loop and tag.

    ``None`` where its end is no tag of a loop, or what stands before it can't be a loop's name.
    """
    for cut in (found.start() for found in _SEPARATORS.finditer(name)):  # from the left: the longest end that is a tag
        tag = tag_of(name[cut + 1 :])
        loop = _LEVELS.split(name[:cut])[-1].strip()
        if tag is not None and _LOOP_NAME.fullmatch(loop):
            return loop, tag
    return None
