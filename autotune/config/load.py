"""``load``: a file of the user's to a ``Configuration``, or all that is wrong with it at once."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TypeVar

from pydantic import ValidationError

from autotune.config.build import block_from, controller_from, loop_from, opc_ua_controller_from
from autotune.config.checks import AnyControllerTable, controller_flaws, loop_flaws
from autotune.config.checks_settings import block_flaws, site_flaws
from autotune.config.complaints import Flaw, Loc, Section, flaws_of, meant, shown, without_unknown_keys
from autotune.config.digest import configuration_digest
from autotune.config.documents import Documents, Override, gather, read_table
from autotune.config.never_written import barred_flaws, barred_node, barred_range, node_barred_flaws
from autotune.config.node_places import NodePlace, node_overlaps_between, node_places_of, opc_ua_flaws
from autotune.config.numbers import Table
from autotune.config.places import Place, overlaps_between, places_of
from autotune.config.schema import ControllerTable, FileTable, IncludedTable, LoopTable
from autotune.config.schema_opc_ua import OpcUaControllerTable
from autotune.config.schema_settings import BlockTable
from autotune.config.schema_site import NeverWrittenTable, SiteLimitsTable
from autotune.config.types import AddressRange, Configuration, Controller, LoopConfig
from autotune.errors import Complaint, ConfigError

T = TypeVar("T", bound=Table)


@dataclass(slots=True)
class _Draft:
    """The tables that are right so far; what is wrong lies in ``documents.complaints``."""

    documents: Documents
    file: FileTable | None = None
    site: SiteLimitsTable | None = None
    controllers: dict[str, AnyControllerTable] = field(default_factory=dict)
    blocks: dict[str, BlockTable] = field(default_factory=dict)
    loops: list[tuple[Section, LoopTable]] = field(default_factory=list)
    placed: dict[str, Sequence[Place | NodePlace]] = field(default_factory=dict)
    never_written: dict[str, list[AddressRange]] = field(default_factory=dict)
    barred_nodes: dict[str, list[str]] = field(default_factory=dict)


def load(path: Path | str, overrides: Mapping[str, Override] | None = None) -> Configuration:
    """Read, check and convert a configuration with all the files it names.

    ``overrides`` puts contents in place of keys before anything is checked, by dotted key:
    ``{"controller.skid.port": 50213}``, ``loop.NAME...``, ``block.NAME...`` or a key of the file's top.
    Raises ``ConfigError`` with every complaint found.
    """
    path = Path(path)
    documents = gather(path, overrides or {})
    draft = _Draft(documents)
    if documents.tops:
        _read_tops(path, draft)
        _read_controllers_and_blocks(draft)
        _read_loops(draft)
        _place_tags(draft)
    if documents.complaints:
        raise ConfigError(_once_each(documents.complaints))
    return _configuration(path, draft)


def load_controllers(path: Path | str) -> tuple[Controller, ...]:
    """The controllers of a configuration, whose loops may be missing or unfinished.

    Raises ``ConfigError`` with every complaint about the files, their tops, controllers and blocks.
    """
    path = Path(path)
    documents = gather(path, {})
    draft = _Draft(documents)
    if documents.tops:
        _read_tops(path, draft)
        _read_controllers_and_blocks(draft)
    if documents.complaints or draft.file is None:
        raise ConfigError(_once_each(documents.complaints))
    data_dir = path.parent / draft.file.data_dir
    return tuple(_controller(name, draft, path.parent, data_dir) for name in draft.controllers)


def _read_tops(path: Path, draft: _Draft) -> None:
    top, *included = draft.documents.tops
    draft.file = _table(draft.documents, top, FileTable)
    for one in included:
        _table(draft.documents, one, IncludedTable)
    named = top.own.get("site_limits")
    if isinstance(named, str) and named:
        _read_site(path.parent / named, draft)
    if draft.file is not None and draft.site is not None:
        asked, allowed = draft.file.concurrent_tests_at_most, draft.site.concurrent_tests_at_most
        if asked > allowed:
            fault = f"{asked} is more than the site's {allowed}"
            draft.documents.complain(top, Flaw(("concurrent_tests_at_most",), fault, f"write at most {allowed}"))


def _read_site(path: Path, draft: _Draft) -> None:
    own = read_table(path, draft.documents)
    if own is None:
        return
    section = Section(str(path), "", own)
    site = _table(draft.documents, section, SiteLimitsTable)
    if site is None:
        return
    draft.site = site
    draft.documents.complain(section, *site_flaws(site))
    blocks = draft.documents.blocks
    for name in site.settings_limits:
        if name not in blocks:
            draft.documents.complain(section, _unknown(("settings_limits", name), "block", name, list(blocks)))
    for number, told in enumerate(site.never_written):
        loc = ("never_written", number)
        known = draft.documents.controllers
        if told.controller not in known:
            flaw = _unknown((*loc, "controller"), "controller", told.controller, list(known))
            draft.documents.complain(section, flaw)
            continue
        controller = _valid_controller(known[told.controller])
        if controller is not None:
            _bar(section, loc, told, controller, draft)


def _valid_controller(section: Section) -> AnyControllerTable | None:
    """The controller's table; a wrong one is complained of where it stands."""
    try:
        return _controller_table(section).model_validate(section.own)
    except ValidationError:
        return None


