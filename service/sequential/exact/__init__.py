"""Exact operating characteristics and sample numbers: recursions and quadrature over the region."""
