import errno
import json
import os
import resource
from collections.abc import Callable, Iterator
from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from autotune.confirmed_write.commands import ReadSettings, WriteField
from autotune.confirmed_write.plan import WritePlan
from autotune.errors import JournalError
from autotune.experiment.commands import ClaimLoop, DriveOutput, SetMode
from autotune.experiment.events import AbortAsked, Started, TimePassed
from autotune.experiment.plan import ConvergencePlan, RelayPlan, TestPlan
from autotune.loop.limits import AsFound, Limits
from autotune.loop.mode import ControlAction, LoopMode
from autotune.loop.quality import Quality
from autotune.loop.sample import Sample, Stamp
from autotune.loop.settings import BlockFields
from autotune.service.journal import FileJournal, Journal, MemoryJournal, journal_file
from autotune.service.journal_intents import open_intents
from autotune.service.journal_reading import read_journal, read_journal_text, resume_journal
from autotune.service.reserve import Reserve

ID = "TIC-204-20261201-094502-7f3a"
NOON = datetime(2026, 12, 1, 12, tzinfo=UTC)
PLAN = TestPlan(
    loop="TIC-204",
    action=ControlAction.REVERSE,
    limits=Limits(5.0, 5.0, 10.0, 90.0, 40.0, 70.0),
    relay=RelayPlan(5.0, 5.0),
    convergence=ConvergencePlan(),
    scan_s=0.1,
    plc_scan_s=0.05,
    has_guard=True,
    token=7,
)
FOUND = AsFound(42.0, 60.0, Sample(2.0, Stamp.at(2.0), 60.0, Quality.GOOD, 60.0, 42.0, Quality.GOOD, LoopMode.AUTO))
WRITE_PLAN = WritePlan("TIC-204", "a-rule", BlockFields(1.5, 0.8, None), BlockFields(2.1, 1.2, None), (), "b", "c")


class SmallDisk:
    """An unbuffered file on a disk with so much room; writes what fits, as a real one does."""

    def __init__(self, file: Path, room_bytes: int, *, is_loud: bool = True) -> None:
        self._raw = file.open("xb", buffering=0)
        self.room_bytes = room_bytes
        self.is_loud = is_loud  # a silent one tells a full disk only by writing nothing

    def write(self, line: bytes, /) -> int:
        if self.room_bytes == 0 and self.is_loud:
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
        written = self._raw.write(line[: self.room_bytes])
        self.room_bytes -= written
        return written

    def truncate(self, size: int, /) -> int:
        self.room_bytes += self._raw.tell() - size
        return self._raw.truncate(size)

    def seek(self, place: int, /) -> int:
        return self._raw.seek(place)

    def fileno(self) -> int:
        return self._raw.fileno()

    def close(self) -> None:
        self._raw.close()


class DiskReserve(Reserve):
    """A reserve on that small disk: freeing it makes room there."""

    def __init__(self, file: Path, size_bytes: int, disk: SmallDisk) -> None:
        super().__init__(file, size_bytes)
        self._disk, self._size_bytes = disk, size_bytes

    def free(self) -> bool:
        freed = super().free()
        self._disk.room_bytes += self._size_bytes if freed else 0
        return freed


@pytest.fixture
def journal(tmp_path: Path) -> Iterator[FileJournal]:
    journal = FileJournal.create(tmp_path, ID, wall_clock=lambda: NOON, reserve_bytes=1000)
    yield journal
    journal.close()


def _kinds(file: Path) -> list[str]:
    return [line.kind for line in read_journal(file).lines]


def test_lines_come_back_in_order_with_number_instant_clock_and_payload(journal: FileJournal) -> None:
    journal.record("plan", PLAN, t_s=0.0, durable=True)
    journal.record("event", Started(0.25), t_s=0.25)
    journal.record("note", {"cable": "changed", "twice": True}, t_s=1.0)
    read = read_journal(journal.file)
    assert read.torn is None
    assert [(line.n, line.utc, line.t_s, line.kind) for line in read.lines] == [
        (1, NOON, 0.0, "plan"),
        (2, NOON, 0.25, "event"),
        (3, NOON, 1.0, "note"),
    ]
    assert [line.payload for line in read.lines] == [PLAN, Started(0.25), {"cable": "changed", "twice": True}]


def test_a_line_is_in_the_systems_hands_when_record_returns(journal: FileJournal) -> None:
    journal.record("event", Started(0.0), t_s=0.0)
    assert _kinds(journal.file) == ["event"]  # read through another descriptor, the journal still open


