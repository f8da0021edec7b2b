"""What a check of a supposition answers."""

from dataclasses import dataclass

from scipy.special import ndtr


@dataclass(frozen=True)
class Finding:
    """
    A figure and how unusual it is when the supposition holds.

    Attributes:
        figure: What was found.
        expected: What is expected when the supposition holds; None where no single number is.
        p_value: Two-sided: how often a figure at least as far out is seen when the supposition holds.
    """

    figure: float
    expected: float | None
    p_value: float


@dataclass(frozen=True)
class Lacking:
    """Why a check could not be made, as the end of "Not made: ..."."""

    reason: str


def two_sided(lower_tail: float, upper_tail: float) -> float:
    """Twice the smaller tail, both counting the figure itself, so that it errs to the safe side."""
    return min(1.0, 2.0 * min(lower_tail, upper_tail))


def normal_p_value(z: float) -> float:
    """Two-sided, from a standard normal figure."""
    return min(1.0, 2.0 * float(ndtr(-abs(z))))


def too_few(least: int, noun: str, found: int) -> Lacking:
    """The reason that most often stands in the way; `noun` in the plural."""
    return Lacking(f"needs at least {least} {noun}, and there are {found}")
