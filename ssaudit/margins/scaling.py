"""Diagonal scalings that make a complex matrix as small as they can: a bound of μ."""

import numpy as np

from ssaudit.margins.balance import balance_states
from ssaudit.margins.state_space import Bool, Complex, Real
from ssaudit.modes.poles import isolate

# log of the largest ratio of two scales that is tried on either side of the balanced ones.
LOG_REACH = 12.0
GOLDEN = (np.sqrt(5) - 1) / 2
# 0.618^56 of 24 is 5e-11, and the largest singular value is flat, or a kink, at its minimum.
GOLDEN_STEPS = 56
ROUGH_STEPS = 12
# Powers p of the smooth stand-in tr((M* M)^p)^(1/2p), each minimised from the one before it.
POWERS = (2.0, 16.0, 128.0, 1024.0)
NEWTON_STEPS = 4
DIFFERENCE = 1e-5


def norm_of_scaled(M: Complex, logs: Real) -> Real:
    """Largest singular value of each diag(e^x) M diag(e^-x).

    Parameters
    ----------
    M : (count, m, m) complex
    logs : (count, m) float
        The x.

    Returns
    -------
    (count,) float
        NaN where M is not finite.

    Examples
    --------
    >>> norm_of_scaled(np.array([[[0, 4.0], [1.0, 0]]]) + 0j, np.log([[1.0, 2.0]])).round(9)
    array([2.])
    """
    if M.shape[-1] == 1:
        return np.abs(M[:, 0, 0])
    scaled = M * np.exp(logs[:, :, None] - logs[:, None, :])
    (sigma,), _ = isolate(lambda stack: (np.linalg.svd(stack, compute_uv=False),), scaled)
    return np.asarray(sigma[:, 0])


def balance_logs(M: Complex) -> Real:
    """Scalings that make rows and columns equal in size: cheap, and seldom far from the best.

    Parameters
    ----------
    M : (count, m, m) complex

    Returns
    -------
    (count, m) float
        Logarithms x of the scales, as in `norm_of_scaled`.

    References
    ----------
    Osborne, J. ACM 7(4), 1960; as a bound of μ: Safonov, IEE Proc. D 129, 1982.

    Examples
    --------
    >>> x = balance_logs(np.array([[[0, 4.0], [1.0, 0]]]) + 0j)
    >>> round(float(np.exp(x[0, 1] - x[0, 0])), 9)
    2.0
    """
    logs = -np.log(balance_states(np.abs(M)))
    return np.asarray(logs - logs[:, :1])


def smallest_scaling(M: Complex, floor: Real) -> tuple[Real, Real]:
    """Smallest ‖diag(e^x) M diag(e^-x)‖ and its x: an upper bound of μ for diagonal changes.

    The bound equals μ for up to three channels. The minimum is found to about 1e-9 for two
    channels and 1e-3 for more; any x gives a guaranteed bound.

    Parameters
    ----------
    M : (count, m, m) complex
    floor : (count,) float
        Where the value falls below it, a rough minimum is enough.

    Returns
    -------
    value : (count,) float
    logs : (count, m) float

    References
    ----------
    Doyle, IEE Proc. D 129(6), 1982; Sezginer and Overton, IEEE Trans. Automatic Control 35,
    1990 (the norm is convex in x).

    Examples
    --------
    >>> value, _ = smallest_scaling(np.array([[[0, 4.0], [1.0, 0]]]) + 0j, np.zeros(1))
    >>> value.round(9)
    array([2.])
    """
    logs = balance_logs(M)
    value = norm_of_scaled(M, logs)
    if M.shape[-1] == 1:
        return value, logs
    search = _search_line if M.shape[-1] == 2 else _search_newton
    for rough in (True, False):
        left = np.nonzero(value > floor)[0]
        if len(left):
            found, found_logs = search(M[left], logs[left], rough)
            better = found < value[left]
            value[left[better]], logs[left[better]] = found[better], found_logs[better]
    return value, logs


