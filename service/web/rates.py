"""Limits of requests per key, kept in this process's memory."""

import math
import time

from limits import RateLimitItemPerMinute
from limits.storage import MemoryStorage
from limits.strategies import SlidingWindowCounterRateLimiter


class Rates:
    """At most `per_minute` requests of one caller in any minute; 0 sets no limit."""

    def __init__(self, per_minute: int) -> None:
        self.per_minute = per_minute
        self._limiter = SlidingWindowCounterRateLimiter(MemoryStorage())
        self._item = RateLimitItemPerMinute(max(per_minute, 1))

    def take(self, name: str) -> int:
        """Count one request of this caller: 0 if it may go on, else seconds to wait."""
        if not self.per_minute or self._limiter.hit(self._item, name):
            return 0
        reset = self._limiter.get_window_stats(self._item, name).reset_time
        return max(1, math.ceil(reset - time.time()))
