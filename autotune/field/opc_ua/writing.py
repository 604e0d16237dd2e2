"""Which requests a write becomes, and what became of one.  Pure."""

from collections.abc import Mapping, Sequence

from autotune.field.opc_ua.status import in_words, is_surely_undone, is_written
from autotune.loop.write import WriteOutcome

_TOGETHER = ("holder_request", "heartbeat", "op_request")
"""Tags that may share a request: in which order a server carries out one request is its own affair."""


def split_writes(names: Sequence[str]) -> list[list[str]]:
    """The requests of a write, in order: one tag each, but the parts of an output move go together.

    The sequence number is never among those: it says that the rest is there, so it goes after the rest.
    """
    parts: list[list[str]] = []
    for name in names:
        if parts and name in _TOGETHER and parts[-1][-1] in _TOGETHER:
            parts[-1].append(name)
        else:
            parts.append([name])
    return parts


def judge_write(
    server: str, where: Mapping[str, str], codes: Sequence[int], applied: Sequence[str]
) -> tuple[WriteOutcome, str]:
    """The outcome of one request from the status of each of its nodes, and what to tell.

    ``where`` maps the tags of the request to their nodes' names; ``applied`` were written before it.
    """
    if len(codes) != len(where):
        return WriteOutcome.NOT_HEARD, f"{server} answered {len(codes)} of {len(where)} writes"
    unwritten = {name: code for name, code in zip(where, codes, strict=True) if not is_written(code)}
    if not unwritten:
        return WriteOutcome.APPLIED, ""
    done = [*applied, *(name for name in where if name not in unwritten)]
    told = "; ".join(f"{name} ({where[name]}): {in_words(code)}" for name, code in unwritten.items())
    had_been = f"; {', '.join(done)} had been applied" if done else ""
    is_refused = not done and all(is_surely_undone(code) for code in unwritten.values())
    return (WriteOutcome.REFUSED if is_refused else WriteOutcome.NOT_HEARD), f"{server} answered {told}{had_been}"
