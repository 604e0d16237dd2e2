"""``list-tags``: what an OPC UA server holds, and a draft of a loop's section from one of its objects."""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

from autotune.config.draft import Entry, LoopDraft
from autotune.config.node_names import parse_node_id, parse_path
from autotune.config.tag_words import tag_of
from autotune.config.types import Controller, OpcUaEndpoint
from autotune.errors import Complaint, ConfigError
from autotune.field.facts import NodeFact

_NEEDED = {"pv", "op"}
_MODES = {"man": "MAN", "manual": "MAN", "auto": "AUTO", "automatic": "AUTO", "cas": "CAS", "cascade": "CAS"}


@dataclass(frozen=True, slots=True)
class ListedTag:
    """One node of a server as a person looks for it: ``parent`` is its place in the list, -1 at the top."""

    node_id: str
    name: str
    parent: int
    depth: int
    fact: NodeFact | None

    @property
    def type_words(self) -> str:
        """What a variable holds; an enumeration with its words."""
        if self.fact is None:
            return ""
        if self.fact.is_scalar is False:
            return "list"
        if self.fact.words:
            return "enumeration " + ", ".join(f"{number} {word}" for number, word in self.fact.words)
        return "no number" if self.fact.held is None else self.fact.held.value

    @property
    def range_words(self) -> str:
        """Its range and unit, as far as the server tells them."""
        fact = self.fact
        if fact is None or fact.low_eu is None or fact.high_eu is None:
            return "" if fact is None else fact.unit
        return f"{fact.low_eu:g} .. {fact.high_eu:g} {fact.unit}".rstrip()

    @property
    def access_words(self) -> str:
        """What this session may do with it."""
        if self.fact is None:
            return ""
        return ", ".join(
            word for word, may in (("read", self.fact.is_readable), ("write", self.fact.is_writable)) if may
        )


def server_of(controllers: Sequence[Controller], file: str, name: str | None) -> Controller:
    """The OPC UA server to look at: the one called ``name``, or the only one.  Raises ``ConfigError``."""
    servers = [one for one in controllers if isinstance(one.endpoint, OpcUaEndpoint)]
    known = ", ".join(one.name for one in servers)
    if name is not None:
        found = next((one for one in controllers if one.name == name), None)
        if found is not None and found in servers:
            return found
        fault = f"there is no controller {name!r}" if found is None else f"{name} speaks Modbus, which lists no tags"
        remedy = "use import-tags with a CSV list" if found is not None else f"use one of: {known or '(none)'}"
        raise ConfigError((Complaint(file, "controller", fault, remedy),))
    if len(servers) == 1:
        return servers[0]
    fault = f"there are several OPC UA servers: {known}" if servers else "no controller speaks OPC UA"
    remedy = "name one with --controller" if servers else 'add [controller.NAME] with protocol = "opc-ua"'
    raise ConfigError((Complaint(file, "controller", fault, remedy),))


async def list_tags(server: Controller, under: str = "") -> tuple[ListedTag, ...]:
    """Everything below a node (empty: below Objects).

    Raises ``ConfigError`` for what names no node, and ``LinkError``.
    """
    _check_start(under)
    from autotune.field.opc_ua.browse import look_at_server  # asyncua is loaded only where it is spoken

    assert isinstance(server.endpoint, OpcUaEndpoint)  # noqa: S101 - server_of gave it
    seen = await look_at_server(server.endpoint, under)
    return tuple(ListedTag(one.node_id, one.name, one.parent, one.depth, one.fact) for one in seen)


def _check_start(under: str) -> None:
    try:
        if under.startswith("/"):
            parse_path(under)
        elif under:
            parse_node_id(under)
    except ValueError as fault:
        remedy = "write a node id such as ns=2;s=TIC-204, or a path below Objects such as /2:Skid"
        raise ConfigError((Complaint("(command line)", "--under", f"{under!r} {fault}", remedy),)) from fault


