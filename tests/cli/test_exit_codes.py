"""Each error ends a command with its own exit code, and says what to do on standard error."""

import sys
from collections.abc import Iterator

import pytest

from autotune import errors
from autotune.cli import exit_code_of, main
from autotune.cli.exit_codes import ExitCode
from autotune.errors import AutotuneError, Complaint, ConfigError

CODES: dict[type[AutotuneError], ExitCode] = {
    errors.ConfigError: ExitCode.USAGE,
    errors.SheetError: ExitCode.USAGE,
    errors.RecordNotKept: ExitCode.USAGE,
    errors.JournalError: ExitCode.USAGE,
    errors.LinkError: ExitCode.LINK,
    errors.LinkTimeout: ExitCode.LINK,
    errors.LinkClosed: ExitCode.LINK,
    errors.LinkRefused: ExitCode.LINK,
    errors.LoopBusy: ExitCode.NO,
    errors.WriteNotVerified: ExitCode.STRANDED,
    errors.IllegalEvent: ExitCode.STRANDED,
    errors.WriteForbidden: ExitCode.STRANDED,
}


def _classes(of: type[AutotuneError]) -> Iterator[type[AutotuneError]]:
    for kind in of.__subclasses__():
        if kind.__module__ == errors.__name__:
            yield kind
            yield from _classes(kind)


@pytest.mark.parametrize("kind", list(_classes(AutotuneError)))
def test_every_error_has_its_exit_code(kind: type[AutotuneError]) -> None:
    fault = kind((Complaint("plant.toml", "loop", "missing", "add one"),)) if kind is ConfigError else kind("text")
    assert exit_code_of(fault) is CODES.get(kind, ExitCode.STRANDED)
    if kind not in CODES:
        assert kind.__name__ not in ("LinkError", "ConfigError")


def test_a_record_that_is_lost_does_not_hide_a_stranded_loop() -> None:
    assert exit_code_of(errors.RecordNotKept("text", is_stranded=True)) is ExitCode.STRANDED


def test_the_numbers_are_the_published_ones() -> None:
    assert [(code.name, code.value) for code in ExitCode] == [
        ("DONE", 0), ("NO", 1), ("USAGE", 2), ("LINK", 3), ("STRANDED", 4),
    ]  # fmt: skip


def test_a_fault_is_told_on_standard_error_and_ends_the_process_with_its_code(
    capsys: pytest.CaptureFixture[str], tmp_path: str
) -> None:
    before = sys.argv
    sys.argv = ["autotune", "sheet", "list", f"{tmp_path}/there-is-none.toml"]
    try:
        with pytest.raises(SystemExit) as ended:
            main()
    finally:
        sys.argv = before
    assert ended.value.code == ExitCode.USAGE
    captured = capsys.readouterr()
    assert captured.out == ""
    assert "there-is-none.toml" in captured.err
