from autotune.field.back_off import BackOff


def test_the_first_attempt_waits_for_nothing() -> None:
    assert BackOff(0.5).wait_s(0.0) == 0.0


def test_the_next_attempt_waits_for_what_is_left_of_the_gap() -> None:
    back_off = BackOff(0.5)
    back_off.attempted(100.0)
    assert [back_off.wait_s(now_s) for now_s in (100.0, 100.25, 100.5, 200.0)] == [0.5, 0.25, 0.0, 0.0]


def test_the_gap_doubles_up_to_eightfold_while_nobody_answers() -> None:
    back_off = BackOff(0.5)
    gaps_s = []
    for attempt in range(6):
        now_s = 100.0 * attempt
        back_off.attempted(now_s)
        gaps_s.append(back_off.wait_s(now_s))
    assert gaps_s == [0.5, 1.0, 2.0, 4.0, 4.0, 4.0]


def test_after_an_answer_the_gap_is_short_again() -> None:
    back_off = BackOff(0.5)
    for now_s in (0.0, 1.0, 2.0):
        back_off.attempted(now_s)
    back_off.answered()
    back_off.attempted(10.0)
    assert back_off.wait_s(10.0) == 0.5
