"""What a server tells about its own nodes and certificates, judged against the file.  Pure."""

from collections.abc import Iterator
from datetime import datetime, timedelta

from autotune.config.places import GUARD_WRITES, SETTINGS, SUITING_TYPES
from autotune.config.types import DataType, LoopConfig
from autotune.config.unit_names import is_same_unit
from autotune.field.facts import CertificateFact, NodeFact, ServerFacts
from autotune.field.security import security_line
from autotune.loop.mode import LoopMode
from autotune.loop.span import Span
from autotune.service.readiness import Level, ReadinessFinding

EXPIRES_SOON = timedelta(days=60)
"""So long before its last day a certificate is worth a caution."""

_SAME_SPAN_RATIO = 1e-3
_MODE_WORDS: dict[LoopMode, tuple[str, ...]] = {
    LoopMode.MAN: ("man", "manual", "hand"),
    LoopMode.AUTO: ("auto", "automatic"),
    LoopMode.CAS: ("cas", "cascade"),
}


def judge_facts(loop: LoopConfig, facts: ServerFacts, now_utc: datetime) -> tuple[ReadinessFinding, ...]:
    """Everything that speaks against the file, or is worth knowing, in the order of the tags."""
    return (
        *(finding for fact in facts.nodes for finding in _judge_node(loop, fact)),
        *_judge_security(loop),
        *(finding for fact in facts.certificates for finding in _judge_certificate(fact, now_utc)),
    )


def written_names(loop: LoopConfig) -> frozenset[str]:
    """The tags that a test, its hand-back or a write of settings has to write."""
    names = {"mode", *(GUARD_WRITES if loop.has_guard else ("op",))}
    names |= {"sp"} if loop.block.sp_tracks_in_manual else set()
    return frozenset(names | (set(SETTINGS) if loop.is_writing_settings_allowed else set()))


def _judge_node(loop: LoopConfig, fact: NodeFact) -> Iterator[ReadinessFinding]:
    place = f"{fact.name} ({fact.where})"
    if fact.fault:
        remedy = f"correct the node of {fact.name} in [loop.tags], or mend its source; list-tags shows what there is"
        yield ReadinessFinding(Level.STOP, "NODE_FAULT", f"{place}: {fact.fault}", remedy)
        return
    if fact.held is None or fact.is_scalar is False:
        what = "a list or a table" if fact.is_scalar is False else "no number"
        yield ReadinessFinding(Level.STOP, "NODE_NO_NUMBER", f"{place} holds {what}", "name a node with one number")
        return
    yield from _judge_type(loop, fact, place, fact.held)
    if fact.name in written_names(loop) and fact.is_writable is False:
        text = f"{place} can't be written in this session"
        remedy = "give this user the right to write it in the server, or name the node that takes the request"
        yield ReadinessFinding(Level.STOP, "NODE_NOT_WRITABLE", text, remedy)
    span = {"pv": loop.pv_span, "sp": loop.pv_span, "op": loop.op_span, "op_request": loop.op_span}.get(fact.name)
    if span is not None:
        yield from _judge_range(loop, fact, place, span)
    if fact.name == "mode":
        yield from _judge_mode_words(loop, fact, place)


def _judge_type(loop: LoopConfig, fact: NodeFact, place: str, held: DataType) -> Iterator[ReadinessFinding]:
    tag = loop.tag(fact.name)
    told = None if tag is None else tag.type
    suiting = SUITING_TYPES.get(fact.name)
    if told is not None and told is not held:
        text = f"{place} holds a {held.value}, but the file says {told.value}"
        yield ReadinessFinding(Level.STOP, "NODE_TYPE", text, f'write type = "{held.value}", or take type out')
    elif suiting is not None and held not in suiting:
        words = " or ".join(kind.value for kind in suiting)
        text = f"{place} holds a {held.value}, which does not suit {fact.name}"
        yield ReadinessFinding(Level.STOP, "NODE_TYPE", text, f"name a node that holds {words}")
    elif suiting is None and held is DataType.BOOL and not fact.name.startswith("watch."):
        text = f"{place} holds true or false, not a measurement"
        yield ReadinessFinding(Level.STOP, "NODE_TYPE", text, "name the node of the measurement")
    elif suiting is None and told is None and held.is_whole and fact.name in written_names(loop):
        text = f"{place} holds whole numbers ({held.value}), and what we write has a fraction"
        yield ReadinessFinding(Level.STOP, "NODE_TYPE", text, f'add type = "{held.value}", and scale where it is not 1')


def _judge_range(loop: LoopConfig, fact: NodeFact, place: str, span: Span) -> Iterator[ReadinessFinding]:
    tag = loop.tag(fact.name)
    if tag is not None and fact.low_eu is not None and fact.high_eu is not None:
        low_eu, high_eu = sorted(end * tag.scale + tag.offset for end in (fact.low_eu, fact.high_eu))
        largest_eu = max(abs(low_eu - span.low_eu), abs(high_eu - span.high_eu))
        if not largest_eu <= _SAME_SPAN_RATIO * span.width_eu:
            text = (
                f"{place} has the range {low_eu:g} .. {high_eu:g} {fact.unit} in the server, the file says "
                f"{span.low_eu:g} .. {span.high_eu:g} {span.unit}"
            )
            remedy = "compare with the PID block: percent and gain refer to the span that the block uses"
            yield ReadinessFinding(Level.CAUTION, "SPAN_DIFFERS", text.replace("  ", " "), remedy)
    has_scale = tag is not None and (tag.scale, tag.offset) != (1.0, 0.0)
    if not has_scale and is_same_unit(span.unit, fact.unit_id, fact.unit) is False:
        text = f"{place} is in {fact.unit or fact.unit_id} in the server, the file says {span.unit!r}"
        yield ReadinessFinding(Level.CAUTION, "UNIT_DIFFERS", text, "correct the unit in [loop.span], or the node")


def _judge_mode_words(loop: LoopConfig, fact: NodeFact, place: str) -> Iterator[ReadinessFinding]:
    words = dict(fact.words)
    for code, mode in loop.mode_codes.read:
        word = words.get(code, "").casefold()
        other = next((one for one, names in _MODE_WORDS.items() if word in names and one is not mode), None)
        if other is not None:
            text = f"{place} calls {code} {words[code]!r}, the file says {mode.value}"
            yield ReadinessFinding(Level.STOP, "MODE_CODES_DIFFER", text, "correct [loop.mode_codes]")


def _judge_security(loop: LoopConfig) -> Iterator[ReadinessFinding]:
    line = security_line(loop.controller.endpoint)
    if line is not None:
        remedy = 'write security = "sign and encrypt" for the controller wherever its server offers it'
        yield ReadinessFinding(Level.CAUTION, "NO_SECURITY", line, remedy)


def _judge_certificate(fact: CertificateFact, now_utc: datetime) -> Iterator[ReadinessFinding]:
    lies = f" lies in {fact.path};" if fact.path else ""
    text = f"{fact.whose} certificate{lies} SHA-256 {fact.thumbprint}; valid until {fact.expires_utc:%Y-%m-%d}"
    if not fact.expires_utc - now_utc > EXPIRES_SOON:
        remedy = "renew it in time: from that day on no connection is made, and both sides have to trust the new one"
        yield ReadinessFinding(Level.CAUTION, "CERTIFICATE_EXPIRES", text, remedy)
    elif fact.path:
        yield ReadinessFinding(Level.NOTE, "CERTIFICATE", text)
