"""Largest gain of stable systems over all frequencies, plain or scaled channel by channel."""

import numpy as np

from ssaudit.margins.peak_search import Peak, find_peak, near_axis
from ssaudit.margins.responses import respond
from ssaudit.margins.scaling import balance_logs, norm_of_scaled, smallest_scaling
from ssaudit.margins.state_space import (
    Bool,
    Complex,
    Index,
    Real,
    StateSpace,
    invert,
    join,
    typical_frequency,
)
from ssaudit.modes.poles import find_poles

# Stated accuracy of peaks: no frequency exceeds the value by more than this, relative, unless
# rounding leaves no more digits and a rougher cover stands in (see `ssaudit.margins.cover`).
PEAK_RTOL = 1e-7
# Poles of a damping ratio below this are looked at on their flanks too, in half widths.
LIGHT = 0.05
FLANKS = np.array([-2.0, -0.7, 0.7, 2.0])
# Poles spread over more than this leave the slow ones of an eigenproblem to rounding: then each
# resonance is climbed on its own, by golden section (0.618^36 of its width is 3e-8).
WIDE_SPREAD = 1e4
CLIMB_STEPS = 36
GOLDEN = (np.sqrt(5) - 1) / 2


def find_gain_peak(system: StateSpace, poles: Complex, *, structured: bool) -> Peak:
    """H-infinity norm of continuous systems, or its smallest over scalings a frequency.

    Parameters
    ----------
    system : StateSpace
        Stable systems (not checked here).
    poles : (points, n) complex
        Their poles [1/s].
    structured : bool
        Whether to scale channel by channel, at each frequency as suits best: the bound of μ for
        changes that do not mix channels. Needs as many inputs as outputs.

    Returns
    -------
    Peak
        Value, frequency [rad/s] (it may be inf), and whether the search ended. No frequency exceeds
        the value by more than 1e-7, relative, as far as rounding of the eigenproblem hides none:
        `ssaudit.margins.level_trust` tells that.

    References
    ----------
    Boyd and Balakrishnan, Systems & Control Letters 15, 1990; Bruinsma and Steinbuch, Systems &
    Control Letters 14, 1990; scalings held over an interval as in Sreedhar, Van Dooren and Tits,
    1996, for the real radius.

    Examples
    --------
    >>> lag = StateSpace(*(np.full((1, 1, 1), x) for x in (-2.0, 1.0, 6.0, 0.0)))
    >>> find_gain_peak(lag, np.array([[-2.0 + 0j]]), structured=False).value.round(9)
    array([3.])
    """
    curve = GainCurve(system, structured and system.D.shape[-1] > 1)
    endless = np.full(len(system), np.inf)
    starts = _first_frequencies(curve, poles)
    return find_peak(curve, starts, endless, typical_frequency(poles), PEAK_RTOL)


def _first_frequencies(curve: "GainCurve", poles: Complex) -> Real:
    """Pick the best of zero, infinity and the resonances; without scalings both ends too."""
    ends = np.tile([0.0, np.inf], (len(poles), 1))
    upper = np.where(poles.imag >= 0, poles, np.nan)
    light = np.where(np.abs(upper.real) < LIGHT * upper.imag, upper, np.nan)
    flanks = light.imag[:, :, None] + light.real[:, :, None] * FLANKS
    tried = np.concatenate([np.abs(upper), flanks.reshape(len(poles), -1), ends], axis=1)
    owner, column = np.nonzero(~np.isnan(tried))
    value = np.full(tried.shape, -np.inf)
    w = tried[owner, column]
    value[owner, column] = np.nan_to_num(curve.hold(owner, w, curve.guess(owner, w)), nan=-np.inf)
    best = np.take_along_axis(tried, value.argmax(axis=1)[:, None], axis=1)
    sharp = _climb_resonances(curve, poles)
    fixed = sharp if curve.tunable else np.concatenate([sharp, ends], axis=1)
    return np.concatenate([best, fixed], axis=1)


def _climb_resonances(curve: "GainCurve", poles: Complex) -> Real:
    """Climb to the best frequency near any pole, where slow ones may be missed by eigenvalues."""
    size = np.abs(poles)
    wide = size.max(axis=1, initial=0.0) > WIDE_SPREAD * size.min(axis=1, initial=np.inf)
    owner, column = np.nonzero((poles.imag > 0) & wide[:, None])
    found = np.full((len(poles), 1), np.nan)
    if len(owner) == 0:
        return found
    centre, width = poles[owner, column].imag, np.abs(poles[owner, column].real)
    low, high = np.maximum(centre - 4 * width, 0.0), centre + 4 * width

    def value_at(w: Real) -> Real:
        return curve.hold(owner, w, curve.guess(owner, w))

    for _ in range(CLIMB_STEPS):
        left, right = high - GOLDEN * (high - low), low + GOLDEN * (high - low)
        rising = value_at(right) > value_at(left)
        low, high = np.where(rising, left, low), np.where(rising, high, right)
    w = (low + high) / 2
    order = np.lexsort((value_at(w), owner))
    last = order[np.nonzero(np.diff(owner[order], append=-1))[0]]
    found[owner[last], 0] = w[last]
    return found


