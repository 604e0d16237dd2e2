"""The recording wire reads what the standard puts there: Modbus on TCP/IP V1.0b, and V1.1b3 sections 6.3, 6.12."""

import struct

import pytest

from tests.faults.wire import Spoiling, exception_to, numbers_of, shown_by, write_of


def frame(pdu: bytes, transaction: int = 1) -> bytes:
    return struct.pack(">HHHB", transaction, 0, len(pdu) + 1, 1) + pdu


def real(number: float) -> bytes:
    return struct.pack(">f", number)


def test_a_write_of_several_registers_is_read_by_the_names_of_its_tags() -> None:
    words = struct.pack(">IHH", 0x01020304, 9, 3) + real(53.5)
    write = write_of(frame(struct.pack(">BHHB", 16, 30, 6, 12) + words), 2.0)
    assert write is not None
    assert write.numbers == {"holder_request": 0x01020304, "heartbeat": 9, "sequence": 3, "op_request": 53.5}
    assert (write.t_s, write.strange, write.is_release) == (2.0, (), False)


def test_a_write_of_one_register_is_read_too() -> None:
    write = write_of(frame(struct.pack(">BHH", 6, 6, 1)), 0.0)
    assert write is not None
    assert (write.numbers, write.strange) == ({"mode": 1}, ())


@pytest.mark.parametrize(
    ("pdu", "strange"),
    [
        (struct.pack(">BHHBHH", 16, 50, 2, 4, 1, 1), (50, 51)),
        (struct.pack(">BHHBH", 16, 34, 1, 2, 1), (34,)),
        (struct.pack(">BHH", 5, 90, 0xFF00), (90,)),
        (struct.pack(">BHHH", 22, 6, 0, 1), (6,)),
    ],
)
def test_addresses_that_are_no_whole_tag_are_strange(pdu: bytes, strange: tuple[int, ...]) -> None:
    write = write_of(frame(pdu), 0.0)
    assert write is not None
    assert write.strange == strange


def test_a_reading_is_no_write_and_a_release_is_one() -> None:
    assert write_of(frame(struct.pack(">BHH", 3, 0, 10)), 0.0) is None
    write = write_of(frame(struct.pack(">BHHBI", 16, 30, 2, 4, 0)), 0.0)
    assert write is not None
    assert write.is_release


def test_an_answer_shows_what_its_question_asked_for() -> None:
    question = frame(struct.pack(">BHH", 3, 2, 5))
    answer = frame(struct.pack(">BB", 3, 10) + real(50.0) + real(45.25) + struct.pack(">H", 1))
    shown = shown_by(question, answer, 3.0)
    assert shown is not None
    assert shown.numbers == {"sp": 50.0, "op": 45.25, "mode": 1}
    assert shown_by(frame(struct.pack(">BHH", 3, 2, 5), 2), answer, 3.0) is None
    assert shown_by(question, exception_to(question, 2), 3.0) is None


def test_an_exception_answers_under_the_number_of_its_request() -> None:
    assert exception_to(frame(struct.pack(">BHH", 6, 6, 1), 0x1234), 4) == bytes.fromhex("1234 0000 0003 01 86 04")


def test_half_a_tag_is_no_number() -> None:
    assert numbers_of(5, (1, 2)) == ({"mode": 2}, (5,))


def test_a_spoiling_counts_what_is_left() -> None:
    counted, endless, healthy = Spoiling(answers_left=2), Spoiling(answers_left=-1), Spoiling()
    assert [counted.takes_one() for _ in range(3)] == [True, True, False]
    assert [endless.takes_one() for _ in range(3)] == [True, True, True]
    assert not healthy.takes_one()
