"""A sequence that grows and is never changed."""

from hypothesis import given
from hypothesis import strategies as st

from autotune.experiment.history import CHUNK, History


@given(st.lists(st.integers(), max_size=3 * CHUNK + 5))
def test_a_history_holds_what_was_appended_in_order(entries: list[int]) -> None:
    history: History[int] = History()
    for entry in entries:
        history = history.appended(entry)
    assert list(history) == entries
    assert len(history) == len(entries)
    assert history.last == (entries[-1] if entries else None)


def test_an_older_history_is_not_changed_by_a_newer_one() -> None:
    older: History[int] = History()
    for k in range(CHUNK - 1):
        older = older.appended(k)
    newer, other = older.appended(1), older.appended(2)
    assert len(older) == CHUNK - 1
    assert (newer.last, other.last) == (1, 2)


def test_full_chunks_are_shared_and_not_copied() -> None:
    history: History[int] = History()
    for k in range(10 * CHUNK):
        history = history.appended(k)
    assert all(before is after for before, after in zip(history.full, history.appended(0).full, strict=True))
