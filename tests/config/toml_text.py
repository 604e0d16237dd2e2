"""TOML from plain Python, for documents that tests make up: every table inline, one top key per line."""

import json
import math


def to_toml(document: object) -> str:
    """The document as TOML text; dates and times are not needed here."""
    assert isinstance(document, dict)
    return "".join(f"{_text(str(key))} = {_inline(content)}\n" for key, content in document.items())


def _inline(content: object) -> str:
    match content:
        case bool():
            return "true" if content else "false"
        case int():
            return str(content)
        case float():
            return _number(content)
        case str():
            return _text(content)
        case list():
            return f"[{', '.join(map(_inline, content))}]"
        case dict():
            return "{" + ", ".join(f"{_text(str(key))} = {_inline(part)}" for key, part in content.items()) + "}"
        case _:
            raise TypeError(f"no TOML for {content!r}")


def _number(number: float) -> str:
    if math.isnan(number):
        return "nan"
    if math.isinf(number):
        return "inf" if number > 0 else "-inf"
    return repr(number)


def _text(text: str) -> str:
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007f")
