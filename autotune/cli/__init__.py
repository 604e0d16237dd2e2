"""Prints and exit codes; nothing else prints."""

import sys

from autotune.cli.app import app
from autotune.cli.exit_codes import ExitCode
from autotune.cli.printing import complain
from autotune.errors import (
    AutotuneError,
    ConfigError,
    JournalError,
    LinkError,
    LoopBusy,
    RecordNotKept,
    SheetError,
    WriteNotVerified,
)


def main() -> None:
    """Run the command line and end the process with its exit code."""
    try:
        app()
    except AutotuneError as fault:
        complain(str(fault))
        sys.exit(exit_code_of(fault))


def exit_code_of(fault: AutotuneError) -> ExitCode:
    """The exit code of a contract that was broken."""
    match fault:
        case RecordNotKept(is_stranded=True):
            return ExitCode.STRANDED
        case ConfigError() | SheetError() | JournalError():
            return ExitCode.USAGE
        case LinkError():
            return ExitCode.LINK
        case LoopBusy():
            return ExitCode.NO
        case WriteNotVerified():
            return ExitCode.STRANDED
        case _:
            return ExitCode.STRANDED  # our own fault: a person must look at the loop