def test_the_journal_in_memory_reads_like_the_one_in_a_file(journal: FileJournal) -> None:
    memory = MemoryJournal(lambda: NOON)
    both: tuple[Journal, ...] = (journal, memory)
    for one in both:
        one.record("plan", PLAN, t_s=0.0, durable=True)
        one.record("event", AbortAsked(1.0, "R. Lind"), t_s=1.0)
    assert read_journal_text("".join(f"{line}\n" for line in memory.lines)) == read_journal(journal.file)


def test_only_durable_lines_are_synced_and_the_name_of_the_file_before_all(tmp_path: Path) -> None:
    synced: list[tuple[int, str]] = []

    def sync(descriptor: int) -> None:
        place = Path(os.readlink(f"/proc/self/fd/{descriptor}"))
        lines = len(place.read_text().splitlines()) if place.is_file() else 0
        synced.append((lines, place.name))

    journal = FileJournal.create(tmp_path, ID, sync=sync)
    assert synced == [(0, "journals")]
    journal.record("event", Started(0.0), t_s=0.0)
    assert len(synced) == 1
    journal.record("command", SetMode(LoopMode.MAN), t_s=0.1, durable=True)
    assert synced[1:] == [(2, f"{ID}.jsonl")]  # written before it is synced
    journal.close()


def test_a_test_never_writes_into_another_tests_journal(journal: FileJournal, tmp_path: Path) -> None:
    journal.record("plan", PLAN, t_s=0.0)
    with pytest.raises(JournalError, match=rf"{ID}\.jsonl: a journal of that name exists"):
        FileJournal.create(tmp_path, ID)
    assert _kinds(journal.file) == ["plan"]


def test_no_test_starts_where_no_journal_can_be_made(tmp_path: Path) -> None:
    (tmp_path / "journals").write_text("a file where the folder should be")
    with pytest.raises(JournalError, match="no test starts without its journal"):
        FileJournal.create(tmp_path, ID)


def test_a_disk_that_can_not_sync_its_folder_leaves_no_half_begun_journal(tmp_path: Path) -> None:
    def fails(descriptor: int) -> None:
        raise OSError(errno.EIO, os.strerror(errno.EIO))

    with pytest.raises(JournalError, match="check the disk"):
        FileJournal.create(tmp_path, ID, sync=fails)
    assert list((tmp_path / "journals").iterdir()) == []


def test_a_durable_line_that_may_not_be_on_the_disk_is_told(tmp_path: Path) -> None:
    faults: list[OSError] = []

    def sync(descriptor: int) -> None:
        if faults:
            raise faults.pop()

    journal = FileJournal.create(tmp_path, ID, sync=sync)
    faults.append(OSError(errno.EIO, os.strerror(errno.EIO)))
    with pytest.raises(JournalError, match="line 1 may not be on the disk"):
        journal.record("plan", PLAN, t_s=0.0, durable=True)
    journal.record("end", "ABORTED", t_s=1.0, durable=True)
    assert _kinds(journal.file) == ["plan", "end"]
    journal.close()


def test_a_disk_that_is_found_full_only_by_a_sync_frees_the_reserve_too(tmp_path: Path) -> None:
    faults: list[OSError] = []

    def sync(descriptor: int) -> None:
        if faults:
            raise faults.pop()

    journal = FileJournal.create(tmp_path, ID, sync=sync, reserve_bytes=1000)
    faults.append(OSError(errno.ENOSPC, os.strerror(errno.ENOSPC)))
    with pytest.raises(JournalError, match="line 1 may not be on the disk: the disk is full; free some space"):
        journal.record("plan", PLAN, t_s=0.0, durable=True)
    assert not journal.file.with_suffix(".reserve").exists()
    journal.close()


def test_a_closed_journal_takes_no_line_and_may_be_closed_again(journal: FileJournal) -> None:
    journal.close()
    journal.close()
    with pytest.raises(JournalError, match=f"{ID}.jsonl"):
        journal.record("end", "COMPLETE", t_s=1.0)


def test_a_payload_without_code_leaves_no_line(journal: FileJournal) -> None:
    with pytest.raises(JournalError, match="no code"):
        journal.record("note", object(), t_s=0.0)
    journal.record("note", "fine", t_s=0.0)
    assert _kinds(journal.file) == ["note"]


