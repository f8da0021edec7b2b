"""
Curved regions of normal measurements as seen from H0's line.

Quantity: the same region for totals less progress times H0's mean.
Method: the evidence depends on the mean only through its distance from H0's.
Accuracy: limits keep their digits however far from zero the means are.
Cost: a few operations.
Source: none needed: a change of the origin.
"""

from dataclasses import replace

import numpy as np

from service.sequential import likelihood
from service.sequential.curved import CurvedRegion
from service.sequential.evidence import Evidence
from service.sequential.generalised import OneSided, TwoSided
from service.sequential.mixture import NormalMixture


def line_of_h0(region: CurvedRegion) -> float:
    """The rise of H0's line with each measurement."""
    return float(region.evidence.expected(np.ones(1))[0])


def seen_from_h0(region: CurvedRegion, sigma: float) -> CurvedRegion:
    """The same region as seen from H0's line: its limits keep their digits however far from zero the mean is."""
    evidence: Evidence = region.evidence
    if isinstance(evidence, OneSided):
        apart = evidence.edge1 - evidence.edge0
        ratio = None if evidence.ratio is None else likelihood.normal(0.0, apart, sigma)
        evidence = replace(evidence, edge0=0.0, edge1=apart, ratio=ratio)
    elif isinstance(evidence, TwoSided):
        evidence = replace(evidence, edge0=0.0)
    elif isinstance(evidence, NormalMixture):
        evidence = replace(evidence, edge=0.0)
    return replace(region, evidence=evidence)