def drafts_of(tags: Sequence[ListedTag], chosen: str, server: Controller, file: str) -> tuple[LoopDraft, ...]:
    """A draft of the chosen object's loop, or of each loop below it; ``chosen`` is a name or a node id.

    Raises ``ConfigError`` when there is no such object, or none with a PV and an output.
    """
    found = [place for place, one in enumerate(tags) if chosen in (one.node_id, one.name)]
    if len(found) != 1:
        fault = f"{len(found)} nodes are called {chosen!r}" if found else f"nothing is called {chosen!r}"
        raise ConfigError((Complaint(file, "--draft", fault, "name an object by its node id, as list-tags shows it"),))
    tree = _tree(tags)
    loops = _loops_from(tree, found[0])
    if not loops:
        fault = f"below {chosen!r} lies no object with a PV and an output"
        raise ConfigError((Complaint(file, "--draft", fault, "name the object that holds the loop's tags"),))
    return tuple(_draft(tree, place, server) for place in loops)


@dataclass(frozen=True, slots=True)
class _Tree:
    """A list of nodes with the places of each one's children."""

    tags: Sequence[ListedTag]
    children: Mapping[int, Sequence[int]]

    def below(self, place: int) -> list[int]:
        """All nodes below one, nearest first."""
        level, below = [place], list[int]()
        while level := [child for parent in level for child in self.children.get(parent, ())]:
            below += level
        return below

    def variables(self, places: Iterable[int]) -> list[ListedTag]:
        """The variables among some nodes."""
        return [self.tags[place] for place in places if self.tags[place].fact is not None]

    def is_loop(self, place: int) -> bool:
        """Whether a node itself has the tags without which there is no loop."""
        return {tag_of(one.name) for one in self.variables(self.children.get(place, ()))} >= _NEEDED

    def loop_tags(self, place: int) -> dict[str, ListedTag]:
        """The loop's tags among all variables below a node; the nearest one of each counts."""
        named: dict[str, ListedTag] = {}
        for one in self.variables(self.below(place)):
            tag = tag_of(one.name)
            if tag is not None:
                named.setdefault(tag, one)
        return named


def _tree(tags: Sequence[ListedTag]) -> _Tree:
    children: dict[int, list[int]] = {}
    for place, one in enumerate(tags):
        children.setdefault(one.parent, []).append(place)
    return _Tree(tags, children)


def _loops_from(tree: _Tree, place: int) -> list[int]:
    """The chosen node's own loop, or the loops below it."""
    inner = [] if tree.is_loop(place) else [one for one in tree.below(place) if tree.is_loop(one)]
    if inner:
        return inner
    return [place] if tree.loop_tags(place).keys() >= _NEEDED else []


def _draft(tree: _Tree, place: int, server: Controller) -> LoopDraft:
    named = tree.loop_tags(place)
    used = {one.node_id for one in named.values()}
    others = [one for one in tree.variables(tree.below(place)) if one.node_id not in used]
    mode = named.get("mode")
    return LoopDraft(
        tree.tags[place].name,
        {tag: {"node": one.node_id} for tag, one in named.items()},
        controller=server.name,
        span=_span(named),
        mode_codes={} if mode is None or mode.fact is None else _mode_codes(mode.fact),
        remarks=tuple(f"not used: {one.name}, {one.node_id}, {one.type_words}" for one in others),
    )


def _span(named: dict[str, ListedTag]) -> dict[str, Entry]:
    span: dict[str, Entry] = {}
    for what, tag in (("pv", named.get("pv")), ("op", named.get("op"))):
        fact = None if tag is None else tag.fact
        if fact is not None and fact.low_eu is not None and fact.high_eu is not None:
            span |= {f"{what}_low_eu": fact.low_eu, f"{what}_high_eu": fact.high_eu}
        if fact is not None and fact.unit:
            span[f"{what}_unit"] = fact.unit
    return span


def _mode_codes(fact: NodeFact) -> dict[str, Entry]:
    return {_MODES[word.casefold()]: number for number, word in fact.words if word.casefold() in _MODES}
