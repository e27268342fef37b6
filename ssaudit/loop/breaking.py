"""Loops broken at some channels, the others closed: what single- and multi-loop margins are of."""

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from ssaudit.loop.assembly import OpenLoop
from ssaudit.margins.state_space import StateSpace
from ssaudit.modes.poles import isolate

Floats = NDArray[np.float64]


def break_loop(
    opened: OpenLoop,
    K: Floats,
    sign: int,
    *,
    inputs: Sequence[int] = (),
    signals: Sequence[int] = (),
) -> StateSpace:
    """Break a loop at some commands and some fed-back signals, the others staying closed.

    Parameters
    ----------
    opened : OpenLoop
        Models from the commands to the signals, x' = A x + B v, y = C x + D v.
    K : (points or 1, inputs, signals) float
        Gains, u = σ K y.
    sign : int
        σ: -1 or +1.
    inputs, signals : sequence of int
        Channels to break: the command v of such an input is one input of the result and -u one of
        its outputs; likewise for the signal that the gains are fed, and -y.

    Returns
    -------
    StateSpace
        L with a channel for each broken one, inputs first; the closed loop is that of negative
        unity feedback around L. NaN where what stays closed is ill-posed.

    References
    ----------
    Loop transfer functions broken at one place with the rest closed: Skogestad & Postlethwaite,
    Multivariable Feedback Control, 2nd ed. (2005), ch. 3 (from memory).

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> plant = OpenLoop(-one, one, one, 0 * one, {}, ("x",), 0.0)
    >>> L = break_loop(plant, 3 * one, -1, inputs=[0])
    >>> L.A, L.C @ L.B
    (array([[[-1.]]]), array([[[3.]]]))
    """
    p, n, m = opened.B.shape
    k = opened.C.shape[1]
    F = sign * np.broadcast_to(K, (p, *K.shape[1:]))
    pick_u, pick_y = np.eye(m)[:, list(inputs)], np.eye(k)[:, list(signals)]
    stay_u, stay_y = np.eye(m) - pick_u @ pick_u.T, np.eye(k) - pick_y @ pick_y.T
    # [u; y] = M⁻¹ ([0; C] x + [[0, F pick_y], [D pick_u, 0]] [w_u; w_y])
    M = np.tile(np.eye(m + k), (p, 1, 1))
    M[:, :m, m:], M[:, m:, :m] = -F @ stay_y, -opened.D @ stay_u
    right = np.zeros((p, m + k, n + len(inputs) + len(signals)))
    right[:, m:, :n] = opened.C
    right[:, :m, n + len(inputs) :] = F @ pick_y
    right[:, m:, n : n + len(inputs)] = opened.D @ pick_u
    (solved,), _ = isolate(lambda a, b: (np.linalg.solve(a, b),), M, right)
    u, y = solved[:, :m], solved[:, m:]
    through = opened.B @ stay_u @ u
    A = opened.A + through[:, :, :n]
    B = through[:, :, n:]
    B[:, :, : len(inputs)] += opened.B @ pick_u
    shown = -np.concatenate([pick_u.T @ u, pick_y.T @ y], axis=1)
    return StateSpace(A, B, shown[:, :, :n], shown[:, :, n:])
