"""Absolute deadlines: a late scan is skipped and counted, never caught up."""

from math import floor


class ScanGrid:
    """The instants ``start_s + k * scan_s`` on our monotonic clock, each handed out at most once."""

    def __init__(self, start_s: float, scan_s: float) -> None:
        self._start_s = start_s
        self._scan_s = scan_s
        self._index = 0

    @property
    def due_s(self) -> float:
        """When the next scan is due."""
        return self._start_s + self._index * self._scan_s

    def take(self, now_s: float) -> int:
        """Take the scan that is due at ``now_s`` and return how many earlier ones were missed."""
        latest = floor((now_s - self._start_s) / self._scan_s)
        missed = max(latest - self._index, 0)
        self._index = max(latest, self._index) + 1
        return missed
