"""When a controller may be called again.  Pure: the clock is an argument."""

LONGEST_FACTOR = 8
"""The gap never grows beyond this many times its first length."""


class BackOff:
    """The gap between two attempts to connect, in seconds from the start of one to the start of the next.

    It doubles with every attempt that no answered request follows, and is short again after an answer.
    """

    def __init__(self, gap_s: float) -> None:
        self._gap_s = gap_s
        self._factor = 1
        self._not_before_s: float | None = None

    def wait_s(self, now_s: float) -> float:
        """How long to wait before the next attempt; 0 when it may begin."""
        return 0.0 if self._not_before_s is None else max(0.0, self._not_before_s - now_s)

    def attempted(self, now_s: float) -> None:
        """An attempt begins now."""
        self._not_before_s = now_s + self._gap_s * self._factor
        self._factor = min(2 * self._factor, LONGEST_FACTOR)

    def answered(self) -> None:
        """The controller answered a request."""
        self._factor = 1
