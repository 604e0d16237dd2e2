"""Disk space set aside before a test, so that its end can be written on a full disk."""

import os
from pathlib import Path


class Reserve:
    """A file of ``size_bytes`` that is freed when the disk is full.

    It holds noise, since a file system may store zeros without taking any space.  Raises ``OSError``.
    """

    def __init__(self, file: Path, size_bytes: int) -> None:
        self._file = file
        with file.open("wb") as reserve:
            reserve.write(os.urandom(size_bytes))
            reserve.flush()
            os.fsync(reserve.fileno())

    def free(self) -> bool:
        """Give the space to whoever needs it; tells whether there was any to give."""
        try:
            self._file.unlink()
        except FileNotFoundError:
            return False
        return True
