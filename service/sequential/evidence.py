"""What a region is drawn from: evidence against H0 as a function of progress and total, whatever the statistic."""

from typing import Protocol

from service.sequential.double import Double, FloatArray


class Evidence(Protocol):
    """
    A log-likelihood ratio as a function of progress and sufficient statistic.

    For one progress it never falls as the total moves from what H0 leads to expect towards H1; for one total it never
    rises as progress goes on without it, where large totals speak for H1 (and the reverse where small ones do).
    """

    @property
    def is_two_sided(self) -> bool:
        """Totals on both sides of what H0 leads to expect speak for H1."""
        ...

    @property
    def is_upward(self) -> bool:
        """Large totals speak for H1; of no meaning where both sides do."""
        ...

    @property
    def is_test_martingale(self) -> bool:
        """
        Under H0 the mean of its exponential never exceeds one, at whatever moment it is looked at; then its inverse is
        a p-value at all times (Ville 1939).
        """
        ...

    def __hash__(self) -> int:
        """By value, for what is kept for an evidence once computed."""
        ...

    def log(self, progress: Double, total: Double) -> FloatArray:
        """The log-likelihood ratio in nats; same shape as given."""
        ...

    def expected(self, progress: FloatArray) -> FloatArray:
        """The total that H0 leads to expect at its edge; same shape as given."""
        ...

    def deviation(self, progress: FloatArray) -> FloatArray:
        """About one standard deviation of the total under H0, above 0; same shape as given. For searches only."""
        ...
