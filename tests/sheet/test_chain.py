import json
import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from autotune.sheet.chain import GENESIS, ChainEntry, inspect_chain, is_intact, link_hash, next_entry, to_canonical


def test_the_hash_is_sha_256_of_the_previous_hash_and_the_text() -> None:
    # FIPS 180-4 example: the digest of "abc"
    assert link_hash("a", "bc") == "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"


def test_canonical_json_sorts_keys_and_keeps_letters() -> None:
    assert to_canonical({"b": 1.5, "a": ["ä", None]}) == '{"a":["ä",null],"b":1.5}'


@pytest.mark.parametrize("odd", [math.nan, math.inf, -math.inf])
def test_canonical_json_refuses_what_is_no_number(odd: float) -> None:
    with pytest.raises(ValueError, match="not JSON compliant"):
        to_canonical({"gain": odd})


def _chain(count: int) -> list[ChainEntry]:
    entries: list[ChainEntry] = []
    for n in range(count):
        entries.append(next_entry(entries[-1] if entries else None, to_canonical({"sheet_id": f"sheet {n}"})))
    return entries


def test_an_empty_chain_is_whole() -> None:
    assert inspect_chain([], None) == ()
    assert inspect_chain([], GENESIS) == ()


@given(st.integers(1, 6), st.data())
def test_changing_any_character_of_any_entry_is_found_at_that_entry(count: int, data: st.DataObject) -> None:
    chain = _chain(count)
    at = data.draw(st.integers(0, count - 1))
    place = data.draw(st.integers(0, len(chain[at].text) - 1))
    sign = data.draw(st.characters(exclude_characters=chain[at].text[place], exclude_categories=["Cs"]))
    text = chain[at].text[:place] + sign + chain[at].text[place + 1 :]
    chain[at] = ChainEntry(chain[at].n, chain[at].previous, chain[at].hash, text)
    assert [damage.n for damage in inspect_chain(chain, None)] == [at + 1]


@given(st.integers(2, 6), st.data())
def test_taking_out_any_entry_but_the_last_is_found_at_the_next_one(count: int, data: st.DataObject) -> None:
    chain = _chain(count)
    at = data.draw(st.integers(0, count - 2))
    del chain[at]
    damage = inspect_chain(chain, None)
    assert damage[0].n == at + 2
    assert f"entry {at + 1} should stand here" in damage[0].fault


@given(st.integers(2, 6), st.data())
def test_a_rewritten_entry_with_a_fitting_hash_breaks_the_next_link(count: int, data: st.DataObject) -> None:
    chain = _chain(count)
    at = data.draw(st.integers(0, count - 2))
    chain[at] = next_entry(chain[at - 1] if at else None, to_canonical({"sheet_id": "forged"}))
    assert is_intact(chain[at])
    assert inspect_chain(chain, None)[0].n == at + 2


@given(st.integers(1, 6), st.data())
def test_a_cut_off_end_is_found_with_the_head_that_was_noted_and_only_with_it(count: int, data: st.DataObject) -> None:
    chain = _chain(count)
    left = data.draw(st.integers(0, count - 1))
    assert inspect_chain(chain[:left], None) == ()
    (damage,) = inspect_chain(chain[:left], chain[-1].hash)
    assert damage.n is None
    assert f"last entry: {left}" in str(damage)


def test_a_head_noted_earlier_is_found_in_a_chain_that_has_grown() -> None:
    chain = _chain(5)
    assert inspect_chain(chain, chain[2].hash) == ()


def test_the_damaged_sheet_is_named() -> None:
    chain = _chain(2)
    chain[1] = ChainEntry(2, chain[1].previous, "0" * 64, chain[1].text)
    assert str(inspect_chain(chain, None)[0]).startswith("entry 2 (sheet 1): ")


@pytest.mark.parametrize("text", ["", "[]", "{}", '{"sheet_id": 3}', json.dumps("x"), "\udc80"])
def test_an_entry_that_holds_no_sheet_is_damage_and_no_crash(text: str) -> None:
    (damage,) = inspect_chain([ChainEntry(1, GENESIS, "f" * 64, text)], None)
    assert damage.sheet_id is None
