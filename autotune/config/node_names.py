"""Names of nodes in an OPC UA server, as text: node ids and browse paths.  Nothing here speaks to a server.

After OPC 10000-6, 5.3.1.10 (node ids: ``ns=2;i=5``, ``s=``, ``g=``, ``b=``, ``nsu=URI;...``) and
OPC 10000-4, annex A.2 (paths: ``/`` before each name, ``2:`` for its namespace, ``&`` before a reserved sign).
"""

import base64
import binascii
import re
import uuid
from dataclasses import dataclass

_NODE_ID = re.compile(r"(?:ns=(?P<index>\d{1,5});|nsu=(?P<uri>[^;\s][^;]*);)?(?P<kind>[isgb])=(?P<name>.+)", re.DOTALL)
_STEP = re.compile(r"(?:(?P<index>\d{1,5}):)?(?P<name>(?:[^&/.<>:#!]|&.)+)")
_LARGEST_INDEX = 2**16 - 1
_LARGEST_NUMBER = 2**32 - 1
_LONGEST_NAME = 4096

Identifier = int | str | uuid.UUID | bytes


@dataclass(frozen=True, slots=True)
class NodeName:
    """A node id taken apart; its namespace is told by ``uri`` where there is one, else by ``index``."""

    identifier: Identifier
    index: int = 0
    uri: str = ""

    def __str__(self) -> str:
        """The standard text, always the same for the same node."""
        space = f"nsu={self.uri};" if self.uri else f"ns={self.index};" if self.index else ""
        match self.identifier:
            case int():
                return f"{space}i={self.identifier}"
            case str():
                return f"{space}s={self.identifier}"
            case uuid.UUID():
                return f"{space}g={self.identifier}"
            case bytes():
                return f"{space}b={base64.b64encode(self.identifier).decode()}"


@dataclass(frozen=True, slots=True)
class PathStep:
    """One name of a browse path; ``index`` is ``None`` where the path's own namespace holds."""

    name: str
    index: int | None = None


def parse_node_id(text: str) -> NodeName:
    """The node id of its standard text.  Raises ``ValueError`` in words."""
    found = _NODE_ID.fullmatch(text)
    if found is None:
        raise ValueError("is no node id")
    index = int(found["index"] or 0)
    if index > _LARGEST_INDEX:
        raise ValueError(f"has a namespace index above {_LARGEST_INDEX}")
    return NodeName(_identifier(found["kind"], found["name"]), index, found["uri"] or "")


def parse_path(text: str) -> tuple[PathStep, ...]:
    """The steps of a browse path below the folder Objects.  Raises ``ValueError`` in words."""
    if not text.startswith("/"):
        raise ValueError("does not begin with /")
    steps: list[PathStep] = []
    at = 0
    while at < len(text):
        found = _STEP.match(text, at + 1)
        if text[at] != "/" or found is None:
            raise ValueError(f"is no path from its sign no. {at + 1} on (write & before a sign such as . or :)")
        index = None if found["index"] is None else int(found["index"])
        steps.append(PathStep(re.sub(r"&(.)", r"\1", found["name"]), index))
        at = found.end()
    return tuple(steps)


def _identifier(kind: str, name: str) -> Identifier:
    match kind:
        case "i":
            if not (name.isascii() and name.isdigit() and int(name) <= _LARGEST_NUMBER):
                raise ValueError(f"has an i= that is no number up to {_LARGEST_NUMBER}")
            return int(name)
        case "g":
            try:
                return uuid.UUID(name)
            except ValueError as fault:
                raise ValueError("has a g= that is no GUID") from fault
        case "b":
            try:
                return base64.b64decode(name, validate=True)
            except binascii.Error as fault:
                raise ValueError("has a b= that is not base64") from fault
        case _:
            if len(name) > _LONGEST_NAME or not name.isprintable():
                raise ValueError("has an s= with signs that can't be printed, or too many of them")
            return name
