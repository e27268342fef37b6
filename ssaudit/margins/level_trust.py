"""Whether a peak found by level sets can be trusted beside the rounding of its eigenproblem."""

import numpy as np

from ssaudit.margins.gain_curve import PEAK_RTOL, hamiltonian_of, scale_channels
from ssaudit.margins.modal_form import ModalForm
from ssaudit.margins.norms import Norm
from ssaudit.margins.peak_search import BACKWARD, Peak
from ssaudit.margins.responses import respond
from ssaudit.margins.state_space import Bool, Real, StateSpace
from ssaudit.modes.poles import find_poles

# What rounding of an eigenproblem may hide of the tolerance, so that no higher peak is unseen.
HIDDEN = 0.1 * PEAK_RTOL


def level_set_trusted(
    system: StateSpace,
    form: ModalForm | None,
    peak: Peak,
    norm: Norm,
    carried: Real | float = 0.0,
    *,
    sampled: bool = False,
) -> Bool:
    """Where rounding of the eigenproblem of a level set cannot have hidden a higher peak.

    The eigenvalues found are those of a Hamiltonian matrix that differs by its size times a
    rounding. At a frequency w that changes the singular value, relative to the level, by no more
    than that difference times the squares of (jw - A)⁻¹B and C(jw - A)⁻¹, and these are largest
    near the poles.

    Parameters
    ----------
    system : StateSpace
        Continuous systems.
    form : ModalForm or None
        Their sums over poles; without it the squares are found by solving.
    peak : Peak
        What the level sets gave.
    norm : Norm
        With scalings those at the peak stand for all.
    carried : (points,) float
        Size of the terms whose rounding A carries.
    sampled : bool
        Whether that is the A of sampled systems, before they were mapped.

    Returns
    -------
    (points,) bool
        Where at most a tenth of the tolerance of 1e-7 may be hidden.

    References
    ----------
    First-order perturbation of the eigenproblem of Boyd and Balakrishnan, Systems & Control Letters
    15, 1990; backward error of the QR iteration (from memory).

    Examples
    --------
    A lag beside a resonance of damping 1e-6 a billion times slower, at which its level set is lost.

    >>> from ssaudit.margins.norms import PlainNorm
    >>> A = np.array([[[-1.0, 0, 0], [0, -1e-15, 1e-9], [0, -1e-9, -1e-15]]])
    >>> B, C = np.array([[[1.0], [1e-15], [0.0]]]), np.ones((1, 1, 3))
    >>> both = StateSpace(A, B, C, np.zeros((1, 1, 1)))
    >>> one = StateSpace(A[:, :1, :1], B[:, :1], C[:, :, :1], np.zeros((1, 1, 1)))
    >>> peak = Peak(np.ones(1), np.zeros(1), np.ones(1, dtype=bool))
    >>> [bool(level_set_trusted(G, None, peak, PlainNorm())[0]) for G in (one, both)]
    [True, False]
    """
    if len(system) == 0:
        return np.zeros(0, dtype=bool)
    n = system.A.shape[-1]
    with np.errstate(all="ignore"):
        logs = norm.multipliers(respond(system, np.arange(len(system)), peak.frequency))
        G = scale_channels(system, logs)
        reach = _reach(G, sampled) if form is None else _reach_of_form(form, logs, sampled)
        drive, read, drive_given, read_given = (np.array(part) for part in reach)
        H = hamiltonian_of(G, peak.value * (1 + PEAK_RTOL))
        size = [np.linalg.norm(M, axis=(1, 2)) for M in (G.B, G.C, H)]
        # The blocks BB' and C'C share their size: what one gains by it the other loses.
        value = peak.value[:, np.newaxis]
        share = size[1][:, np.newaxis] / (value * size[0][:, np.newaxis])
        mixed = 2 * drive * read / value + share * drive**2 + read**2 / (share * value**2)
        given = np.broadcast_to(carried, len(G))[:, np.newaxis] * 2 * drive_given * read_given
        change = 2 * n * BACKWARD * (size[2][:, np.newaxis] * mixed + given / value)
    return np.asarray(peak.confirmed & (change <= HIDDEN).all(axis=1))


def _reach(G: StateSpace, sampled: bool) -> list[Real]:
    """Sizes (points, n) of (jw - A)⁻¹B and C(jw - A)⁻¹ at the frequency of each pole.

    Then the same, times what the given A changes that of the mapped system by.
    """
    points, n = G.A.shape[:2]
    w = np.abs(find_poles(G.A)[0].imag).ravel()
    owner = np.repeat(np.arange(points), n)
    identity = np.broadcast_to(np.eye(n), G.A.shape)
    through = [identity, (identity - G.A) / np.sqrt(2) if sampled else identity]
    parts = [
        part
        for M in through
        for part in (
            StateSpace(G.A, G.B, M, np.zeros(G.B.shape)),
            StateSpace(G.A, M, G.C, np.zeros(G.C.shape)),
        )
    ]
    sizes = (np.linalg.norm(respond(part, owner, w), axis=(1, 2)) for part in parts)
    return [size.reshape(points, n) for size in sizes]


def _reach_of_form(form: ModalForm, logs: Real, sampled: bool) -> list[Real]:
    """Upper bounds of the same from sums over poles, channels scaled."""
    p, scale = form.poles, np.exp(logs)
    right, left = form.right / scale[:, np.newaxis, :], form.left * scale[:, :, np.newaxis]
    apart = 1 / np.abs(1j * p.imag[:, :, np.newaxis] - p[:, np.newaxis, :])
    drive, read = np.linalg.norm(right, axis=2), form.condition * np.linalg.norm(left, axis=1)
    through = [np.ones(p.shape), np.abs(1 - p) / np.sqrt(2) if sampled else np.ones(p.shape)]
    return [np.einsum("pkl,pl->pk", apart, size * M) for M in through for size in (drive, read)]
