"""Runs one function block of IEC 61131-3 Structured Text, as far as a guard needs the language.

Understood: VAR sections with initial values, assignments, IF, CASE, RETURN; AND OR NOT, comparisons, and
UINT and UDINT subtraction and addition that wrap; TIME in whole milliseconds.  One statement a line.
"""

import re
from dataclasses import dataclass, field
from typing import Any

_BITS = {"UINT": 16, "UDINT": 32}
_TIME_MS = {"ms": 1, "s": 1000, "m": 60_000}
_SECTION = re.compile(r"VAR(_INPUT|_OUTPUT|_IN_OUT)?( RETAIN| CONSTANT)?$")
_DECLARATION = re.compile(r"(\w+)\s*:\s*(\w+)(?:\s*:=\s*([^;]+))?;$")
_WORDS = {"AND": "and", "OR": "or", "NOT": "not", "TRUE": "True", "FALSE": "False"}


@dataclass(slots=True)
class FunctionBlock:
    """One instance: its variables by name.  ``call`` sets inputs and runs the body once."""

    types: dict[str, str]
    initial: dict[str, Any]
    retained: frozenset[str]
    body: Any
    variables: dict[str, Any] = field(default_factory=dict)

    def __post_init__(self) -> None:
        self.variables = dict(self.initial)

    def call(self, **inputs: Any) -> dict[str, Any]:
        """One scan; unknown inputs are a mistake of the caller."""
        assert inputs.keys() <= self.types.keys()
        self.variables.update(inputs)
        scope: dict[str, Any] = {"v": self.variables}
        exec(self.body, {"__builtins__": {}}, scope)  # noqa: S102 - our own text, translated below
        scope["scan"](self.variables)
        return self.variables

    def restart(self) -> None:
        """A restart of the PLC: everything but the retained variables begins anew."""
        kept = {name: self.variables[name] for name in self.retained}
        self.variables = dict(self.initial) | kept


def parse(text: str) -> FunctionBlock:
    """The function block of the text.  Raises ``ValueError`` for a line it doesn't understand."""
    lines = [line.strip() for line in re.sub(r"\(\*.*?\*\)", "", text, flags=re.DOTALL).splitlines()]
    lines = [line for line in lines if line]
    assert lines[0].startswith("FUNCTION_BLOCK ")
    assert lines[-1] == "END_FUNCTION_BLOCK"
    types: dict[str, str] = {}
    initial: dict[str, Any] = {}
    retained: set[str] = set()
    section = ""
    statements: list[str] = []
    for line in lines[1:-1]:
        if _SECTION.match(line):
            section = line
        elif line == "END_VAR":
            section = ""
        elif section:
            declared = _DECLARATION.match(line)
            if declared is None:
                raise ValueError(f"no declaration: {line}")
            name, kind, start = declared.groups()
            types[name] = kind
            initial[name] = _literal(start, kind)
            if section.endswith("RETAIN"):
                retained.add(name)
        else:
            statements.append(line)
    source = "def scan(v):\n" + "\n".join(_translated(statements, types))
    return FunctionBlock(types, initial, frozenset(retained), compile(source, "plc-guard.st", "exec"))


def _literal(text: str | None, kind: str) -> Any:
    if kind == "TIME":
        amount, unit = re.fullmatch(r"T#(\d+)(ms|s|m)", text or "T#0s").groups()  # type: ignore[union-attr]
        return int(amount) * _TIME_MS[unit]
    if text is None:
        return {"BOOL": False, "REAL": 0.0}.get(kind, 0)
    return {"TRUE": True, "FALSE": False}[text] if kind == "BOOL" else float(text) if kind == "REAL" else int(text)


def _translated(statements: list[str], types: dict[str, str]) -> list[str]:
    python: list[str] = []
    open_blocks: list[str] = []  # IF, CASE before its first label, LABEL inside a case
    for line in statements:
        depth = len(open_blocks) + 1
        if found := re.fullmatch(r"IF (.+) THEN", line):
            python.append(_indented(depth, f"if {_expression(found[1], types)}:"))
            open_blocks.append("IF")
        elif found := re.fullmatch(r"ELSIF (.+) THEN", line):
            python.append(_indented(depth - 1, f"elif {_expression(found[1], types)}:"))
        elif line == "ELSE":
            python.append(_indented(depth - 1, "else:"))
        elif line in ("END_IF;", "END_CASE;"):
            assert open_blocks.pop() == {"END_IF;": "IF", "END_CASE;": "LABEL"}[line]
        elif found := re.fullmatch(r"CASE (\w+) OF", line):
            python.append(_indented(depth, f"chosen = {_expression(found[1], types)}"))
            open_blocks.append("CASE")
        elif found := re.fullmatch(r"(\w+):", line):
            word = "if" if open_blocks[-1] == "CASE" else "elif"
            open_blocks[-1] = "LABEL"
            python.append(_indented(depth - 1, f"{word} chosen == {_expression(found[1], types)}:"))
        elif line == "RETURN;":
            python.append(_indented(depth, "return"))
        elif found := re.fullmatch(r"(\w+)\s*:= (.+);", line):
            python.append(_indented(depth, _assignment(found[1], found[2], types)))
        else:
            raise ValueError(f"not understood: {line}")
    assert not open_blocks
    return python


def _indented(depth: int, line: str) -> str:
    return "    " * depth + line


def _assignment(name: str, text: str, types: dict[str, str]) -> str:
    expression = _expression(text, types)
    if types[name] in _BITS:
        expression = f"({expression}) & {2 ** _BITS[types[name]] - 1}"
    return f"v[{name!r}] = {expression}"


def _expression(text: str, types: dict[str, str]) -> str:
    def wrapped(found: re.Match[str]) -> str:
        assert types[found[1]] == types[found[2]]
        return f"(({found[1]} - {found[2]}) & {2 ** _BITS[types[found[1]]] - 1})"

    text = re.sub(r"\((\w+) - (\w+)\)", wrapped, text)
    text = re.sub(r"TIME_TO_(?:UDINT|REAL)\((\w+)\)", r"\1", text)
    text = re.sub(r"(?<![:<>])=", "==", text).replace("<>", "!=")

    def named(found: re.Match[str]) -> str:
        word = found[0]
        if word in _WORDS:
            return _WORDS[word]
        if word in types:
            return f"v[{word!r}]"
        raise ValueError(f"unknown name: {word}")

    return re.sub(r"\b[A-Za-z_]\w*\b", named, text)