def test_the_reserve_takes_its_space_before_the_test_and_goes_with_its_end(journal: FileJournal) -> None:
    reserve = journal.file.with_suffix(".reserve")
    assert reserve.stat().st_size == 1000
    journal.close()
    assert not reserve.exists()


@pytest.mark.parametrize("is_loud", [True, False])
@pytest.mark.parametrize("room_bytes", [0, 1, 60, 119])
def test_on_a_full_disk_the_reserve_takes_the_line_and_the_test_is_told_once(
    tmp_path: Path, room_bytes: int, is_loud: bool
) -> None:
    file = tmp_path / "small.jsonl"
    disk = SmallDisk(file, room_bytes, is_loud=is_loud)
    journal = FileJournal(file, disk, DiskReserve(tmp_path / "small.reserve", 1000, disk), wall_clock=lambda: NOON)
    with pytest.raises(JournalError, match=r"small\.jsonl: the disk is full; the reserve was used to write on"):
        journal.record("event", AbortAsked(0.0, "the operator at the skid, with a long name"), t_s=0.0)
    journal.record("note", "handing back", t_s=1.0)
    journal.record("end", "ABORTED", t_s=2.0, durable=True)
    journal.close()
    assert _kinds(file) == ["event", "note", "end"]


@pytest.mark.parametrize("room_bytes", [0, 1, 60])
def test_when_the_reserve_is_used_up_no_half_line_stays(tmp_path: Path, room_bytes: int) -> None:
    file = tmp_path / "small.jsonl"
    disk = SmallDisk(file, 200 + room_bytes)
    journal = FileJournal(file, disk, None, wall_clock=lambda: NOON)
    journal.record("note", "fits", t_s=0.0)
    with pytest.raises(JournalError, match="the disk is full; free some space"):
        journal.record("note", "x" * 300, t_s=1.0)
    disk.room_bytes += 1000  # somebody freed some space
    journal.record("end", "ABORTED", t_s=2.0)
    journal.close()
    assert [(line.n, line.kind) for line in read_journal(file).lines] == [(1, "note"), (2, "end")]


class StuckFile:
    """A file on which nothing works any more after half a line."""

    def __init__(self, file: Path) -> None:
        self._raw = file.open("xb", buffering=0)
        self._writes = 0

    def write(self, line: bytes, /) -> int:
        self._writes += 1
        if self._writes > 1:
            raise OSError(errno.EIO, os.strerror(errno.EIO))
        return self._raw.write(line[:10])

    def truncate(self, size: int, /) -> int:
        raise OSError(errno.EIO, os.strerror(errno.EIO))

    def seek(self, place: int, /) -> int:
        return self._raw.seek(place)

    def fileno(self) -> int:
        return self._raw.fileno()

    def close(self) -> None:
        self._raw.close()


def test_half_a_line_on_a_real_file_is_cut_off_again(journal: FileJournal) -> None:
    journal.record("note", "fits", t_s=0.0)
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (journal.file.stat().st_size + 40, hard))  # 40 bytes more, then EFBIG
    try:
        with pytest.raises(JournalError, match="File too large; check the disk"):
            journal.record("note", "does not fit", t_s=1.0)
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
    journal.record("end", "ABORTED", t_s=2.0)
    assert [(line.n, line.kind) for line in read_journal(journal.file).lines] == [(1, "note"), (2, "end")]


def test_nothing_follows_half_a_line_that_can_not_be_cut_off(tmp_path: Path) -> None:
    stuck = StuckFile(tmp_path / "stuck.jsonl")
    journal = FileJournal(tmp_path / "stuck.jsonl", stuck, None)
    with pytest.raises(JournalError, match="check the disk"):
        journal.record("note", "lost", t_s=0.0)
    with pytest.raises(ValueError, match="closed file"):
        stuck.fileno()
    assert read_journal(journal.file).torn is not None


@given(st.data())
def test_a_journal_torn_at_any_byte_reads_up_to_there_and_says_so(data: st.DataObject) -> None:
    memory = MemoryJournal(lambda: NOON)
    memory.record("plan", PLAN, t_s=0.0)
    memory.record("event", Started(0.0), t_s=0.0)
    memory.record("note", "the line that was being written", t_s=1.0)
    whole = "".join(f"{line}\n" for line in memory.lines)
    cut = data.draw(st.integers(0, len(whole)))
    read = read_journal_text(whole[:cut])
    assert len(read.lines) == whole[:cut].count("\n")
    assert (read.torn is None) == (cut == 0 or whole[cut - 1] == "\n")
    assert read.size_bytes == whole[:cut].rfind("\n") + 1


