"""
Which next measurement brings Student's t to a limit.

Quantity: the values u of the next measurement, seen from the average of its sample, for which t will then be at or
above a limit.
Method: with the next measurement t is shift * (lever + u)/sqrt(room + u**2), up to a positive factor: both the average
and the squares about it are known functions of u. Squared, that is a quadratic in u, whose roots with the right sign
end the intervals that are asked for.
Accuracy: that of the average and of the squares about it.
Cost: a few operations.
Source: the recurrences of the mean and of the sum of squares, Welford (1962), Technometrics 4, 419-420.
"""

import math
from dataclasses import dataclass
from itertools import pairwise

# Ends of an interval may be infinite.
Interval = tuple[float, float]


@dataclass(frozen=True)
class Next:
    """
    The t that the next measurement makes, as a function of its distance u from the average of its sample.

    t = (lever + u)/sqrt(spread * (room + u**2)), or where u makes no spread, (lever + u)/sqrt(spread * room).

    Attributes:
        spreads: Whether u adds to the squares about the average; not where it is the first of its sample.
    """

    lever: float
    room: float
    spread: float
    spreads: bool = True


def after_one_sample(count: float, mean: float, squares: float) -> Next:
    """
    Args:
        count: At least 1.
        mean: Of the differences from the reference.
        squares: About the mean.
    """
    return Next((count + 1.0) * mean, (count + 1.0) * squares / count, 1.0)


def after_two_samples(counts: tuple[float, float], difference: float, squares: float) -> Next:
    """
    For a measurement in the second of two samples, the first one's average being taken from its.

    Args:
        counts: Of the first sample, at least 1, and of the second; together at least 2.
        difference: Of the averages; with nothing in the second sample its average counts as 0.
        squares: About both averages, summed.
    """
    other, own = counts
    after = own + 1.0
    size, freedom = other * after / (other + after), other + after - 2.0
    if own == 0.0:
        return Next(difference, squares, 1.0 / (size * freedom), spreads=False)
    return Next(after * difference, after * squares / own, own * after / (size * freedom))


def reaching(next_: Next, limit: float) -> tuple[Interval, ...]:
    """
    The u for which t is at or above the limit: none, one or two intervals, in order.

    Without room t is not defined at u = 0, whatever they say.
    """
    if math.isinf(limit):
        return ((-math.inf, math.inf),) if limit < 0.0 else ()
    if not next_.spreads:
        # Without room all are equal, and t is not defined whatever comes.
        return ((limit * math.sqrt(next_.spread * next_.room) - next_.lever, math.inf),) if next_.room > 0.0 else ()
    if limit == 0.0:
        return ((-next_.lever, math.inf),)
    # (lever + u) >= limit * sqrt(spread * (room + u**2)).
    gain = limit * limit * next_.spread
    ends = _roots(1.0 - gain, next_.lever, next_.lever**2 - gain * next_.room)
    # Only where both sides have one sign the squares tell.
    sign = 1.0 if limit >= 0.0 else -1.0
    inside = [u for u in ends if sign * (next_.lever + u) >= 0.0]
    if next_.room == 0.0:
        # There t may jump from one side of the limit to the other.
        inside = sorted({*inside, 0.0})
    cuts = [-math.inf, *inside, math.inf]
    return _joined([pair for pair in pairwise(cuts) if _holds(next_, limit, *pair)])


def common(one: tuple[Interval, ...], other: tuple[Interval, ...]) -> tuple[Interval, ...]:
    """What lies in both."""
    shared = ((max(a, c), min(b, d)) for a, b in one for c, d in other)
    return tuple(sorted((low, high) for low, high in shared if low < high))


def mirrored(intervals: tuple[Interval, ...]) -> tuple[Interval, ...]:
    """Of the same u with the other sign."""
    return tuple((-high, -low) for low, high in reversed(intervals))


def _joined(intervals: list[Interval]) -> tuple[Interval, ...]:
    """The same without common ends."""
    joined: list[Interval] = []
    for low, high in intervals:
        if joined and joined[-1][1] == low:
            joined[-1] = (joined[-1][0], high)
        else:
            joined.append((low, high))
    return tuple(joined)


def _roots(a: float, half_b: float, c: float) -> list[float]:
    """The real roots of a*u**2 + 2*half_b*u + c, in order, without cancellation."""
    if a == 0.0:
        return [-c / (2.0 * half_b)] if half_b != 0.0 else []
    under = half_b * half_b - a * c
    if under <= 0.0:
        return []
    far = -(half_b + math.copysign(math.sqrt(under), half_b))
    return sorted((far / a, c / far)) if far != 0.0 else [0.0]


def _holds(next_: Next, limit: float, low: float, high: float) -> bool:
    """Whether the limit is reached inside an interval, which it is everywhere or nowhere."""
    if math.isinf(low) and math.isinf(high):
        # Anywhere but at the point where t jumps.
        inside = 1.0 + abs(next_.lever) + math.sqrt(next_.room)
    elif math.isinf(low):
        inside = high - 1.0 - abs(high)
    elif math.isinf(high):
        inside = low + 1.0 + abs(low)
    else:
        inside = 0.5 * (low + high)
    squares = next_.spread * (next_.room + inside * inside)
    return squares > 0.0 and next_.lever + inside >= limit * math.sqrt(squares)
