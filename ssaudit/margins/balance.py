"""Diagonal scalings of the states, so that odd units do not spoil or dominate the numbers."""

import numpy as np

from ssaudit.margins.state_space import Bool, Real, StateSpace

# Enough for the half steps to settle to well under a factor of 2 (rounded scalings).
ROUNDED_SWEEPS = 12
# Half steps shrink the error by about 2 a sweep: 60 of them reach working precision.
EXACT_SWEEPS = 60
# A step this small changes no scaled entry by more than rounding does.
SETTLED_STEP = 1e-14
# Scalings beyond 2^±200 would endanger squares in double precision.
LARGEST_EXPONENT = 200.0


def balance_loop(loop: StateSpace) -> StateSpace:
    """Rescale states by powers of two so that rows and columns of A, B, C are alike in size.

    Parameters
    ----------
    loop : StateSpace
        Any stack of systems; the response does not change, not even by rounding.

    Returns
    -------
    StateSpace

    References
    ----------
    Osborne, J. ACM 7(4), 1960; Parlett and Reinsch, Numerische Mathematik 13, 1969.

    Examples
    --------
    >>> A = np.array([[[-1.0, 1e6], [1e-6, -1.0]]])
    >>> B, C = np.array([[[1.0], [0.0]]]), np.array([[[1.0, 0.0]]])
    >>> bool(np.abs(balance_loop(StateSpace(A, B, C, np.zeros((1, 1, 1)))).A).max() < 2.0)
    True
    """
    drive = np.square(loop.B).sum(axis=2)
    read = np.square(loop.C).sum(axis=1)
    exponents = np.round(_find_exponents(loop.A, drive, read, ROUNDED_SWEEPS))
    scale = np.exp2(exponents)
    A = loop.A * scale[:, None, :] / scale[:, :, None]
    return StateSpace(A, loop.B / scale[:, :, None], loop.C * scale[:, None, :], loop.D)


def balance_states(A: Real, sweeps: int = EXACT_SWEEPS) -> Real:
    """Scalings of the states that make rows and columns of A equal in size.

    Unrounded, so that the balanced matrix is the same in whatever units and order the states
    come. A state that drives no other, or that no other drives, keeps its scale.

    Parameters
    ----------
    A : (points, n, n) float
        State matrices.
    sweeps : int
        Most half steps to take.

    Returns
    -------
    scale : (points, n) float
        ``A * scale[:, None, :] / scale[:, :, None]`` is balanced.

    References
    ----------
    Osborne, J. ACM 7(4), 1960 (all states at once with half steps, so that order is no matter).

    Examples
    --------
    >>> scale = balance_states(np.array([[[-1.0, 100.0], [0.01, -1.0]]]))
    >>> round(float(scale[0, 0] / scale[0, 1]), 9)
    100.0
    """
    nothing = np.zeros(A.shape[:2])
    return np.asarray(np.exp2(_find_exponents(A, nothing, nothing, sweeps)))


def resolvent_of(A: Real) -> StateSpace:
    """Write (sI - A)⁻¹ as a system with balanced states, not even rounded.

    Parameters
    ----------
    A : (points, n, n) float
        State matrices.

    Returns
    -------
    StateSpace
        With as many inputs and outputs as states.

    Examples
    --------
    >>> G = resolvent_of(np.array([[[-1.0, 64.0], [1.0, -1.0]]]))
    >>> G.A[0]
    array([[-1.,  4.],
           [16., -1.]])
    """
    nothing = np.zeros(A.shape[:2])
    scale = np.exp2(np.round(_find_exponents(A, nothing, nothing, ROUNDED_SWEEPS)))
    identity = np.eye(A.shape[-1])
    balanced = A * scale[:, None, :] / scale[:, :, None]
    B, C = identity / scale[:, :, None], identity * scale[:, None, :]
    return StateSpace(balanced, B, C, np.zeros(A.shape))


def _find_exponents(A: Real, drive: Real, read: Real, sweeps: int) -> Real:
    """Base-2 logarithms of the balancing scale of each state."""
    size = np.where(np.isfinite(A), np.square(A), 0.0)
    n = A.shape[-1]
    size[:, np.arange(n), np.arange(n)] = 0
    drive, read = np.nan_to_num(drive), np.nan_to_num(read)
    exponents = np.zeros(A.shape[:2])
    moving: Bool = np.ones((len(A), 1), dtype=bool)
    for _ in range(sweeps):
        scale = np.exp2(2 * exponents)
        column = (size / scale[:, :, None]).sum(axis=1) * scale + read * scale
        row = (size * scale[:, None, :]).sum(axis=2) / scale + drive / scale
        tied = (column > 0) & (row > 0)
        # Logarithms apart: their quotient may overflow.
        step = (np.log2(np.where(tied, row, 1.0)) - np.log2(np.where(tied, column, 1.0))) / 8
        # A point that has settled stands still, so that its stack mates do not matter to it.
        step = np.where(moving, step, 0.0)
        exponents = np.clip(exponents + step, -LARGEST_EXPONENT, LARGEST_EXPONENT)
        moving = np.asarray((np.abs(step) >= SETTLED_STEP).any(axis=1, keepdims=True))
        if not moving.any():
            break
    return exponents
