"""Sizes of complex matrices, plain or scaled channel by channel, and what bounds them."""

from typing import Protocol

import numpy as np

from ssaudit.margins.scaling import balance_logs, norm_of_scaled, smallest_scaling
from ssaudit.margins.state_space import Complex, Real
from ssaudit.modes.poles import isolate


class Norm(Protocol):
    """What a peak search needs to know of the size of a response."""

    @property
    def tunable(self) -> bool:
        """Whether there are multipliers at all."""

    def bound(self, response: Complex) -> Real:
        """Cheap upper bounds of the sizes of responses (count, outputs, inputs)."""

    def tune(self, response: Complex, floor: Real) -> tuple[Real, Real]:
        """Sizes of responses, and the multipliers (count, k) they take.

        Where the size is below the floor any upper bound that shows it is enough.
        """

    def hold(self, response: Complex, multiplier: Real) -> Real:
        """Upper bounds of the sizes by given multipliers."""

    def weigh(self, left: Complex, right: Complex, multiplier: Real) -> Real:
        """Upper bounds of the sizes of rank-one terms, by given multipliers.

        Of left (count, outputs, n) times right (count, n, inputs), one by one: (count, n).
        """

    def multipliers(self, response: Complex) -> Real:
        """Multipliers that are cheap and fair, as logarithms of scales (count, channels or 1)."""


class PlainNorm:
    """Largest singular values.

    Examples
    --------
    >>> PlainNorm().hold(np.array([[[3.0, 4.0], [0.0, 0.0]]]) + 0j, np.zeros(0)).round(9)
    array([5.])
    """

    tunable = False

    def bound(self, response: Complex) -> Real:
        """Frobenius norms."""
        return np.asarray(np.linalg.norm(response, axis=(1, 2)))

    def tune(self, response: Complex, floor: Real) -> tuple[Real, Real]:
        """Sizes; there is no multiplier."""
        value = self.bound(response)
        high = np.nonzero(value > floor)[0]
        if min(response.shape[1:]) > 1 and len(high):
            value[high] = self.hold(response[high], np.zeros(0))
        return value, np.zeros((len(value), 0))

    def hold(self, response: Complex, multiplier: Real) -> Real:
        """Sizes."""
        (sigma,), _ = isolate(lambda M: (np.linalg.svd(M, compute_uv=False),), response)
        return np.asarray(sigma[:, 0])

    def weigh(self, left: Complex, right: Complex, multiplier: Real) -> Real:
        """Sizes of rank-one terms."""
        return np.asarray(np.linalg.norm(left, axis=1) * np.linalg.norm(right, axis=2))

    def multipliers(self, response: Complex) -> Real:
        """Logarithms of scales (count, channels): zero."""
        return np.zeros((len(response), 1))


class ScaledNorm:
    """Largest singular values with the channels scaled so as to make them small.

    Examples
    --------
    >>> size, _ = ScaledNorm().tune(np.array([[[0, 4.0], [1.0, 0]]]) + 0j, np.zeros(1))
    >>> size.round(9)
    array([2.])
    """

    tunable = True

    def bound(self, response: Complex) -> Real:
        """Sizes with balanced scales."""
        return norm_of_scaled(response, balance_logs(response))

    def tune(self, response: Complex, floor: Real) -> tuple[Real, Real]:
        """Sizes with the best scales, and their logarithms."""
        return smallest_scaling(response, floor)

    def hold(self, response: Complex, multiplier: Real) -> Real:
        """Sizes with given scales."""
        return norm_of_scaled(response, multiplier)

    def weigh(self, left: Complex, right: Complex, multiplier: Real) -> Real:
        """Sizes of rank-one terms with given scales."""
        scale = np.exp(multiplier)
        rows = np.linalg.norm(left * scale[:, :, np.newaxis], axis=1)
        return np.asarray(rows * np.linalg.norm(right / scale[:, np.newaxis, :], axis=2))

    def multipliers(self, response: Complex) -> Real:
        """Logarithms of balanced scales (count, channels)."""
        return balance_logs(response)
