"""
Thresholds whose exact risks are the stated ones.

Quantity: `accept` and `reject` of a given shape of region, wall included, with P0(reject) = alpha and P1(accept) =
beta; where the risks move in steps, the smallest region that exceeds neither.
Method: drawing in the reject limit raises alpha and lowers beta, drawing in the accept limit does the reverse. So of
two regions that keep both risks the one with the inner limit of each keeps them too, and there is one smallest. It is
found from the inside: each limit in turn is let out just as far as its risk asks while the other stands, until nothing
moves.
Each turn is a bracketed search on the logarithm of the risk, which falls nearly linearly with the limit. Where the
risks are continuous the same is solved by a quasi-Newton method on logarithms first.
Accuracy: the limits to 1e-8 relative, or to the very region where risks move in steps.
Cost: some tens of exact computations; a few hundred where the risks move in steps.
Source: the requirement is that of Wald (1947), Sequential Analysis, section 3.3, taken exactly; the lattice argument is
Tarski's (1955), Pacific Journal of Mathematics 5, 285-309.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from service.sequential.boundaries import Thresholds, strict
from service.sequential.double import FloatArray

# A risk this much above the stated one, relative, is rounding.
SLACK = 1e-12
CLOSE = 1e-9
# Limits are looked for between these multiples of the strict ones. Further out the walls decide nearly everything.
INNERMOST, OUTERMOST = 1e-6, 4.0
# How near each turn comes to where a risk stops exceeding the stated one, relative to the strict limits. All but the
# last stay on the inner side, as coming from the inside asks.
RESOLUTIONS = (1e-2, 1e-4, 1e-6, 1e-8)
MOST_TURNS = 60


@dataclass(frozen=True)
class Risks:
    """The exact risks of a region."""

    alpha: float
    beta: float


class RisksNotMet(Exception):
    """No thresholds of this shape keep the stated risks; `least` are the risks of the widest region tried."""

    def __init__(self, least: Risks) -> None:
        super().__init__(f"no region keeps both risks; the widest attains {least.alpha:g} and {least.beta:g}")
        self.least = least


RisksAt = Callable[[Thresholds], Risks]


def matching(risks_at: RisksAt, stated: Risks) -> Thresholds:
    """
    Thresholds whose risks equal the stated ones, for risks that move continuously; where a risk is below the stated one
    whatever the limits, the smallest region.

    Args:
        risks_at: The exact risks of the region between two thresholds.
        stated: Both in (0, 1).

    Raises:
        RisksNotMet: None keep them, most often because the wall is too near.
    """
    limits = strict(stated.alpha, stated.beta)
    scale = np.log([-limits.accept, limits.reject])
    aim = np.log([stated.alpha, stated.beta])

    from scipy.optimize import root  # noqa: PLC0415 - nearly half of a command's start

    def misses(logs: FloatArray) -> FloatArray:
        within = np.clip(logs, scale + math.log(1e-3), scale + math.log(OUTERMOST))
        found = risks_at(_thresholds(within))
        return np.log(np.maximum([found.alpha, found.beta], 1e-300)) - aim

    def solved(start: FloatArray) -> Thresholds | None:
        found = root(misses, start, method="hybr", options={"xtol": 1e-13, "maxfev": 60})  # type: ignore[call-overload] # shapes
        is_inside = np.all(found.x <= scale + math.log(OUTERMOST))
        return _thresholds(found.x) if is_inside and np.all(np.abs(misses(found.x)) < CLOSE) else None

    # Overshoot lets limits be about half a nat nearer than the strict ones.
    near = solved(np.log(np.maximum(np.exp(scale) - 0.6, 0.3 * np.exp(scale))))
    if near is not None:
        return near
    found = smallest(risks_at, stated)
    polished = solved(np.log([-found.accept, found.reject]))
    # Where even the innermost limit keeps a risk, that risk stays below the stated one.
    return found if polished is None else polished


def smallest(risks_at: RisksAt, stated: Risks) -> Thresholds:
    """
    The thresholds of the smallest region whose risks exceed neither of the stated ones.

    Raises:
        RisksNotMet: Even far limits exceed a risk, because of the wall.
    """
    limits = strict(stated.alpha, stated.beta)
    accept, reject = INNERMOST * limits.accept, INNERMOST * limits.reject

    def alpha_ratio(limit: float) -> float:
        return risks_at(Thresholds(accept, limit)).alpha / stated.alpha

    def beta_ratio(limit: float) -> float:
        return risks_at(Thresholds(-limit, reject)).beta / stated.beta

    for turn in range(MOST_TURNS):
        before = (accept, reject)
        search = _Search(RESOLUTIONS[min(turn, len(RESOLUTIONS) - 1)], is_last=turn >= len(RESOLUTIONS) - 1)
        reject = search.let_out(alpha_ratio, reject, limits.reject)
        accept = -search.let_out(beta_ratio, -accept, -limits.accept)
        if before == (accept, reject) and search.is_last:
            return Thresholds(accept, reject)
        if max(reject / limits.reject, accept / limits.accept) >= OUTERMOST:
            break
    raise RisksNotMet(risks_at(Thresholds(accept, reject)))


def reject_alone(alpha_at: Callable[[float], float], stated: float, *, is_stepwise: bool) -> float:
    """
    The reject threshold of a region that accepts only at its wall: the one whose exact alpha equals the stated one, or,
    where alpha moves in steps, the smallest whose alpha does not exceed it.

    Args:
        alpha_at: The exact alpha between minus infinity and a threshold; falls as it rises.
        stated: In (0, 1).
        is_stepwise: Alpha moves in steps.

    Raises:
        RisksNotMet: Even a far threshold exceeds it.
    """
    from scipy.optimize import brentq  # noqa: PLC0415 - nearly half of a command's start

    scale = strict(stated, stated).reject
    if not is_stepwise:

        def miss(log: float) -> float:
            return math.log(max(alpha_at(math.exp(log)), 1e-300)) - math.log(stated)

        near, far = math.log(INNERMOST * scale), math.log(OUTERMOST * scale)
        if miss(near) > 0.0 > miss(far):
            return math.exp(brentq(miss, near, far, xtol=1e-14, rtol=1e-14))
    limit = INNERMOST * scale
    for turn, resolution in enumerate(RESOLUTIONS):
        search = _Search(resolution, is_last=turn == len(RESOLUTIONS) - 1)
        limit = search.let_out(lambda at: alpha_at(at) / stated, limit, scale)
    if limit >= OUTERMOST * scale:
        raise RisksNotMet(Risks(alpha_at(limit), math.nan))
    return limit


def _thresholds(logs: FloatArray) -> Thresholds:
    return Thresholds(-math.exp(logs[0]), math.exp(logs[1]))


@dataclass(frozen=True)
class _Search:
    """One turn's way of letting a limit out: how near it comes, and whether it ends on the outer side."""

    resolution: float
    is_last: bool

    def let_out(self, ratio_at: Callable[[float], float], limit: float, scale: float) -> float:
        """
        The smallest limit, not below the present one, at which the risk no longer exceeds the stated one.

        Returns:
            The outermost limit where none does.
        """

        def excess(at: float) -> float:
            return math.log(max(ratio_at(at), 1e-300)) - SLACK

        inner, inner_excess = limit, excess(limit)
        if inner_excess <= 0.0:
            return limit
        step = 0.3 * scale if limit < 0.01 * scale else 0.02 * scale
        outer = limit + step
        while (outer_excess := excess(outer)) > 0.0:
            step *= 3.0
            inner, inner_excess, outer = outer, outer_excess, min(outer + step, OUTERMOST * scale)
            if inner >= OUTERMOST * scale:
                return inner
        return self._between(excess, (inner, inner_excess), (outer, outer_excess), scale)

    def _between(
        self, excess: Callable[[float], float], inner: tuple[float, float], outer: tuple[float, float], scale: float
    ) -> float:
        """Regula falsi whose kept end is weakened (Illinois), with a bisection now and then for the steps."""
        (low, above), (high, below) = inner, outer
        turn = 0
        while high - low > self.resolution * scale:
            turn += 1
            share = 0.5 if turn % 3 == 0 else above / (above - below)
            middle = low + (high - low) * min(max(share, 1e-3), 1.0 - 1e-3)
            found = excess(middle)
            if found > 0.0:
                low, above, below = middle, found, 0.5 * below
            else:
                high, below, above = middle, found, 0.5 * above
        return high if self.is_last else low
