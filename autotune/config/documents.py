"""Files to tables: TOML, includes, defaults and overrides.  What the tables mean is judged elsewhere."""

import hashlib
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from autotune.config.complaints import Flaw, Section, bare, meant, shown
from autotune.errors import Complaint

Override = str | int | float | bool
"""What a caller may put in place of a key's content."""

_LARGEST_FILE = 2_000_000
_MOST_FILES = 100
_SHARED = ("include", "defaults", "controller", "block", "loop")


@dataclass(slots=True)
class Documents:
    """All tables of a configuration as written, and every complaint so far."""

    complaints: list[Complaint] = field(default_factory=list)
    sources: list[tuple[str, str]] = field(default_factory=list)
    tops: list[Section] = field(default_factory=list)
    defaults: Section | None = None
    controllers: dict[str, Section] = field(default_factory=dict)
    blocks: dict[str, Section] = field(default_factory=dict)
    loops: list[Section] = field(default_factory=list)

    def complain(self, section: Section, *flaws: Flaw) -> None:
        """Lay flaws at the key of the section that holds them."""
        self.complaints.extend(section.complaint(flaw) for flaw in flaws)


def gather(path: Path, overrides: Mapping[str, Override]) -> Documents:
    """Read the file and all that it includes; faults end up in ``complaints``."""
    documents = Documents()
    _gather_file(path, documents, (), overrides)
    return documents


def read_table(path: Path, documents: Documents) -> dict[str, Any] | None:
    """The TOML of one file, or ``None`` with a complaint."""
    try:
        if path.is_dir():
            raise IsADirectoryError
        with path.open("rb") as opened:
            content = opened.read(_LARGEST_FILE + 1)
    except (OSError, ValueError) as fault:
        documents.complaints.append(Complaint(_name(path), "(file)", *_unreadable(fault)))
        return None
    if len(content) > _LARGEST_FILE:
        too_large = f"larger than {_LARGEST_FILE} bytes"
        documents.complaints.append(Complaint(_name(path), "(file)", too_large, "split it with `include`"))
        return None
    documents.sources.append((_name(path), hashlib.sha256(content).hexdigest()))
    try:
        return tomllib.loads(content.decode("utf-8-sig"))
    except UnicodeDecodeError as fault:
        line = content[: fault.start].count(b"\n") + 1
        wrong = f"line {line}: byte {fault.start} is not UTF-8"
        documents.complaints.append(Complaint(_name(path), "(file)", wrong, "save the file as UTF-8"))
    except RecursionError:
        nested = "lists or tables are nested too deeply"
        documents.complaints.append(Complaint(_name(path), "(file)", nested, "keep to the layout of the example"))
    except ValueError as fault:
        remedy = "mend the line; texts stand in quotes, a table begins with [name]"
        documents.complaints.append(Complaint(_name(path), "(file)", f"not TOML: {fault}", remedy))
    return None


def _unreadable(fault: Exception) -> tuple[str, str]:
    match fault:
        case FileNotFoundError():
            return "no such file", "check the name and the folder"
        case IsADirectoryError():
            return "a folder, not a file", "name the .toml file in it"
        case PermissionError():
            return "not readable for this user", "mend the file's rights"
        case _:
            return f"can't be read ({fault})", "check the name"


def _gather_file(
    path: Path, documents: Documents, above: tuple[Path, ...], overrides: Mapping[str, Override] | None = None
) -> None:
    content = read_table(path, documents)
    if content is None:
        return
    file = _name(path)
    top = Section(file, "", {key: part for key, part in content.items() if key not in _SHARED})
    documents.tops.append(top)
    _gather_parts(file, content, documents)
    for place, name in enumerate(_list_of(content, "include", str, Section(file, "", content), documents)):
        included = path.parent / name
        flaw = _include_flaw(place, name, included, (*above, path), len(documents.sources))
        if flaw is not None:
            documents.complain(Section(file, "", content), flaw)
        else:
            _gather_file(included, documents, (*above, path))
    if overrides:
        _override(documents, overrides)


