import gc
import os
import signal
import subprocess
import sys
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC, datetime
from pathlib import Path

import pytest

from autotune.errors import LoopBusy
from autotune.service.locks import LockedThing, Tenant, hold

LOOP: tuple[LockedThing, str] = ("loop", "TIC-204")
ENDPOINT: tuple[LockedThing, str] = ("endpoint", "127.0.0.1:5020")
OTHER_LOOP: tuple[LockedThing, str] = ("loop", "FIC-101")

HOLDER = """
import sys
from pathlib import Path
from autotune.service.locks import Tenant, hold
held = hold(Path(sys.argv[1]), [("loop", "TIC-204"), ("endpoint", "127.0.0.1:5020")], Tenant.present("test of TIC-204"))
print("held", flush=True)
sys.stdin.read()
"""


def _tenant(doing: str = "test of TIC-204") -> Tenant:
    return Tenant.present(doing, lambda: datetime(2026, 12, 1, 9, 45, 2, tzinfo=UTC))


@contextmanager
def _another_process(data_dir: Path) -> Iterator["subprocess.Popen[str]"]:
    """A process that holds loop and endpoint until its input ends."""
    with subprocess.Popen(
        [sys.executable, "-c", HOLDER, str(data_dir)],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
        cwd=Path(__file__).parents[2],
    ) as holder:
        try:
            assert holder.stdout is not None
            assert holder.stdout.readline() == "held\n"
            yield holder
        finally:
            holder.kill()


def test_the_second_master_is_told_who_holds_the_loop_since_when_and_what_for(tmp_path: Path) -> None:
    with _another_process(tmp_path) as holder:
        with pytest.raises(LoopBusy) as refused:
            hold(tmp_path, [LOOP], _tenant())
        text = str(refused.value)
        assert text.startswith("loop TIC-204 is held by ")
        assert f"(process {holder.pid}) since 20" in text
        assert "test of TIC-204; finish there first" in text
        with pytest.raises(LoopBusy, match=r"^endpoint 127\.0\.0\.1:5020 is held by"):
            hold(tmp_path, [ENDPOINT], _tenant())


def test_a_killed_master_holds_nothing_any_more(tmp_path: Path) -> None:
    with _another_process(tmp_path) as holder:
        holder.send_signal(signal.SIGKILL)
        holder.wait()
        with (
            hold(tmp_path, [LOOP, ENDPOINT], _tenant()),
            pytest.raises(LoopBusy, match=rf"\(process {os.getpid()}\) since 2026-12-01T09:45:02\+00:00"),
        ):
            hold(tmp_path, [LOOP], _tenant())


def test_a_master_that_ends_by_itself_holds_nothing_any_more(tmp_path: Path) -> None:
    with _another_process(tmp_path) as holder:
        holder.communicate("")
        assert holder.returncode == 0
        hold(tmp_path, [LOOP, ENDPOINT], _tenant()).release()


def test_all_locks_are_taken_or_none(tmp_path: Path) -> None:
    with hold(tmp_path, [LOOP], _tenant()):
        with pytest.raises(LoopBusy, match="loop TIC-204"):
            hold(tmp_path, [ENDPOINT, OTHER_LOOP, LOOP], _tenant())
        hold(tmp_path, [ENDPOINT, OTHER_LOOP], _tenant()).release()


def test_two_loops_at_two_endpoints_do_not_disturb_each_other(tmp_path: Path) -> None:
    with hold(tmp_path, [LOOP, ENDPOINT], _tenant()), hold(tmp_path, [OTHER_LOOP], _tenant()):
        assert len(list((tmp_path / "locks").glob("*.lock"))) == 3


def test_a_lock_outlives_a_garbage_collection_while_it_is_referenced(tmp_path: Path) -> None:
    held = hold(tmp_path, [LOOP], _tenant())
    gc.collect()
    with pytest.raises(LoopBusy):
        hold(tmp_path, [LOOP], _tenant())
    held.release()


def test_another_thread_may_release_and_twice_is_no_harm(tmp_path: Path) -> None:
    held = hold(tmp_path, [LOOP], _tenant())
    for _ in range(2):
        thread = threading.Thread(target=held.release)
        thread.start()
        thread.join()
    hold(tmp_path, [LOOP], _tenant()).release()


def test_the_lock_file_stays_and_only_the_word_who_held_it_goes(tmp_path: Path) -> None:
    hold(tmp_path, [LOOP], _tenant()).release()
    assert [file.name for file in (tmp_path / "locks").iterdir()] == ["loop-TIC-204.lock"]


@pytest.mark.parametrize("word", [None, "", "[]", '{"user": "x"}', "\0"])
def test_a_holder_whose_word_is_missing_or_torn_still_holds(tmp_path: Path, word: str | None) -> None:
    with hold(tmp_path, [LOOP], _tenant()):
        told = tmp_path / "locks" / "loop-TIC-204.json"
        told.unlink()
        if word is not None:
            told.write_text(word)
        with pytest.raises(LoopBusy, match="held by somebody who has not yet said who"):
            hold(tmp_path, [LOOP], _tenant())


def test_names_that_no_file_could_have_are_locked_apart(tmp_path: Path) -> None:
    odd: list[tuple[LockedThing, str]] = [
        ("endpoint", name) for name in ("opc.tcp://a/b", "opc.tcp:__a_b", "../b", "b")
    ]
    with hold(tmp_path, odd, _tenant()):
        assert {file.parent for file in tmp_path.rglob("*.lock")} == {tmp_path / "locks"}
        assert len(list((tmp_path / "locks").glob("*.lock"))) == 4


def test_a_folder_that_can_not_be_made_is_told(tmp_path: Path) -> None:
    (tmp_path / "locks").write_text("a file where the folder should be")
    with pytest.raises(LoopBusy, match=r"can't be taken: .*; mend its rights"):
        hold(tmp_path, [LOOP], _tenant())


def test_a_lock_says_whose_process_it_is() -> None:
    tenant = Tenant.present("test")
    assert tenant.pid == os.getpid()
    assert datetime.fromisoformat(tenant.since_utc).tzinfo is not None