def _controller_table(section: Section) -> type[AnyControllerTable]:
    return OpcUaControllerTable if section.own.get("protocol") == "opc-ua" else ControllerTable


def _bar(section: Section, loc: Loc, told: NeverWrittenTable, controller: AnyControllerTable, draft: _Draft) -> None:
    if isinstance(controller, OpcUaControllerTable):
        node = barred_node(told)
        if isinstance(node, str):
            draft.barred_nodes.setdefault(told.controller, []).append(node)
        else:
            draft.documents.complain(section, Flaw((*loc, *node.loc), node.fault, node.remedy))
        return
    found = barred_range(told, controller)
    if isinstance(found, AddressRange):
        draft.never_written.setdefault(told.controller, []).append(found)
    else:
        draft.documents.complain(section, Flaw((*loc, *found.loc), found.fault, found.remedy))


def _read_controllers_and_blocks(draft: _Draft) -> None:
    documents = draft.documents
    endpoints: dict[tuple[object, ...], str] = {}
    for name, section in documents.controllers.items():
        controller = _table(documents, section, _controller_table(section))
        if controller is None:
            continue
        draft.controllers[name] = controller
        key, what = "host", "host, port and device_id"
        if isinstance(controller, OpcUaControllerTable):
            key = what = "url"
            documents.complain(section, *opc_ua_flaws(controller))
        first = endpoints.setdefault(_endpoint(controller), name)
        if first != name:
            fault = f"the same {what} as controller.{first}"
            documents.complain(section, Flaw((key,), fault, "keep one of them; loops may share a controller"))
    for name, section in documents.blocks.items():
        block = _table(documents, section, BlockTable)
        if block is not None:
            draft.blocks[name] = block
            documents.complain(section, *block_flaws(block))


def _read_loops(draft: _Draft) -> None:
    documents = draft.documents
    names: dict[str, str] = {}
    if not documents.loops and not documents.complaints:
        documents.complain(documents.tops[0], Flaw(("loop",), "missing", "add at least one [[loop]]"))
    for own in documents.loops:
        section = Section(own.file, own.head, own.own, documents.defaults)
        loop = _table(documents, section, LoopTable)
        if loop is None:
            continue
        first = names.get(loop.name)
        if first is not None:
            documents.complain(section, Flaw(("name",), f"told twice, first in {first}", "give it another name"))
            continue
        names[loop.name] = section.file
        draft.loops.append((section, loop))
        for kind, name, known in (
            ("controller", loop.controller, documents.controllers),
            ("block", loop.block, documents.blocks),
        ):
            if name not in known:
                documents.complain(section, _unknown((kind,), kind, name, list(known)))
        controller, block = draft.controllers.get(loop.controller), draft.blocks.get(loop.block)
        documents.complain(section, *loop_flaws(loop, controller, block, draft.site))
    for name, controller in draft.controllers.items():
        loops = [loop for _, loop in draft.loops if loop.controller == name]
        documents.complain(documents.controllers[name], *controller_flaws(controller, loops))


