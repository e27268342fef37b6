"""Diagonal scalings that make a complex matrix as small as they can: a bound of μ."""

import numpy as np

from ssaudit.margins.balance import balance_states
from ssaudit.margins.state_space import Complex, Real
from ssaudit.modes.poles import isolate

# log of the largest ratio of two scales that is tried on either side of the balanced ones.
LOG_REACH = 12.0
GOLDEN = (np.sqrt(5) - 1) / 2
# 0.618^56 of 24 is 5e-11, and the largest singular value is flat, or a kink, at its minimum.
# A dozen steps tell what will fall below a floor.
LINE_STEPS = (12, 56)
# Powers p of the smooth stand-in tr((M* M)^p)^(1/2p), each minimised from the one before it.
POWERS = (2.0, 16.0, 128.0, 1024.0)
NEWTON_STEPS = 4
# Squared singular values closer than this, relative, count as equal in a divided difference.
EQUAL = 1e-5
# Half steps shrink the error by 2 a sweep: enough for a guess.
GUESS_SWEEPS = 6


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
    logs = -np.log(balance_states(np.abs(M), GUESS_SWEEPS))
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
    two = M.shape[-1] == 2
    begin = logs.copy()
    for effort in LINE_STEPS if two else POWERS:
        left = np.nonzero(value > floor)[0]
        if len(left) == 0:
            break
        search = _search_line if two else _search_newton
        found, found_logs, begin[left] = search(M[left], begin[left], effort)
        better = found < value[left]
        value[left[better]], logs[left[better]] = found[better], found_logs[better]
    return value, logs


def _search_line(M: Complex, logs: Real, steps: float) -> tuple[Real, Real, Real]:
    """Golden-section search over the one ratio of two channels; where to begin another."""

    def value_at(x: Real) -> Real:
        return norm_of_scaled(M, np.stack([np.zeros_like(x), x], axis=1))

    low, high = logs[:, 1] - LOG_REACH, logs[:, 1] + LOG_REACH
    x = np.stack([high - GOLDEN * (high - low), low + GOLDEN * (high - low)])
    value = np.stack([value_at(x[0]), value_at(x[1])])
    for _ in range(int(steps)):
        left = value[0] <= value[1]
        low, high = np.where(left, low, x[0]), np.where(left, x[1], high)
        fresh = np.where(left, high - GOLDEN * (high - low), low + GOLDEN * (high - low))
        fresh_value = value_at(fresh)
        x = np.where(left, [fresh, x[0]], [x[1], fresh])
        value = np.where(left, [fresh_value, value[0]], [value[1], fresh_value])
    first = value[0] <= value[1]
    best = np.where(first, x[0], x[1])
    return np.where(first, value[0], value[1]), np.stack([np.zeros_like(best), best], axis=1), logs


def _search_newton(M: Complex, logs: Real, power: float) -> tuple[Real, Real, Real]:
    """Damped Newton steps on a smooth stand-in of the norm; the first scale stays at 1.

    The third result is where the stand-in is smallest, a place to begin with a closer one.
    """
    x, damping = logs.copy(), np.full(len(M), 1e-3)
    value, norm, slope, bend = smooth_norm(M, x, power)
    best, best_x = norm, x.copy()
    for _ in range(NEWTON_STEPS):
        damped = bend[:, 1:, 1:] + damping[:, None, None] * np.eye(x.shape[1] - 1)
        (step,), _ = isolate(lambda H, g: (np.linalg.solve(H, g),), damped, -slope[:, 1:, None])
        trial = x.copy()
        trial[:, 1:] += np.clip(np.where(np.isnan(step), 0.0, step)[:, :, 0], -2.0, 2.0)
        found = smooth_norm(M, trial, power)
        lower = found[1] < best
        best, best_x = np.where(lower, found[1], best), np.where(lower[:, None], trial, best_x)
        better = found[0] < value
        x[better] = trial[better]
        for kept, new in zip((value, slope, bend), (found[0], *found[2:]), strict=True):
            kept[better] = new[better]
        damping = np.where(better, damping / 10, damping * 10)
    return best, best_x, x


