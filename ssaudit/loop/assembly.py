"""The open loop from the controller's commands to what it is fed: plant, parts, sampling."""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ssaudit.errors import LoopError
from ssaudit.loop.parts import Path

Floats = NDArray[np.float64]
EPS = float(np.finfo(float).eps)
# Units of roundoff per entry that a matrix exponential by scaling and squaring may lose, against
# the exponential of the entries' sizes (Higham, Functions of Matrices (2008), §10.3, from memory).
EXPONENTIAL_ROUNDOFFS = 100.0


# A computer seldom takes longer than this to answer; more samples are a slip.
MOST_LATE = 100


@dataclass(frozen=True)
class Sampling:
    """How a computer closes the loop of continuous models: commands held between samples.

    Parameters
    ----------
    dt : float
        Sampling time [s], positive.
    late : int
        Samples from reading the signals to giving the command.
    """

    dt: float
    late: int = 0

    def __post_init__(self) -> None:
        if not 0 < self.dt < np.inf:
            raise LoopError(f"the sampling time is {self.dt:g} s, not positive")
        if not 0 <= self.late <= MOST_LATE:
            raise LoopError(f"late is {self.late} samples, not 0 to {MOST_LATE}")


@dataclass(frozen=True, eq=False)
class OpenLoop:
    """Models between the controller's commands and the signals that it is fed, at some points.

    Attributes
    ----------
    A, B, C, D : (points, …) float
        State-space models.
    errors : dict of (points, …) float
        How far the entries of "A", "B", "C", "D" may be off; a matrix that is exact is absent.
    states : tuple of str
        Names of the states: the plant's, then those of the parts.
    dt : float
        Sampling time [s]; 0 when continuous.
    """

    A: Floats
    B: Floats
    C: Floats
    D: Floats
    errors: Mapping[str, Floats]
    states: tuple[str, ...]
    dt: float

    def at(self, rows: NDArray[np.int64]) -> "OpenLoop":
        """Return the models of some points."""
        errors = {name: error[rows] for name, error in self.errors.items()}
        matrices = (self.A[rows], self.B[rows], self.C[rows], self.D[rows])
        return OpenLoop(*matrices, errors, self.states, self.dt)


def insert_parts(plant: OpenLoop, at_inputs: Path, at_signals: Path) -> OpenLoop:
    """Put parts before the inputs and behind the signals of models.

    Parameters
    ----------
    plant : OpenLoop
        Models from inputs to signals.
    at_inputs, at_signals : Path
        The parts on either side.

    Returns
    -------
    OpenLoop
        From commands to what the controller is fed. States: the plant's, those at the inputs, those
        at the signals. Errors of the products are carried along entry by entry.

    Examples
    --------
    >>> from ssaudit.loop.parts import chain, first_order
    >>> one = np.ones((1, 1, 1))
    >>> plant = OpenLoop(-one, one, one, 0 * one, {}, ("x",), 0.0)
    >>> path = chain([first_order(0.5).at("lag", input="u")], ["u"], "input")
    >>> insert_parts(plant, path, chain([], ["y"], "signal")).A
    array([[[-1.,  1.],
            [ 0., -2.]]])
    """
    p, n = plant.A.shape[:2]
    i, o = at_inputs, at_signals
    k, m = len(i.A), len(o.A)

    def stack(
        A: Floats, B: Floats, C: Floats, D: Floats, own: bool
    ) -> tuple[Floats, Floats, Floats, Floats]:
        """Assemble the models; for errors the parts' own matrices stand as sizes, not as blocks."""
        Bi, Ci, Di = (M if own else np.abs(M) for M in (i.B, i.C, i.D))
        Bo, Co, Do = (M if own else np.abs(M) for M in (o.B, o.C, o.D))
        whole = np.zeros((p, n + k + m, n + k + m))
        whole[:, :n, :n], whole[:, :n, n : n + k] = A, B @ Ci
        whole[:, n + k :, :n], whole[:, n + k :, n : n + k] = Bo @ C, Bo @ D @ Ci
        commands = np.zeros((p, n + k + m, i.B.shape[1]))
        commands[:, :n], commands[:, n + k :] = B @ Di, Bo @ D @ Di
        fed = np.zeros((p, o.C.shape[0], n + k + m))
        fed[:, :, :n], fed[:, :, n : n + k] = Do @ C, Do @ D @ Ci
        if own:
            whole[:, n : n + k, n : n + k], whole[:, n + k :, n + k :] = i.A, o.A
            commands[:, n : n + k], fed[:, :, n + k :] = Bi, Co
        return whole, commands, fed, Do @ D @ Di

    matrices = stack(plant.A, plant.B, plant.C, plant.D, True)
    nothing = np.zeros_like(plant.A)
    sizes = stack(nothing, np.abs(plant.B), np.abs(plant.C), np.abs(plant.D), False)
    dA, dB, dC, dD = (plant.errors.get(x, np.zeros_like(getattr(plant, x))) for x in "ABCD")
    spread = stack(dA, dB, dC, dD, False)
    rounding = (i.B.shape[1] + o.C.shape[0] + k + m + 2) * EPS
    errors = {
        name: error + rounding * size
        for name, error, size in zip("ABCD", spread, sizes, strict=True)
    }
    return OpenLoop(*matrices, errors, (*plant.states, *i.states, *o.states), plant.dt)