def _search_line(M: Complex, logs: Real, rough: bool) -> tuple[Real, Real]:
    """Golden-section search over the one ratio of two channels."""

    def value_at(x: Real) -> Real:
        return norm_of_scaled(M, np.stack([np.zeros_like(x), x], axis=1))

    low, high = logs[:, 1] - LOG_REACH, logs[:, 1] + LOG_REACH
    x = np.stack([high - GOLDEN * (high - low), low + GOLDEN * (high - low)])
    value = np.stack([value_at(x[0]), value_at(x[1])])
    for _ in range(ROUGH_STEPS if rough else GOLDEN_STEPS):
        left = value[0] <= value[1]
        low, high = np.where(left, low, x[0]), np.where(left, x[1], high)
        fresh = np.where(left, high - GOLDEN * (high - low), low + GOLDEN * (high - low))
        fresh_value = value_at(fresh)
        x = np.where(left, [fresh, x[0]], [x[1], fresh])
        value = np.where(left, [fresh_value, value[0]], [value[1], fresh_value])
    first = value[0] <= value[1]
    best = np.where(first, x[0], x[1])
    return np.where(first, value[0], value[1]), np.stack([np.zeros_like(best), best], axis=1)


def _search_newton(M: Complex, logs: Real, rough: bool) -> tuple[Real, Real]:
    """Damped Newton steps on smooth stand-ins of the norm, each closer to it."""
    best, best_logs = norm_of_scaled(M, logs), logs.copy()
    x = logs.copy()
    for power in POWERS[:1] if rough else POWERS:
        damping = np.full(len(M), 1e-3)
        value, slope = _smooth_norm(M, x, power)
        for _ in range(NEWTON_STEPS):
            trial = x + _newton_step(M, x, slope, power, damping)
            trial_value, trial_slope = _smooth_norm(M, trial, power)
            better = trial_value < value
            x[better], value[better] = trial[better], trial_value[better]
            slope[better] = trial_slope[better]
            damping = np.where(better, damping / 10, damping * 10)
        found = norm_of_scaled(M, x)
        lower = found < best
        best[lower], best_logs[lower] = found[lower], x[lower]
    return best, best_logs


def _newton_step(M: Complex, x: Real, slope: Real, power: float, damping: Real) -> Real:
    """Step from the slope and its differences; the first scale stays at 1."""
    m = x.shape[1]
    hessian = np.empty((len(x), m - 1, m - 1))
    for i in range(1, m):
        beside = x.copy()
        beside[:, i] += DIFFERENCE
        hessian[:, :, i - 1] = (_smooth_norm(M, beside, power)[1] - slope)[:, 1:] / DIFFERENCE
    hessian = (hessian + hessian.swapaxes(1, 2)) / 2
    damped = hessian + damping[:, None, None] * np.eye(m - 1)
    step = np.zeros_like(x)
    (solved,), _ = isolate(lambda H, g: (np.linalg.solve(H, g),), damped, -slope[:, 1:, None])
    step[:, 1:] = np.clip(np.nan_to_num(solved[:, :, 0]), -2.0, 2.0)
    return step


def _smooth_norm(M: Complex, x: Real, power: float) -> tuple[Real, Real]:
    """Log of tr((M* M)^p)^(1/2p) for the scaled M, and its gradient."""
    scaled = M * np.exp(x[:, :, None] - x[:, None, :])
    (U, sigma, V), failed = isolate(lambda stack: tuple(np.linalg.svd(stack)), scaled)
    with np.errstate(divide="ignore", invalid="ignore"):
        relative = (sigma / sigma[:, :1]) ** (2 * power)
        value = np.log(sigma[:, 0]) + np.log(relative.sum(axis=1)) / (2 * power)
    weight = relative / relative.sum(axis=1, keepdims=True)
    moved = np.abs(U) ** 2 - np.abs(V.swapaxes(1, 2)) ** 2
    slope = np.einsum("cik,ck->ci", moved, weight)
    return _set_apart(value, failed), np.nan_to_num(slope)


def _set_apart(value: Real, failed: Bool) -> Real:
    """Infinite values where the decomposition failed, so that no step goes there."""
    return np.where(failed | np.isnan(value), np.inf, value)
