"""``list-tags`` and ``import-tags``: from a controller's own list of tags to drafts of loop sections."""

import sys
from collections.abc import Sequence
from pathlib import Path

from autotune.cli.exit_codes import ExitCode
from autotune.cli.printing import Voice
from autotune.config.draft import draft_text
from autotune.config.load import load_controllers
from autotune.config.tag_list import read_tag_list
from autotune.service.tags import ListedTag, drafts_of, list_tags, server_of


async def show_tags(voice: Voice, config: Path, controller: str | None, under: str, draft: str | None) -> ExitCode:
    """The tree of an OPC UA server, or the drafts of one of its objects; nothing is written to it."""
    server = server_of(load_controllers(config), str(config), controller)
    tags = await list_tags(server, under)
    if draft is not None:
        return _answer_drafts(voice, [draft_text(one) for one in drafts_of(tags, draft, server, str(config))])
    rows = [(f"{'  ' * one.depth}{one.name}", one.type_words, one.range_words, one.access_words) for one in tags]
    widths = [max((len(row[column]) for row in rows), default=0) for column in range(4)]
    for row, one in zip(rows, tags, strict=True):
        cells = (cell.ljust(width) for cell, width in zip(row, widths, strict=True))
        voice.say("  ".join((*cells, one.node_id)), style="head" if one.fact is None else None)
    voice.say(f"{len(tags)} nodes; '--draft NODE' drafts the section of a loop", style="quiet")
    voice.answer({"controller": server.name, "tags": [_as_data(one) for one in tags]})
    return ExitCode.DONE


def import_tags(voice: Voice, file: Path, controller: str) -> ExitCode:
    """Drafts of all loops in a CSV list of Modbus tags."""
    listed = read_tag_list(file, controller)
    texts = [draft_text(one) for one in listed.loops]
    if listed.left_out:
        texts.append("".join(f"# left out: {line}\n" for line in listed.left_out))
    code = _answer_drafts(voice, texts)
    return code if listed.loops else ExitCode.NO


def _answer_drafts(voice: Voice, texts: Sequence[str]) -> ExitCode:
    """The drafts alone on standard output, so that they can be sent into a file."""
    text = "\n".join(texts)
    if voice.is_json:
        voice.answer({"draft": text})
    else:
        sys.stdout.write(text)
    return ExitCode.DONE


def _as_data(tag: ListedTag) -> dict[str, object]:
    fact = tag.fact
    told: dict[str, object] = {"node": tag.node_id, "name": tag.name, "depth": tag.depth, "variable": fact is not None}
    if fact is None:
        return told
    return told | {
        "type": None if fact.held is None else fact.held.value,
        "words": {str(number): word for number, word in fact.words},
        "low_eu": fact.low_eu,
        "high_eu": fact.high_eu,
        "unit": fact.unit,
        "readable": fact.is_readable,
        "writable": fact.is_writable,
    }