def _include_flaw(place: int, name: str, included: Path, above: tuple[Path, ...], count: int) -> Flaw | None:
    loc = ("include", place)
    if Path(name).is_absolute():
        return Flaw(loc, f"{shown(name)} is an absolute path", "name the file relative to the one that includes it")
    if any(_same_file(included, one) for one in above):
        return Flaw(loc, f"{shown(name)} includes itself in a circle", "take one of the includes out")
    if count >= _MOST_FILES:
        return Flaw(loc, f"more than {_MOST_FILES} files", "join some of them")
    return None


def _same_file(one: Path, other: Path) -> bool:
    try:
        return one.samefile(other)
    except (OSError, ValueError):
        return False


def _gather_parts(file: str, content: Mapping[str, Any], documents: Documents) -> None:
    whole = Section(file, "", content)
    if "defaults" in content:
        defaults = Section(file, "defaults", _table_of(content, "defaults", whole, documents))
        if documents.defaults is None:
            documents.defaults = defaults
        else:
            first = documents.defaults.file
            documents.complain(whole, Flaw(("defaults",), f"already told in {first}", "keep one table [defaults]"))
    for kind, known in (("controller", documents.controllers), ("block", documents.blocks)):
        for name, own in _table_of(content, kind, whole, documents).items():
            if not isinstance(own, dict):
                documents.complain(whole, Flaw((kind, name), "is no table", f"write [{kind}.{bare(name)}]"))
            elif name in known:
                fault = f"already described in {known[name].file}"
                documents.complain(whole, Flaw((kind, name), fault, f"give one {kind} another name"))
            else:
                known[name] = Section(file, f"{kind}.{bare(name)}", own)
    for place, own in enumerate(_list_of(content, "loop", dict, whole, documents)):
        name = own.get("name")
        head = f"loop[{bare(name)}]" if isinstance(name, str) else f"loop[no. {place + 1}]"
        documents.loops.append(Section(file, head, own))


def _table_of(content: Mapping[str, Any], key: str, whole: Section, documents: Documents) -> dict[str, Any]:
    table = content.get(key, {})
    if isinstance(table, dict):
        return table
    documents.complain(whole, Flaw((key,), f"{shown(table)} is no table", f"write [{key}] or [{key}.NAME]"))
    return {}


def _list_of(content: Mapping[str, Any], key: str, kind: type, whole: Section, documents: Documents) -> list[Any]:
    entries = content.get(key, [])
    if isinstance(entries, list) and all(isinstance(entry, kind) for entry in entries):
        return entries
    wanted = "write [[loop]] above each loop" if key == "loop" else 'write a list of file names, ["loops.toml"]'
    documents.complain(whole, Flaw((key,), f"{shown(entries)} is not what belongs here", wanted))
    return []


def _override(documents: Documents, overrides: Mapping[str, Override]) -> None:
    """Replace contents by dotted key: ``controller.NAME.port``, ``loop.NAME.scan_s``, ``data_dir``."""
    for dotted_key, content in overrides.items():
        kind, *rest = dotted_key.split(".")
        sections: dict[str, Section]
        match kind:
            case "controller":
                sections = documents.controllers
            case "block":
                sections = documents.blocks
            case "loop":
                sections = {str(loop.own.get("name")): loop for loop in documents.loops}
            case _:
                sections, rest = {"": documents.tops[0]}, ["", kind, *rest]
        section = sections.get(rest[0]) if rest else None
        if section is None or len(rest) < 2:
            near = meant(rest[0], sorted(sections)) if rest else ""
            remedy = f"{near}write KIND.NAME.KEY, for instance controller.plc1.port"
            documents.complaints.append(
                Complaint("(overrides)", bare(dotted_key), "names nothing in the files", remedy)
            )
            continue
        _replace(dict_of(section), rest[1:], content)


def dict_of(section: Section) -> dict[str, Any]:
    """The section's own table, to be changed before it is judged."""
    assert isinstance(section.own, dict)  # noqa: S101 - tables come from TOML
    return section.own


def _replace(table: dict[str, Any], names: list[str], content: Override) -> None:
    *way, last = names
    for name in way:
        inner = table.get(name)
        if not isinstance(inner, dict):
            inner = table[name] = {}
        table = inner
    table[last] = content


def _name(path: Path) -> str:
    return "".join(letter if letter.isprintable() else "?" for letter in str(path))
