"""What a server tells about its nodes and certificates, against the file: each difference has a finding."""

from collections.abc import Mapping
from dataclasses import replace
from datetime import UTC, datetime, timedelta
from types import MappingProxyType
from typing import Any

import pytest

from autotune.config.types import DataType, LoopConfig, MessageSecurity, OpcUaEndpoint, OpcUaTag
from autotune.config.unit_names import common_code, is_same_unit
from autotune.field.facts import CertificateFact, NodeFact, ServerFacts
from autotune.field.security import security_line
from autotune.service.readiness import Level
from autotune.service.server_facts import judge_facts, written_names
from tests.field.loops import GUARDED, PLAIN
from tests.field.reference import expected

NOW = datetime(2026, 6, 1, tzinfo=UTC)
ENDPOINT = OpcUaEndpoint("opc.tcp://127.0.0.1:4840", server_thumbprint="00" * 32)
HELD: Mapping[str, DataType] = MappingProxyType(
    {name: DataType.DINT if name == "mode" else tag.type or DataType.REAL for name, tag in GUARDED.tags}
)


def over_opc_ua(loop: LoopConfig, **tags: OpcUaTag) -> LoopConfig:
    placed = {name: OpcUaTag(f"ns=2;s={name}") for name, _ in loop.tags} | tags
    return replace(loop, controller=replace(loop.controller, endpoint=ENDPOINT), tags=tuple(placed.items()))


LOOP = over_opc_ua(GUARDED)


def fact(name: str, **changes: Any) -> NodeFact:
    right = NodeFact(name, f"ns=2;s={name}", HELD[name], is_scalar=True, is_readable=True, is_writable=True)
    if name in ("pv", "sp"):
        right = replace(right, low_eu=0.0, high_eu=150.0, unit="°C", unit_id=4408652)
    return replace(right, **changes)


def codes(facts: ServerFacts, loop: LoopConfig = LOOP) -> list[tuple[Level, str]]:
    return [(finding.level, finding.code) for finding in judge_facts(loop, facts, NOW)]


def of_node(name: str, loop: LoopConfig = LOOP, **changes: Any) -> list[tuple[Level, str]]:
    return codes(ServerFacts((fact(name, **changes),), ()), loop)


def test_a_server_that_agrees_with_the_file_has_no_findings() -> None:
    assert codes(ServerFacts(tuple(fact(name) for name in HELD), ())) == []


@pytest.mark.parametrize(
    ("name", "changes", "finding"),
    [
        ("pv", {"fault": "BadNodeIdUnknown"}, (Level.STOP, "NODE_FAULT")),
        ("pv", {"is_scalar": False}, (Level.STOP, "NODE_NO_NUMBER")),
        ("pv", {"held": None}, (Level.STOP, "NODE_NO_NUMBER")),
        ("pv", {"held": DataType.BOOL}, (Level.STOP, "NODE_TYPE")),
        ("heartbeat", {"held": DataType.UDINT}, (Level.STOP, "NODE_TYPE")),
        ("mode", {"held": DataType.REAL}, (Level.STOP, "NODE_TYPE")),
        ("op_request", {"held": DataType.INT}, (Level.STOP, "NODE_TYPE")),
        ("gain", {"held": DataType.UINT}, (Level.STOP, "NODE_TYPE")),
        ("op_request", {"is_writable": False}, (Level.STOP, "NODE_NOT_WRITABLE")),
        ("mode", {"is_writable": False}, (Level.STOP, "NODE_NOT_WRITABLE")),
        ("gain", {"is_writable": False}, (Level.STOP, "NODE_NOT_WRITABLE")),
        ("pv", {"high_eu": 120.0}, (Level.CAUTION, "SPAN_DIFFERS")),
        ("sp", {"low_eu": -5.0}, (Level.CAUTION, "SPAN_DIFFERS")),
        ("op", {"low_eu": 0.0, "high_eu": 1.0}, (Level.CAUTION, "SPAN_DIFFERS")),
        ("pv", {"unit": "°F", "unit_id": 4604232}, (Level.CAUTION, "UNIT_DIFFERS")),
        ("pv", {"unit": "bar", "unit_id": -1}, (Level.CAUTION, "UNIT_DIFFERS")),
        ("mode", {"words": ((0, "AUTO"), (1, "MANUAL"))}, (Level.STOP, "MODE_CODES_DIFFER")),
    ],
)
def test_each_difference_has_its_finding(name: str, changes: dict[str, Any], finding: tuple[Level, str]) -> None:
    assert finding in of_node(name, **changes)


@pytest.mark.parametrize(
    ("name", "changes"),
    [
        ("pv", {"is_writable": False}),
        ("enable", {"is_writable": False}),
        ("op", {"is_writable": False}),  # with a guard it is op_request that is written
        ("sp", {"is_writable": False}),
        ("pv", {"held": DataType.INT}),  # only what we write must hold a fraction
        ("pv", {"low_eu": None, "high_eu": None, "unit": "", "unit_id": None}),
        ("pv", {"high_eu": 150.0 + 0.1}),  # a thousandth of the span is the same span
        ("mode", {"words": ((0, "MAN"), (1, "AUTO"), (2, "CAS"))}),
        ("mode", {"words": ((0, "hand"), (1, "automatic"), (9, "odd"))}),
        ("mode", {"words": ((0, "state 0"), (1, "state 1"))}),
    ],
)
def test_what_is_no_difference_has_none(name: str, changes: dict[str, Any]) -> None:
    assert of_node(name, **changes) == []


