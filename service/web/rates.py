"""
Limits on how often a key may ask, as buckets of tokens.

A bucket holds `burst` tokens and is filled at `rate` a second; a request takes one. Buckets live in the memory of one
process: with several, a key may ask each of them so often. Only valid keys have one, so there are not many.
"""

import math
from dataclasses import dataclass


@dataclass(frozen=True)
class Bucket:
    """Tokens that were there at a moment, in seconds of a clock that never goes back."""

    tokens: float
    at: float


class Rates:
    """The buckets of this process."""

    def __init__(self, rate: float, burst: int) -> None:
        """
        Without a bucket at first.

        Args:
            rate: Requests a second of each key, in the long run; 0 for any number.
            burst: Requests that may come at once.
        """
        self._rate, self._burst = rate, burst
        self._buckets: dict[str, Bucket] = {}

    def seconds_to_wait(self, key: str, now: float) -> int:
        """Take a token of this key and return 0; where it has none, the whole seconds until there is one."""
        if self._rate == 0.0:
            return 0
        bucket = self._buckets.get(key, Bucket(self._burst, now))
        tokens = min(float(self._burst), bucket.tokens + (now - bucket.at) * self._rate)
        if tokens < 1.0:
            self._buckets[key] = Bucket(tokens, now)
            return math.ceil((1.0 - tokens) / self._rate)
        self._buckets[key] = Bucket(tokens - 1.0, now)
        return 0
