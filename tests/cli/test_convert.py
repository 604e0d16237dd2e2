"""``autotune convert`` against printed values; the sources stand beside each check in tests/reference/checks.json."""

import json
from typing import Any

import pytest
from typer.testing import CliRunner, Result

from autotune.cli.app import app
from tests.loop.reference import CHECKS


def convert(*words: object) -> Result:
    return CliRunner().invoke(app, ["convert", *(str(word) for word in words)])


def answered(*words: object) -> dict[str, Any]:
    """The one JSON object of a conversion, read strictly."""
    result = convert(*words, "--json")

    def refuse(word: str) -> None:
        raise AssertionError(f"{word} is no JSON")

    answer: dict[str, Any] = json.loads(result.stdout, parse_constant=refuse)
    return answer


def settings(*words: object) -> list[float]:
    answer = answered(*words)
    assert answer["refusal"] is None
    held = answer["settings"]
    return [held["gain"], held["integral"], held["derivative"]]


def notation(form: str, to: str, numbers: list[float]) -> tuple[object, ...]:
    gain, integral, derivative = numbers
    return ("--form", form, "--to", to, "--gain", gain, "--integral", integral, "--derivative", derivative)


def test_series_to_ideal_is_as_printed() -> None:
    check = CHECKS["PF-01"]
    assert settings(*notation("series", "ideal", check["inputs"]["series"])) == pytest.approx(
        check["expected"]["ideal"]
    )


def test_ideal_to_series_is_as_printed() -> None:
    check = CHECKS["PF-02"]
    ideal, series = check["inputs"]["ideal"], check["expected"]["series"]
    assert settings(*notation("ideal", "series", ideal)) == pytest.approx(series, rel=1e-7)


def test_the_edge_of_what_a_series_form_can_hold_is_as_printed() -> None:
    check = CHECKS["PF-03"]
    ideal, series = check["inputs"]["ideal"], check["expected"]["series"]
    assert settings(*notation("ideal", "series", ideal)) == pytest.approx(series)


def test_what_a_series_form_can_not_hold_is_refused_with_a_reason() -> None:
    """PF-03: Ti/Td = 3.9."""
    words = notation("ideal", "series", [1.0, 3.9, 1.0])
    answer = answered(*words)
    assert answer["settings"] is None
    assert answer["refusal"]["code"]
    result = convert(*words)
    assert result.exit_code == 1
    assert result.stdout.startswith("Refused. ")


@pytest.mark.parametrize("example", ["E4", "E10"])
def test_settings_printed_in_series_form_are_those_printed_in_ideal_form(example: str) -> None:
    check = CHECKS["PF-04"]
    series, ideal = check["inputs"][example], check["expected"][example]
    assert settings(*notation("series", "ideal", series)) == pytest.approx(ideal, rel=1e-7)


def test_parallel_gains_band_and_repeats_are_as_printed() -> None:
    check = CHECKS["PF-05"]
    given, expected = check["inputs"], check["expected"]
    ideal = notation("ideal", "parallel", [given["K"], given["Ti"], given["Td"]])
    gains = settings(*ideal, "--to-integral", "gain-per-s", "--to-derivative", "gain-s")
    assert gains == pytest.approx([given["K"], expected["Ki"], expected["Kd"]])
    same = notation("ideal", "ideal", [given["K"], given["Ti"], given["Td"]])
    band, repeats, _ = settings(*same, "--to-gain", "band", "--to-integral", "repeats-per-min")
    assert (band, repeats) == pytest.approx((expected["PB"], expected["rep_per_min"]))


def test_there_and_back_again_is_where_it_began() -> None:
    gains = ("--to-integral", "gain-per-min", "--to-derivative", "gain-min")
    there = settings(*notation("series", "parallel", [1.0, 8.0, 2.0]), *gains)
    back = settings(
        *notation("parallel", "series", there), "--integral-as", "gain-per-min", "--derivative-as", "gain-min"
    )
    assert back == pytest.approx([1.0, 8.0, 2.0])


def test_a_person_reads_the_numbers_with_their_units() -> None:
    result = convert("--form", "ideal", "--to", "ideal", "--gain", 2, "--integral", 10, "--to-gain", "band")
    assert result.exit_code == 0
    lines = [line.split() for line in result.stdout.splitlines()]
    assert lines == [["ideal", "form"], ["gain", "50", "%"], ["integral", "10", "s"], ["derivative", "off", "s"]]


@pytest.mark.parametrize(
    "words",
    [
        ("--form", "ideal", "--to", "ideal"),
        ("--form", "nobody's", "--to", "ideal", "--gain", "1"),
        ("--form", "ideal", "--to", "ideal", "--gain", "two"),
        ("--form", "ideal", "--to", "ideal", "--gain", "1", "--integral-as", "hours"),
        ("--form", "ideal", "--to", "ideal", "--gain", "1", "--nonsense"),
    ],
)
def test_bad_words_are_told_with_exit_code_2(words: tuple[str, ...]) -> None:
    result = convert(*words)
    assert result.exit_code == 2
    assert "Usage: " in result.output


@pytest.mark.parametrize("gain", ["nan", "inf", "-inf", "0", "-1"])
@pytest.mark.parametrize("to", ["ideal", "series"])
def test_a_gain_that_is_none_is_refused_and_never_printed(gain: str, to: str) -> None:
    words = ("--form", "ideal", "--to", to, "--gain", gain, "--integral", "10", "--to-gain", "band")
    assert convert(*words).exit_code == 1
    assert answered(*words)["settings"] is None


@pytest.mark.parametrize("integral", ["nan", "inf", "-3"])
def test_an_integral_that_is_none_is_refused(integral: str) -> None:
    assert convert("--form", "ideal", "--to", "series", "--gain", 1, "--integral", integral).exit_code == 1


def test_an_integral_that_is_off_stays_off() -> None:
    gains = ("--to-integral", "gain-per-s", "--to-derivative", "gain-s")
    assert settings("--form", "ideal", "--to", "parallel", "--gain", 2, *gains) == [2.0, 0.0, 0.0]


def test_a_parallel_block_with_times_is_refused_as_ambiguous() -> None:
    assert answered("--form", "ideal", "--to", "parallel", "--gain", 2)["refusal"]["code"] == "FORM_AMBIGUOUS"
