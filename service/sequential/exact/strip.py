"""
What the methods for normal measurements share: the strip between two parallel lines, its points, its figures.

Quantity: nodes and weights of Gauss-Legendre quadrature between the limits as seen from the middle line, in standard
deviations, and the normal density.
Accuracy: rounding.
Source: Atkinson, The Numerical Solution of Integral Equations of the Second Kind, chapter 4.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.special import roots_legendre

from service.sequential.double import FloatArray


@dataclass(frozen=True)
class Strip:
    """The two limits as seen from the middle line, in standard deviations."""

    low: float
    high: float


@dataclass(frozen=True)
class Figures:
    """Arrays of shape (points,); `quantiles` computes those of shape (points, 4) when they are asked for."""

    below: FloatArray
    above: FloatArray
    mean: FloatArray
    second: FloatArray
    quantiles: Callable[[], FloatArray]


def nodes_between(strip: Strip, nodes: int) -> tuple[FloatArray, FloatArray]:
    """Gauss-Legendre nodes and weights between the limits; arrays of shape (nodes,)."""
    x, weights = _legendre(nodes)
    half = (strip.high - strip.low) / 2.0
    return strip.low + half * (x + 1.0), half * weights


def density(z: FloatArray) -> FloatArray:
    """The standard normal density; same shape as given."""
    values: FloatArray = np.exp(-0.5 * z * z) / math.sqrt(2.0 * math.pi)
    return values


@lru_cache(maxsize=256)
def _legendre(nodes: int) -> tuple[FloatArray, FloatArray]:
    x, weights = roots_legendre(nodes)
    return x, weights