def _place_tags(draft: _Draft) -> None:
    documents = draft.documents
    sections = {loop.name: section for section, loop in draft.loops}
    registers: list[tuple[str, tuple[object, ...], list[Place]]] = []
    nodes: list[tuple[str, tuple[object, ...], list[NodePlace]]] = []
    for section, loop in draft.loops:
        controller, block = draft.controllers.get(loop.controller), draft.blocks.get(loop.block)
        if isinstance(controller, OpcUaControllerTable):
            in_server, flaws = node_places_of(loop, block)
            draft.placed[loop.name] = in_server
            nodes.append((loop.name, _endpoint(controller), in_server))
            flaws += node_barred_flaws(in_server, draft.barred_nodes.get(loop.controller, ()))
        elif controller is not None:
            placed, flaws = places_of(loop, controller, block)
            draft.placed[loop.name] = placed
            registers.append((loop.name, _endpoint(controller), placed))
            flaws += barred_flaws(placed, draft.never_written.get(loop.controller, ()))
        else:
            continue
        documents.complain(section, *flaws)
    for name, flaw in (*overlaps_between(registers), *node_overlaps_between(nodes)):
        documents.complain(sections[name], flaw)


def _configuration(path: Path, draft: _Draft) -> Configuration:
    assert draft.file is not None  # noqa: S101 - without complaints every table was right
    data_dir = path.parent / draft.file.data_dir
    controllers = {name: _controller(name, draft, path.parent, data_dir) for name in draft.controllers}
    loops = tuple(_loop(loop, draft, controllers) for _, loop in draft.loops)
    everyone = tuple(controllers.values())
    return Configuration(
        file=path,
        data_dir=data_dir,
        loops=loops,
        controllers=everyone,
        concurrent_tests_at_most=draft.file.concurrent_tests_at_most,
        digest=configuration_digest(loops, everyone, draft.file.concurrent_tests_at_most),
        sources=tuple(draft.documents.sources),
    )


def _controller(name: str, draft: _Draft, folder: Path, data_dir: Path) -> Controller:
    table = draft.controllers[name]
    if isinstance(table, OpcUaControllerTable):
        return opc_ua_controller_from(name, table, tuple(draft.barred_nodes.get(name, ())), folder, data_dir)
    return controller_from(name, table, tuple(draft.never_written.get(name, ())))


def _loop(loop: LoopTable, draft: _Draft, controllers: Mapping[str, Controller]) -> LoopConfig:
    block = block_from(draft.blocks[loop.block])
    return loop_from(loop, controllers[loop.controller], block, draft.placed[loop.name], draft.site)


def _table(documents: Documents, section: Section, table: type[T]) -> T | None:
    """The table, or ``None`` where it is wrong; with unknown keys alone the rest is judged all the same."""
    content = section.merged
    try:
        return table.model_validate(content)
    except ValidationError as error:
        documents.complain(section, *flaws_of(error, table))
        known = without_unknown_keys(content, error)
    try:
        return table.model_validate(known)
    except ValidationError:
        return None


def _unknown(loc: tuple[str | int, ...], kind: str, name: str, known: list[str]) -> Flaw:
    listed = f"there are: {', '.join(sorted(known))}" if known else f"add [{kind}.NAME]"
    return Flaw(loc, f"there is no {kind} {shown(name)}", f"{meant(name, known)}{listed}")


def _endpoint(controller: AnyControllerTable) -> tuple[object, ...]:
    if isinstance(controller, OpcUaControllerTable):
        return (controller.url.lower().rstrip("/"),)
    return controller.host.lower(), controller.port, controller.device_id


def _once_each(complaints: list[Complaint]) -> tuple[Complaint, ...]:
    return tuple({str(complaint): complaint for complaint in complaints}.values())
