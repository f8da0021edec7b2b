"""From numbers to places, and the numbers worth a mark on an axis."""

import math
from dataclasses import dataclass

# Steps between marks that people read easily, times a power of ten.
STEPS = (1.0, 2.0, 2.5, 5.0, 10.0)


@dataclass(frozen=True)
class Scale:
    """A straight scale: `low` lies at `begin`, `high` at `end`, both in pixels."""

    low: float
    high: float
    begin: float
    end: float

    def __call__(self, value: float) -> float:
        """Where a number lies; beyond the ends it stays at them."""
        share = (value - self.low) / (self.high - self.low)
        return self.begin + min(1.0, max(0.0, share)) * (self.end - self.begin)


def ticks(low: float, high: float, most: int, *, is_whole: bool = False) -> list[float]:
    """At most so many evenly spaced round numbers from `low` to `high`; whole ones where only those mean something."""
    if not high > low:
        return [low]
    rough = (high - low) / most
    power = 10.0 ** math.floor(math.log10(rough))
    step = next(power * factor for factor in STEPS if power * factor >= rough * (1.0 - 1e-9))
    if is_whole:
        step = max(1.0, math.ceil(step))
    first = math.ceil(low / step - 1e-9)
    last = math.floor(high / step + 1e-9)
    return [i * step for i in range(first, last + 1)]


def tick_words(values: list[float]) -> list[str]:
    """The marks in words, each with the digits that their distance needs."""
    if len(values) < 2:
        return [f"{value:g}".replace("-", "−") for value in values]
    step = values[1] - values[0]
    decimals = max(0, -math.floor(math.log10(step) + 1e-9) + (1 if _needs_one_more(step) else 0))
    return [f"{value + 0.0:,.{decimals}f}".replace(",", "\u2009").replace("-", "−") for value in values]


def _needs_one_more(step: float) -> bool:
    """True for a step such as 25 or 2.5."""
    mantissa = step / 10.0 ** math.floor(math.log10(step) + 1e-9)
    return abs(mantissa - round(mantissa)) > 1e-6
