"""Stacks of state matrices: checked, balanced, and told stable."""

import numpy as np
from numpy.typing import ArrayLike

from ssaudit.errors import BankError
from ssaudit.margins.balance import balance_states
from ssaudit.margins.state_space import Bool, Complex, Real
from ssaudit.modes.poles import find_poles


def read_models(A: ArrayLike) -> Real:
    """Check that state matrices are a stack of square ones.

    Parameters
    ----------
    A : (points, n, n) float

    Returns
    -------
    (points, n, n) float

    Raises
    ------
    ssaudit.errors.BankError
        When they are not.

    Examples
    --------
    >>> read_models([[[-1.0]]]).shape
    (1, 1, 1)
    """
    stack = np.asarray(A, dtype=float)
    if stack.ndim != 3 or stack.shape[1] != stack.shape[2] or stack.shape[1] == 0:
        raise BankError(
            f"state matrices have shape {stack.shape}", do="give (points, n, n) with n > 0"
        )
    return stack


def finite_points(*stacks: Real) -> Bool:
    """Points at which all entries of the stacks are finite.

    Parameters
    ----------
    *stacks : (points, rows, columns) float

    Returns
    -------
    (points,) bool

    Examples
    --------
    >>> finite_points(np.array([[[1.0]], [[np.nan]]]))
    array([ True, False])
    """
    return np.asarray(np.all([np.isfinite(s).all(axis=(1, 2)) for s in stacks], axis=0))


def find_stable(A: Real, dt: float) -> tuple[Complex, Bool]:
    """Poles of a stack, and which models are stable (on the boundary is not).

    Parameters
    ----------
    A : (points, n, n) float
    dt : float
        Sampling time [s]; 0 means continuous.

    Returns
    -------
    poles : (points, n) complex
        [1/s]; of sampled models z.
    stable : (points,) bool
        False where the poles could not be found.

    Examples
    --------
    >>> find_stable(np.array([[[-1.0]], [[0.0]]]), 0.0)[1]
    array([ True, False])
    """
    poles, _ = find_poles(A)
    inside = poles.real < 0 if dt == 0 else np.abs(poles) < 1
    return poles, np.asarray(inside.all(axis=1))


def scale_models(A: Real) -> Real:
    """Balance the states of each model.

    Parameters
    ----------
    A : (points, n, n) float

    Returns
    -------
    (points, n, n) float
        Similar matrices whose rows and columns are equal in size.

    Examples
    --------
    >>> scale_models(np.array([[[-1.0, 100.0], [0.01, -1.0]]])).round(9)
    array([[[-1.,  1.],
            [ 1., -1.]]])
    """
    scale = balance_states(A)
    return np.asarray(A * scale[:, None, :] / scale[:, :, None])
