"""Node ids and browse paths as text, after OPC 10000-6, 5.3.1.10 and OPC 10000-4, annex A.2."""

import uuid

import pytest
from asyncua import ua
from hypothesis import given
from hypothesis import strategies as st

from autotune.config.node_names import NodeName, PathStep, parse_node_id, parse_path

GUID = "72962b91-fa75-4ae6-8d28-b404dc7daf63"


@pytest.mark.parametrize(
    ("text", "name"),
    [
        ("i=13", NodeName(13)),
        ("ns=10;i=5", NodeName(5, 10)),
        ("ns=2;s=TIC-204.pv", NodeName("TIC-204.pv", 2)),
        ("ns=2;s=a;b=c d", NodeName("a;b=c d", 2)),  # a text may hold any sign that can be printed
        (f"ns=3;g={GUID}", NodeName(uuid.UUID(GUID), 3)),
        (f"ns=3;g={GUID.upper()}", NodeName(uuid.UUID(GUID), 3)),
        ("ns=1;b=M/RbKBsRVkePCePcx24oRA==", NodeName(bytes.fromhex("33f45b281b1156478f09e3dcc76e2844"), 1)),
        ("nsu=urn:skid:plc;s=pv", NodeName("pv", 0, "urn:skid:plc")),
    ],
)
def test_every_standard_form_is_taken(text: str, name: NodeName) -> None:
    assert parse_node_id(text) == name


@pytest.mark.parametrize(
    ("text", "fault"),
    [
        ("", "is no node id"),
        ("TIC-204.pv", "is no node id"),
        ("ns=2,s=pv", "is no node id"),
        ("ns=2;pv", "is no node id"),
        ("ns=2;s=", "is no node id"),
        ("ns=70000;i=1", "namespace index above 65535"),
        ("ns=2;i=4294967296", "i= that is no number"),
        ("ns=2;i=-1", "i= that is no number"),
        ("ns=2;g=4711", "g= that is no GUID"),
        ("ns=2;b=%%%", "b= that is not base64"),
        ("ns=2;s=a\tb", "can't be printed"),
        ("nsu=;s=pv", "is no node id"),
    ],
)
def test_what_is_no_node_id_is_told_why(text: str, fault: str) -> None:
    with pytest.raises(ValueError, match=fault):
        parse_node_id(text)


@given(
    st.one_of(
        st.integers(0, 2**32 - 1),
        st.text(st.characters(categories=["L", "N", "P"]), min_size=1, max_size=30),
        st.uuids(),
        st.binary(min_size=1, max_size=20),
    ),
    st.integers(0, 2**16 - 1),
)
def test_the_standard_text_comes_back_and_the_library_reads_the_same(
    identifier: int | str | uuid.UUID | bytes, index: int
) -> None:
    name = NodeName(identifier, index)
    assert parse_node_id(str(name)) == name
    librarys = ua.NodeId.from_string(str(name))
    assert (librarys.Identifier, librarys.NamespaceIndex) == (identifier, index)


@pytest.mark.parametrize(
    ("text", "steps"),
    [
        ("/Skid/TIC-204/pv", [("Skid", None), ("TIC-204", None), ("pv", None)]),
        ("/2:Block&.Output", [("Block.Output", 2)]),  # the standard's own example
        ("/3:Truck/0:NodeVersion", [("Truck", 3), ("NodeVersion", 0)]),
        ("/a&/b&:c", [("a/b:c", None)]),
        ("/hot water/pv 1", [("hot water", None), ("pv 1", None)]),
    ],
)
def test_a_path_is_taken_apart(text: str, steps: list[tuple[str, int | None]]) -> None:
    assert parse_path(text) == tuple(PathStep(name, index) for name, index in steps)


@pytest.mark.parametrize("text", ["", "Skid/pv", "/", "//", "/Skid/", "/a.b", "/a<b>c", "/a&"])
def test_what_is_no_path_is_told_why(text: str) -> None:
    with pytest.raises(ValueError, match=r"does not begin with /|is no path from its sign"):
        parse_path(text)