def test_a_told_type_is_checked_and_a_told_scale_is_worked_in() -> None:
    scaled = over_opc_ua(GUARDED, pv=OpcUaTag("ns=2;s=pv", DataType.INT, scale=0.1), op_request=OpcUaTag("i=1"))
    assert of_node("pv", scaled, held=DataType.INT, high_eu=1500.0, unit="tenths") == []
    assert (Level.STOP, "NODE_TYPE") in of_node("pv", scaled, held=DataType.REAL, high_eu=1500.0)
    assert (Level.CAUTION, "SPAN_DIFFERS") in of_node("pv", scaled, held=DataType.INT)
    told = over_opc_ua(GUARDED, op_request=OpcUaTag("ns=2;s=op_request", DataType.INT, scale=0.01))
    assert of_node("op_request", told, held=DataType.INT) == []


def test_without_a_guard_it_is_the_output_that_is_written() -> None:
    assert "op" in written_names(PLAIN)
    assert "op" not in written_names(GUARDED)
    assert {"holder_request", "heartbeat", "sequence", "op_request", "mode"} <= written_names(GUARDED)
    assert not {"gain", "sp"} & written_names(replace(GUARDED, is_writing_settings_allowed=False))


def test_a_watch_of_a_contact_may_be_true_or_false() -> None:
    watched = over_opc_ua(GUARDED, **{"watch.pump": OpcUaTag("ns=2;s=pump")})
    contact = NodeFact("watch.pump", "ns=2;s=pump", DataType.BOOL, is_scalar=True, is_writable=False)
    assert codes(ServerFacts((contact,), ()), watched) == []


@pytest.mark.parametrize(
    ("days", "finding"),
    [
        (400, (Level.NOTE, "CERTIFICATE")),
        (61, (Level.NOTE, "CERTIFICATE")),
        (60, (Level.CAUTION, "CERTIFICATE_EXPIRES")),
        (1, (Level.CAUTION, "CERTIFICATE_EXPIRES")),
        (-1, (Level.CAUTION, "CERTIFICATE_EXPIRES")),
    ],
)
def test_a_certificate_is_warned_of_sixty_days_ahead(days: int, finding: tuple[Level, str]) -> None:
    own = CertificateFact("our own", "ab" * 32, NOW + timedelta(days=days), "/data/pki/autotune-certificate.der")
    assert codes(ServerFacts((), (own,))) == [finding]
    (said,) = judge_facts(LOOP, ServerFacts((), (own,)), NOW)
    assert "/data/pki/autotune-certificate.der" in said.text
    assert "ab" * 32 in said.text


def test_the_server_s_certificate_is_spoken_of_only_when_it_ends() -> None:
    theirs = CertificateFact("the server's", "ab" * 32, NOW + timedelta(days=400))
    assert codes(ServerFacts((), (theirs,))) == []
    ending = replace(theirs, expires_utc=NOW + timedelta(days=30))
    assert codes(ServerFacts((), (ending,))) == [(Level.CAUTION, "CERTIFICATE_EXPIRES")]


def test_a_connection_without_security_is_a_caution_and_a_line_on_the_sheet() -> None:
    bare = replace(ENDPOINT, security=MessageSecurity.NONE, server_thumbprint="")
    loop = replace(LOOP, controller=replace(LOOP.controller, endpoint=bare))
    assert codes(ServerFacts((), ()), loop) == [(Level.CAUTION, "NO_SECURITY")]
    assert "OPC UA without security" in (security_line(bare) or "")
    assert security_line(ENDPOINT) is None
    assert security_line(GUARDED.controller.endpoint) is None


def test_unit_ids_are_the_characters_of_the_common_code() -> None:
    """ST-UA3."""
    assert {code: common_code(number) for code, number in expected("ST-UA3").items()} == {
        code: code for code in expected("ST-UA3")
    }
    assert common_code(-1) == ""
    assert common_code(2**31 - 1) == ""


@pytest.mark.parametrize(
    ("told", "unit_id", "shown", "same"),
    [
        ("degC", 4408652, "°C", True),
        ("°C", 4408652, "", True),
        ("degF", 4408652, "°C", False),
        ("m3/h", 5067080, "m³/h", True),
        ("l/h", None, "l/h", True),
        ("l/h", -1, "L/H", True),
        ("l/h", None, "m3/h", False),
        ("l/h", None, "", None),
        ("", None, "bar", None),
    ],
)
def test_units_are_compared_as_far_as_they_are_known(
    told: str, unit_id: int | None, shown: str, same: bool | None
) -> None:
    assert is_same_unit(told, unit_id, shown) is same