def smooth_norm(M: Complex, x: Real, power: float) -> tuple[Real, Real, Real, Real]:
    """Log of tr((M* M)^p)^(1/2p) for the scaled M, its norm, and the log's two derivatives.

    Parameters
    ----------
    M : (count, m, m) complex
    x : (count, m) float
        Logarithms of the scales, as in `norm_of_scaled`.
    power : float
        The p; the larger, the nearer to the norm.

    Returns
    -------
    value : (count,) float
        The log; inf where M has no singular value decomposition.
    norm : (count,) float
    slope : (count, m) float
    bend : (count, m, m) float

    References
    ----------
    Derivatives of tr H^p by divided differences: Daleckii and Krein (from memory).

    Examples
    --------
    >>> M = np.array([[[0, 4.0], [1.0, 0]]]) + 0j
    >>> value, norm, slope, _ = smooth_norm(M, np.log([[1.0, 2.0]]), 2.0)  # sizes 2 and 2
    >>> np.exp(4 * value).round(9), norm.round(9), bool(np.abs(slope).max() < 1e-12)
    (array([32.]), array([2.]), True)
    """
    scaled = M * np.exp(x[:, :, None] - x[:, None, :])
    (U, sigma, V), failed = isolate(lambda stack: tuple(np.linalg.svd(stack)), scaled)
    with np.errstate(all="ignore"):
        relative = sigma / sigma[:, :1]
        total = (relative ** (2 * power)).sum(axis=1)
        value = np.log(sigma[:, 0]) + np.log(total) / (2 * power)
        slope, bend = _slope_and_bend(U, V.swapaxes(1, 2).conj(), relative, total, power)
    # Infinite values where the decomposition failed, so that no step goes there.
    failed |= ~np.isfinite(value)
    value, norm = np.where(failed, np.inf, value), np.where(failed, np.inf, sigma[:, 0])
    slope[failed], bend[failed] = 0.0, 0.0
    return value, norm, slope, bend


def _slope_and_bend(
    U: Complex, V: Complex, sigma: Real, total: Real, power: float
) -> tuple[Real, Real]:
    """Gradient and second derivatives from the singular vectors, the largest value being 1.

    With H = M* M for the scaled M, and a_k, b_k the k-th channel's part of V* V and U* U, the
    first derivatives of H are -a_k H - H a_k + 2 Σ b_k Σ in the basis V, and those of tr H^p
    follow by divided differences of p λ^(p - 1) (Daleckii and Krein; from memory).
    """
    count, m = sigma.shape
    square, pair = np.square(sigma), sigma[:, :, None] * sigma[:, None, :]
    first = power * square ** (power - 1)
    a = (V.conj()[:, :, :, None] * V[:, :, None, :]).reshape(count, m, m * m)
    b = (U.conj()[:, :, :, None] * U[:, :, None, :]).reshape(count, m, m * m)
    b_sized = b * pair.reshape(count, 1, -1)
    change = 2 * b_sized - a * (square[:, :, None] + square[:, None, :]).reshape(count, 1, -1)
    apart = square[:, :, None] - square[:, None, :]
    middle = (square[:, :, None] + square[:, None, :]) / 2
    equal = np.abs(apart) < EQUAL
    divided = (first[:, :, None] - first[:, None, :]) / np.where(equal, 1.0, apart)
    divided = np.where(equal, power * (power - 1) * middle ** (power - 2), divided)
    weighted = a * (first[:, :, None] * square[:, None, :]).reshape(count, 1, -1)
    crossed = a * np.repeat(first, m, axis=1)[:, None, :]
    mixed = _real_product(crossed, b_sized)
    bend = _real_product(change * divided.reshape(count, 1, -1), change)
    bend += 2 * _real_product(weighted, a) - 4 * (mixed + mixed.swapaxes(1, 2))
    own = np.abs(V) ** 2 + 2 * np.abs(U) ** 2
    diagonal = np.arange(m)
    bend[:, diagonal, diagonal] += 2 * np.einsum("cki,ci->ck", own, first * square)
    moved = np.abs(U) ** 2 - np.abs(V) ** 2
    slope = np.einsum("cki,ci->ck", moved, first * square) / (power * total[:, None])
    bend = bend / (2 * power * total[:, None, None])
    return slope, bend - 2 * power * slope[:, :, None] * slope[:, None, :]


def _real_product(X: Complex, Y: Complex) -> Real:
    """Real part of X times the conjugate transpose of Y."""
    return np.asarray(X.real @ Y.real.swapaxes(1, 2) + X.imag @ Y.imag.swapaxes(1, 2))
