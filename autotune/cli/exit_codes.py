"""Exit codes, the same for every command."""

from enum import IntEnum


class ExitCode(IntEnum):
    """0 done; 1 the answer is no; 2 usage or configuration; 3 link; 4 a person must go to the panel."""

    DONE = 0
    NO = 1
    USAGE = 2
    LINK = 3
    STRANDED = 4
