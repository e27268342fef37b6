"""Pieces of the frequency axis: cut where something changes, and looked at in between."""

import numpy as np

from ssaudit.margins.state_space import Index, Real

# An endless piece that begins this many typical frequencies out is looked at in the limit.
FAR = 1e4
# A piece whose ends differ by more than this factor is halved by its logarithm.
WIDE = 4.0


def cut_pieces(owner: Index, low: Real, high: Real, cuts: Real) -> tuple[Index, Real, Real]:
    """Cut pieces of the frequency axis.

    Parameters
    ----------
    owner : (pieces,) int
        The point each piece belongs to.
    low, high : (pieces,) float
        Ends of the pieces [rad/s]; ``high`` may be inf.
    cuts : (pieces, any) float
        Where to cut each [rad/s]; those outside, and NaN, do nothing.

    Returns
    -------
    owner, low, high : (more,) int, float and float
        Of the parts, none of them empty.

    Examples
    --------
    >>> cut_pieces(np.array([0]), np.array([0.0]), np.array([4.0]), np.array([[3.0, 9.0]]))
    (array([0, 0]), array([0., 3.]), array([3., 4.]))
    """
    inside = np.clip(np.where(np.isnan(cuts), low[:, None], cuts), low[:, None], high[:, None])
    edges = np.concatenate([low[:, None], np.sort(inside, axis=1), high[:, None]], axis=1)
    piece, column = np.nonzero(edges[:, 1:] > edges[:, :-1])
    return owner[piece], edges[piece, column], edges[piece, column + 1]


def middle_of(low: Real, high: Real, scale: Real) -> Real:
    """Pick a frequency inside each piece: its middle, or beyond ``low`` where it is endless.

    Parameters
    ----------
    low, high : (pieces,) float
        Ends [rad/s]; ``high`` may be inf.
    scale : (pieces,) float
        Typical frequency [rad/s], taken where ``low`` is 0 and ``high`` inf.

    Returns
    -------
    (pieces,) float
        [rad/s]; inf where an endless piece begins far out.

    Examples
    --------
    >>> middle_of(np.array([0.0, 1.0, 0.0]), np.array([2.0, np.inf, np.inf]), np.full(3, 5.0))
    array([1., 2., 5.])
    """
    endless = np.where(low > 0, 2 * low, scale)
    endless = np.where(low > FAR * scale, np.inf, endless)
    with np.errstate(over="ignore", invalid="ignore"):
        halfway = low + (high - low) / 2
        # Over decades the middle is that of the logarithms, or the typical frequency.
        wide = np.where(low > 0, np.sqrt(low) * np.sqrt(high), scale)
        finite = np.where(high > WIDE * np.where(low > 0, low, scale), wide, halfway)
    return np.where(np.isinf(high), endless, finite)