def test_a_tail_of_zeros_after_a_loss_of_power_is_a_torn_line(journal: FileJournal) -> None:
    journal.record("plan", PLAN, t_s=0.0)
    with journal.file.open("ab") as file:
        file.write(b"\0" * 500)
    read = read_journal(journal.file)
    assert [line.kind for line in read.lines] == ["plan"]
    assert read.torn == "line 2 is torn (500 bytes); what it said is not known"


def _edited(journal: FileJournal, edit: Callable[[list[str]], list[str]]) -> None:
    for t_s in range(4):
        journal.record("event", TimePassed(float(t_s)), t_s=float(t_s))
    journal.file.write_text("".join(edit(journal.file.read_text().splitlines(keepends=True))))


@pytest.mark.parametrize(
    ("edit", "fault"),
    [
        (lambda lines: [lines[0], "{half\n", *lines[2:]], "line 2 is damaged and good lines follow"),
        (lambda lines: [lines[0].replace('"t_s":0.0', '"t_s":NaN'), *lines[1:]], "line 1 is damaged"),
        (lambda lines: [lines[0], *lines[2:]], "line 2 has number 3: lines were removed"),
        (lambda lines: [*lines[:3], lines[3].replace("TimePassed", "TimeFlew")], "line 4: unknown tag"),
        (lambda lines: [lines[0].replace('"n":1', '"n":"1"'), *lines[1:]], "line 1 has number 1"),
        (lambda lines: [lines[0].replace("2026-12-01", "yesterday"), *lines[1:]], "line 1: Invalid isoformat"),
        (lambda lines: [lines[0].replace('"t_s":0.0,"kind"', '"t_s":"0","kind"'), *lines[1:]], "line 1: number, kind"),
    ],
)
def test_damage_that_no_crash_makes_is_told_with_its_line(
    journal: FileJournal, edit: Callable[[list[str]], list[str]], fault: str
) -> None:
    _edited(journal, edit)
    with pytest.raises(JournalError, match=fault):
        read_journal(journal.file)


def test_a_missing_journal_is_told(tmp_path: Path) -> None:
    with pytest.raises(JournalError, match=r"none\.jsonl: No such file"):
        read_journal(tmp_path / "none.jsonl")


def test_a_resumed_journal_goes_on_and_keeps_the_torn_line(tmp_path: Path) -> None:
    journal = FileJournal.create(tmp_path, ID, reserve_bytes=10)
    journal.record("plan", PLAN, t_s=0.0)
    journal.record("command", SetMode(LoopMode.MAN), t_s=3.0)
    journal.close()
    with journal.file.open("ab") as file:
        file.write(b'{"n":3,"utc')
    resumed = resume_journal(journal.file)
    resumed.record("end", "STRANDED", t_s=4.0, durable=True)
    resumed.close()
    lines = read_journal(journal.file).lines
    assert [(line.n, line.kind) for line in lines] == [(1, "plan"), (2, "command"), (3, "resumed"), (4, "end")]
    assert lines[2].payload == '{"n":3,"utc'
    assert lines[2].t_s == 3.0


def test_a_journal_that_is_gone_can_not_be_resumed(tmp_path: Path) -> None:
    with pytest.raises(JournalError, match="No such file"):
        resume_journal(tmp_path / "gone.jsonl")


def _died(data_dir: Path, journal_id: str, *lines: tuple[str, object]) -> Path:
    """The journal of a process that died after these lines."""
    memory = MemoryJournal(_ticking())
    for t_s, (kind, payload) in enumerate(lines):
        memory.record(kind, payload, t_s=float(t_s))  # type: ignore[arg-type]  # the kinds stand below as plain texts
    file = journal_file(data_dir, journal_id)
    file.parent.mkdir(exist_ok=True)
    file.write_text("".join(f"{line}\n" for line in memory.lines))
    return file


def _ticking() -> Callable[[], datetime]:
    ticks = iter(range(100))
    return lambda: NOON + timedelta(seconds=next(ticks))


MOVE = DriveOutput(47.0, 7, 3, 1)