def sample(plant: OpenLoop, dt: float, late: int) -> OpenLoop:
    """Sample continuous models whose commands are held between samples.

    Parameters
    ----------
    plant : OpenLoop
        Continuous models from commands to signals.
    dt : float
        Sampling time [s], positive.
    late : int
        Samples that the computer takes from reading the signals to giving the command.

    Returns
    -------
    OpenLoop
        Sampled models; each sample of delay adds one state a command, called "late …".

    References
    ----------
    Zero-order hold by one matrix exponential: Van Loan, Computing integrals involving the matrix
    exponential, IEEE Trans. AC-23(3), 1978. How far entries may be off: the integral formula for
    the difference of two exponentials, entry by entry with sizes (from memory).

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> sampled = sample(OpenLoop(-one, one, one, 0 * one, {}, ("x",), 0.0), 0.1, 0)
    >>> sampled.A.round(4), sampled.B.round(4)
    (array([[[0.9048]]]), array([[[0.0952]]]))
    """
    p, n, m = plant.B.shape
    joined = np.zeros((p, n + m, n + m))
    joined[:, :n, :n], joined[:, :n, n:] = plant.A * dt, plant.B * dt
    spread = np.zeros_like(joined)
    for name, block in (("A", np.s_[:, :n, :n]), ("B", np.s_[:, :n, n:])):
        if name in plant.errors:
            spread[block] = plant.errors[name] * dt
    exponential, error = _exponential(joined, spread + 2 * EPS * np.abs(joined))
    errors = dict(plant.errors)
    errors["A"], errors["B"] = error[:, :n, :n], error[:, :n, n:]
    sampled = OpenLoop(
        exponential[:, :n, :n], exponential[:, :n, n:], plant.C, plant.D, errors, plant.states, dt
    )
    for step in range(late):
        sampled = _one_sample_late(sampled, late - step)
    return sampled


def _exponential(M: Floats, error: Floats) -> tuple[Floats, Floats]:
    """Matrix exponentials, and how far their entries may be off."""
    from scipy.linalg import expm

    size = M.shape[1]
    with np.errstate(all="ignore"):
        # exp(M + δ) - exp(M) = ∫ exp(M(1-t)) δ exp((M + δ)t) dt, majorised entry by entry: the
        # upper right block of the exponential of [[|M|, δ], [0, |M| + δ]].
        double = np.zeros((len(M), 2 * size, 2 * size))
        double[:, :size, :size], double[:, size:, size:] = np.abs(M), np.abs(M) + error
        double[:, :size, size:] = error
        finite: NDArray[np.bool_] = np.asarray(np.isfinite(double).all(axis=(1, 2)))
        grown = np.asarray(expm(np.where(finite[:, None, None], double, 0.0)))
        exponential = np.asarray(expm(np.where(finite[:, None, None], M, 0.0)))
        off = grown[:, :size, size:] + EXPONENTIAL_ROUNDOFFS * EPS * grown[:, :size, :size]
    exponential[~finite], off[~finite] = np.nan, np.inf  # void points
    return exponential, np.where(np.isnan(off), np.inf, off)


def _one_sample_late(plant: OpenLoop, number: int) -> OpenLoop:
    """Delay the commands by one sample: states that hold them until the next one."""
    p, n, m = plant.B.shape
    A = np.zeros((p, n + m, n + m))
    A[:, :n, :n], A[:, :n, n:] = plant.A, plant.B
    B = np.zeros((p, n + m, m))
    B[:, n:] = np.eye(m)
    C = np.concatenate([plant.C, plant.D], axis=2)
    errors: dict[str, Floats] = {}
    if "A" in plant.errors or "B" in plant.errors:
        errors["A"] = np.zeros_like(A)
        for name, block in (("A", np.s_[:, :n, :n]), ("B", np.s_[:, :n, n:])):
            if name in plant.errors:
                errors["A"][block] = plant.errors[name]
    if "C" in plant.errors or "D" in plant.errors:
        wide = [plant.errors.get(x, np.zeros_like(getattr(plant, x))) for x in "CD"]
        errors["C"] = np.concatenate(wide, axis=2)
    states = (*plant.states, *(f"late {number}.{i + 1}" for i in range(m)))
    return OpenLoop(A, B, C, np.zeros_like(plant.D), errors, states, plant.dt)


def with_controller_states(plant: OpenLoop, states: tuple[str, ...]) -> OpenLoop:
    """Count the states of a dynamic compensator among those of the models.

    The compensator xc' = Ac xc + Bc y, u = Cc xc + Dc y is then one gain matrix from (y, xc) to
    (u, xc'), which closes the models like any other.

    Parameters
    ----------
    plant : OpenLoop
        Models from commands to signals.
    states : tuple of str
        Names of the compensator's states.

    Returns
    -------
    OpenLoop
        Inputs: the commands, then the derivatives (or next values) of the compensator's states;
        signals: those of the models, then the compensator's states.

    References
    ----------
    Dynamic output feedback as static feedback of the augmented model: Johnson & Athans, IEEE Trans.
    Automatic Control AC-15, 1970 (from memory).
    """
    k = len(states)
    if not k:
        return plant
    p = len(plant.A)

    def grown(M: Floats, corner: Floats) -> Floats:
        rows, columns = M.shape[1] + len(corner), M.shape[2] + corner.shape[1]
        whole = np.zeros((p, rows, columns))
        whole[:, : M.shape[1], : M.shape[2]] = M
        whole[:, M.shape[1] :, M.shape[2] :] = corner
        return whole

    one, none = np.eye(k), np.zeros((k, k))
    corners = {"A": none, "B": one, "C": one, "D": none}
    A, B, C, D = (grown(getattr(plant, name), corners[name]) for name in "ABCD")
    errors = {name: grown(error, none) for name, error in plant.errors.items()}
    return OpenLoop(A, B, C, D, errors, (*plant.states, *states), plant.dt)