class GainCurve:
    """Largest singular value of a frequency response, possibly with scaled channels.

    Parameters
    ----------
    system : StateSpace
        Continuous systems.
    tunable : bool
        Whether to scale channel by channel; then with as many inputs as outputs.

    Examples
    --------
    >>> lag = StateSpace(*(np.full((1, 1, 1), x) for x in (-2.0, 1.0, 6.0, 0.0)))
    >>> GainCurve(lag, False).hold(np.array([0]), np.zeros(1), np.zeros((1, 0)))
    array([3.])
    """

    def __init__(self, system: StateSpace, tunable: bool) -> None:
        self.system, self.tunable = system, tunable

    def guess(self, owner: Index, w: Real) -> Real:
        """Balanced scalings."""
        if not self.tunable:
            return np.zeros((len(owner), 0))
        return balance_logs(respond(self.system, owner, w))

    def tune(self, owner: Index, w: Real, floor: Real) -> tuple[Real, Real]:
        """Values with the best scalings."""
        if not self.tunable:
            nothing = self.guess(owner, w)
            return self.hold(owner, w, nothing), nothing
        return smallest_scaling(respond(self.system, owner, w), floor)

    def hold(self, owner: Index, w: Real, multiplier: Real) -> Real:
        """Values with given scalings."""
        response = respond(self.system, owner, w)
        if self.tunable or response.shape[1:] == (1, 1):
            return norm_of_scaled(response, multiplier)
        return norm_of_scaled(response, np.zeros(response.shape[:2]))

    def cross(self, owner: Index, multiplier: Real, level: Real) -> tuple[Real, Bool]:
        """Frequencies where a singular value equals the level: a Hamiltonian eigenproblem."""
        G = self.system[owner]
        if G.A.shape[-1] == 0:
            return np.full((len(owner), 1), np.nan), np.zeros(len(owner), dtype=bool)
        if self.tunable:
            G = scale_channels(G, multiplier)
        eigenvalues, _ = find_poles(hamiltonian_of(G, level))
        return near_axis(eigenvalues)


def hamiltonian_of(G: StateSpace, level: Real) -> Real:
    """Matrix with an eigenvalue jw wherever ``level`` is a singular value of G at w.

    Parameters
    ----------
    G : StateSpace
        Continuous systems.
    level : (points,) float
        Positive, and no singular value of D.

    Returns
    -------
    (points, 2n, 2n) float
        NaN where the level is a singular value of D.

    References
    ----------
    Boyd and Balakrishnan, Systems & Control Letters 15, 1990; Bruinsma and Steinbuch, Systems &
    Control Letters 14, 1990.

    Examples
    --------
    1/(s + 1) has the size 1/sqrt(5) at 2 rad/s.

    >>> one = np.ones((1, 1, 1))
    >>> H = hamiltonian_of(StateSpace(-one, one, one, 0 * one), np.array([1 / np.sqrt(5)]))
    >>> np.linalg.eigvals(H).imag.round(9)
    array([[ 2., -2.]])
    """
    # Dividing outputs by the level makes it 1, and both halves of the matrix alike in size.
    C, D = G.C / level[:, None, None], G.D / level[:, None, None]
    DT, CT = D.swapaxes(1, 2), C.swapaxes(1, 2)
    inner = invert(np.eye(D.shape[-1]) - DT @ D)
    A = G.A + G.B @ inner @ DT @ C
    BB = G.B @ inner @ G.B.swapaxes(1, 2)
    CC = CT @ (np.eye(D.shape[1]) + D @ inner @ DT) @ C
    # The product BB CC alone matters: share its size between both, where neither is zero.
    with np.errstate(over="ignore"):
        share = np.linalg.norm(CC, axis=(1, 2)) / np.linalg.norm(BB, axis=(1, 2)).clip(1e-300)
    share = np.sqrt(np.where((share > 0) & np.isfinite(share), share, 1.0))[:, None, None]
    return join(A, share * BB, -CC / share, -A.swapaxes(1, 2))


def scale_channels(G: StateSpace, logs: Real) -> StateSpace:
    """Scale the channels of systems: diag(e^x) G diag(e^-x).

    Parameters
    ----------
    G : StateSpace
        With as many inputs as outputs, or x the same for all.
    logs : (points, channels or 1) float
        The x.

    Returns
    -------
    StateSpace

    Examples
    --------
    >>> G = StateSpace(*(np.ones(shape) for shape in ((1, 1, 1), (1, 1, 2), (1, 2, 1), (1, 2, 2))))
    >>> scale_channels(G, np.log([[1.0, 2.0]])).D[0]
    array([[1. , 0.5],
           [2. , 1. ]])
    """
    row, column = np.exp(logs)[:, :, np.newaxis], np.exp(logs)[:, np.newaxis, :]
    return StateSpace(G.A, G.B / column, row * G.C, row * G.D / column)