def test_a_test_that_died_after_its_first_write_is_an_open_intent(tmp_path: Path) -> None:
    file = _died(
        tmp_path,
        ID,
        ("plan", PLAN),
        ("event", Started(0.0)),
        ("as_found", FOUND),
        ("command", ClaimLoop(7, 1)),
        ("command", SetMode(LoopMode.MAN)),
        ("command", MOVE),
        ("event", TimePassed(6.0)),
    )
    (intent,) = open_intents(tmp_path)
    assert (intent.file, intent.journal_id, intent.fault, intent.torn) == (file, ID, None, None)
    assert (intent.plan, intent.as_found) == (PLAN, FOUND)
    assert (intent.last_command, intent.last_output, intent.last_mode) == (MOVE, MOVE, SetMode(LoopMode.MAN))
    assert (intent.started_utc, intent.last_utc) == (NOON, NOON + timedelta(seconds=6))


def test_looking_at_an_open_intent_again_makes_it_no_younger(tmp_path: Path) -> None:
    file = _died(tmp_path, ID, ("plan", PLAN), ("as_found", FOUND), ("command", MOVE))
    back = DriveOutput(42.0, 7, 4, 2)
    for _ in range(2):  # two recoveries, an hour later, that could not confirm the hand-back
        resumed = resume_journal(file, wall_clock=lambda: NOON + timedelta(hours=1))
        resumed.record("command", back, t_s=0.5, durable=True)
        resumed.close()
    (intent,) = open_intents(tmp_path)
    assert intent.last_utc == NOON + timedelta(seconds=2)
    assert intent.last_output == back


def test_a_torn_last_line_hides_no_open_intent(tmp_path: Path) -> None:
    file = _died(tmp_path, ID, ("plan", PLAN), ("as_found", FOUND), ("command", MOVE))
    with file.open("ab") as journal:
        journal.write(b'{"n":4,"kind":"end"')
    (intent,) = open_intents(tmp_path)
    assert intent.last_command == MOVE
    assert intent.torn is not None


def test_a_write_of_settings_that_died_is_an_open_intent_with_its_plan(tmp_path: Path) -> None:
    write = WriteField("gain", 2.1)
    _died(tmp_path, f"{ID}-write", ("write_plan", WRITE_PLAN), ("command", ReadSettings()), ("command", write))
    (intent,) = open_intents(tmp_path)
    assert (intent.write_plan, intent.last_command, intent.plan) == (WRITE_PLAN, write, None)


@pytest.mark.parametrize(
    "lines",
    [
        (),
        (("plan", PLAN), ("event", Started(0.0)), ("as_found", FOUND)),
        (("write_plan", WRITE_PLAN), ("command", ReadSettings())),
        (("plan", PLAN), ("command", MOVE), ("end", "COMPLETE")),
        (("plan", PLAN), ("command", MOVE), ("end", "COMPLETE"), ("note", "looked at later")),
    ],
)
def test_what_touched_nothing_or_came_to_its_end_is_no_open_intent(
    tmp_path: Path, lines: tuple[tuple[str, object], ...]
) -> None:
    _died(tmp_path, ID, *lines)
    assert open_intents(tmp_path) == ()


def test_an_unreadable_journal_is_an_open_intent_with_its_fault(tmp_path: Path) -> None:
    file = _died(tmp_path, ID, ("plan", PLAN), ("command", MOVE), ("event", TimePassed(1.0)))
    file.write_text(file.read_text().replace("experiment.DriveOutput", "experiment.MoveOutput"))
    (intent,) = open_intents(tmp_path)
    assert intent.plan is None
    assert intent.fault is not None
    assert "unknown tag" in intent.fault


def test_what_stands_where_a_journal_should_is_an_open_intent_with_its_fault(tmp_path: Path) -> None:
    (tmp_path / "journals" / f"{ID}.jsonl").mkdir(parents=True)
    (intent,) = open_intents(tmp_path)
    assert intent.fault is not None
    assert "Is a directory; mend its rights" in intent.fault


def test_no_journals_at_all_are_no_open_intents(tmp_path: Path) -> None:
    assert open_intents(tmp_path / "new") == ()


def test_the_journal_is_json_lines_that_any_program_reads(journal: FileJournal) -> None:
    journal.record("event", Started(0.5), t_s=0.5)
    assert json.loads(journal.file.read_text()) == {
        "n": 1,
        "utc": "2026-12-01T12:00:00.000+00:00",
        "t_s": 0.5,
        "kind": "event",
        "payload": {"experiment.Started": {"t_s": 0.5}},
    }
