"""Naming a wrong address, word order or register, by reading the neighbours and writing nothing.

When a signal as configured holds no plausible number but a near variant does, that variant is most likely what the
file should say.  Where several do, all are named: the first word alone makes a float plausible, so a neighbour's word
beside it can look as good as its own.
"""

from collections.abc import Callable
from dataclasses import dataclass, replace

from autotune.config.types import LoopConfig, ModbusTag, Order, Tag
from autotune.errors import LinkRefused
from autotune.field.link import LoopLink, Reading
from autotune.field.translate import sample_tags, settings_tags, to_eu
from autotune.loop.span import Span
from autotune.service.readiness import Level, ReadinessFinding

OpenLink = Callable[[LoopConfig], LoopLink]


@dataclass(frozen=True, slots=True)
class _Variant:
    change: str
    remedy: str
    tag: Tag


async def missing_tags(loop: LoopConfig, link: LoopLink) -> tuple[ReadinessFinding, ...]:
    """Read tag by tag after a refused request and name each one that the controller doesn't have.

    Raises ``LinkTimeout`` or ``LinkClosed`` when the wire fails meanwhile.
    """
    findings = []
    for name in (*sample_tags(loop), *settings_tags(loop)):
        try:
            if not link.is_connected:
                await link.connect()
            await link.read((name,))
        except LinkRefused as refusal:
            findings.append(
                ReadinessFinding(
                    Level.STOP,
                    "REGISTER_MISSING",
                    f"the controller does not answer for {name!r}: {refusal}",
                    f"correct [loop.tags] {name} of {loop.name}: table, address, or what the addressing counts from",
                )
            )
    return tuple(findings)


async def implausible_signals(loop: LoopConfig, link: LoopLink, open_link: OpenLink) -> tuple[ReadinessFinding, ...]:
    """Explain each of PV, SP and OP whose reading can't be right.  Raises ``LinkError`` when the wire fails.

    One slip in the file mostly falsifies several signals, so a variant that makes all of them plausible goes before
    one that suits a single signal by chance.  A signal that is no number and that no variant makes one is left to
    the judgement of readings: most likely the measurement has failed.
    """
    misread = []
    for name, span in (("pv", loop.pv_span), ("sp", loop.pv_span), ("op", loop.op_span)):
        tag = loop.tag(name)
        if not isinstance(tag, ModbusTag):
            continue
        reading = (await link.read((name,))).readings[name]
        if _is_plausible(tag, reading, span):
            continue
        fits = [variant for variant in _variants(tag) if await _fits(loop, name, variant, span, open_link)]
        if fits or reading.raw is not None:
            misread.append((name, span, _in_words(tag, reading, span), fits))
    explained = [{variant.change for variant in fits} for _, _, _, fits in misread if fits]
    common = set.intersection(*explained) if explained else set()
    return tuple(
        _misread_finding(name, span, seen, [one for one in fits if one.change in common] or fits)
        for name, span, seen, fits in misread
    )


def _misread_finding(name: str, span: Span, seen: str, fits: list[_Variant]) -> ReadinessFinding:
    if fits:
        return ReadinessFinding(
            Level.STOP,
            "TAG_MISREAD",
            f"{name.upper()} reads {seen}, which can't be; read with {' or with '.join(one.change for one in fits)} "
            "it is plausible",
            "; or ".join(one.remedy.format(name=name) for one in fits),
        )
    return ReadinessFinding(
        Level.STOP,
        "OUTSIDE_SPAN",
        f"{name.upper()} reads {seen}, outside its span {span.low_eu:g} .. {span.high_eu:g} {span.unit}",
        f"compare [loop.span], and type, scale, address and word order of [loop.tags] {name}, with the PLC; if they "
        "agree, the measurement itself has failed",
    )


def _variants(tag: ModbusTag) -> tuple[_Variant, ...]:
    flipped = Order.LITTLE if tag.word_order is Order.BIG else Order.BIG
    words = _Variant(
        f"word order {flipped.value!r}",
        f"write word_order = {flipped.value!r} for {{name}} (or for its controller)",
        replace(tag, word_order=flipped),
    )
    shifted = tuple(
        _Variant(
            f"the address {'one up' if shift > 0 else 'one down'}",
            "correct the address of {name}, or the controller's addressing if all its addresses are off by one",
            replace(tag, address=tag.address + shift),
        )
        for shift in (1, -1)
        if 0 <= tag.address + shift <= 65533
    )
    return (words, *shifted)


async def _fits(loop: LoopConfig, name: str, variant: _Variant, span: Span, open_link: OpenLink) -> bool:
    tags = tuple((tag_name, variant.tag if tag_name == name else tag) for tag_name, tag in loop.tags)
    neighbour = open_link(replace(loop, tags=tags))
    try:
        await neighbour.connect()
        report = await neighbour.read((name,))
    except LinkRefused:
        return False
    finally:
        await neighbour.close()
    return _is_plausible(variant.tag, report.readings[name], span, at_rest_low=False)


def _is_plausible(tag: Tag, reading: Reading, span: Span, *, at_rest_low: bool = True) -> bool:
    """Within the span; a neighbour that reads as nothing (0 or a denormal) proves nothing."""
    if reading.raw is None:
        return False
    reading_eu = to_eu(tag, reading.raw)
    if not -0.5 <= span.to_pct(reading_eu) <= 100.5:
        return False
    tiny = 1e-6 * span.width_eu
    return abs(reading_eu) > tiny or (at_rest_low and reading_eu == 0.0)


def _in_words(tag: Tag, reading: Reading, span: Span) -> str:
    return "no number" if reading.raw is None else f"{to_eu(tag, reading.raw):.4g} {span.unit}"
