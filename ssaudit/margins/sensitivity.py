"""Peaks of the sensitivity S = (I + L)⁻¹ and of T = I - S, and H-infinity norms."""

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import ArrayLike

from ssaudit.margins.balance import balance_loop
from ssaudit.margins.gain_curve import PEAK_RTOL, _hamiltonian, find_gain_peak
from ssaudit.margins.peak_search import BACKWARD, Peak, PlainNorm, cover_left, cover_peak, fill_in
from ssaudit.margins.scaling import balance_logs, norm_of_scaled, smallest_scaling
from ssaudit.margins.stability_radius import find_stable, finite_points
from ssaudit.margins.state_space import (
    Bool,
    Complex,
    ModalForm,
    Real,
    StateSpace,
    read_loop,
    respond,
    sensitivity_of,
    to_continuous,
    to_modes,
    unwarp,
)
from ssaudit.modes.poles import find_poles

# Corrections of the eigenvectors that are tried where rounding hides a peak.
CORRECTIONS = 2
# What rounding of an eigenproblem may hide of the tolerance, so that no higher peak is unseen.
HIDDEN = 0.1 * PEAK_RTOL


@dataclass(frozen=True)
class SensitivityPeaks:
    """Peaks of S and T of each point.

    Attributes
    ----------
    sensitivity, complementary : (points,) float
        Largest singular value of S, and of T, over all frequencies; NaN where the closed loop is
        not stable (not defined) or not confirmed.
    sensitivity_frequency, complementary_frequency : (points,) float
        Where [rad/s]; inf where the peak is the limit at high frequency.
    stable, confirmed : (points,) bool
        Whether the closed loop is stable; whether the numbers decide.
    """

    sensitivity: Real
    sensitivity_frequency: Real
    complementary: Real
    complementary_frequency: Real
    stable: Bool
    confirmed: Bool


def find_sensitivity_peaks(
    A: ArrayLike, B: ArrayLike, C: ArrayLike, D: ArrayLike, dt: float = 0.0
) -> SensitivityPeaks:
    """Peaks of S and T of loops closed by negative unity feedback.

    With several channels the singular values depend on the units of the signals.

    Parameters
    ----------
    A, B, C, D : (points, n, n), (points, n, m), (points, m, n), (points, m, m) float
        The open loop L.
    dt : float
        Sampling time [s]; 0 means continuous.

    Returns
    -------
    SensitivityPeaks
        Attained values; no frequency exceeds them by more than 1e-7, relative, or 1e-6 where
        slow poles beside fast ones leave no more digits.

    References
    ----------
    As in `ssaudit.margins.gain_curve.find_gain_peak`.

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> peaks = find_sensitivity_peaks(0 * one, one, 2 * one, 0 * one)  # L = 2/s
    >>> peaks.sensitivity.round(6), peaks.complementary.round(6)
    (array([1.]), array([1.]))
    """
    S, carried = close_loop(read_loop(A, B, C, D), dt)
    stable = find_stable(given_form(S, dt).A, dt)[1]
    first, second = _peaks_where(S, dt, stable, carried, rest=True)
    confirmed = first.confirmed & second.confirmed
    return SensitivityPeaks(
        first.value, first.frequency, second.value, second.frequency, stable, confirmed
    )


def close_loop(loop: StateSpace, dt: float) -> tuple[StateSpace, Real]:
    """Sensitivity of loops with balanced states, and what closing rounds.

    Parameters
    ----------
    loop : StateSpace
        The open loop, closed by negative unity feedback.
    dt : float
        Sampling time [s]; 0 means continuous.

    Returns
    -------
    S : StateSpace
        Of sampled loops A is less the identity: the closed poles next to 1 keep their digits.
    carried : (points, n, n) float
        Size of the terms that each entry of A was summed from.

    Examples
    --------
    >>> S, carried = close_loop(read_loop([[[-1.0]]], [[[2.0]]], [[[3.0]]], [[[0.0]]]), 0.0)
    >>> S.A.item(), carried.item()
    (-7.0, 7.0)
    """
    even = balance_loop(loop)
    even = StateSpace(even.A - _identity(even, dt), even.B, even.C, even.D)
    S = sensitivity_of(even)
    return S, np.asarray(np.abs(even.A) + np.abs(S.B) @ np.abs(even.C))


def given_form(system: StateSpace, dt: float) -> StateSpace:
    """Add the identity back to A of sampled systems that were given without.

    Parameters
    ----------
    system : StateSpace
        As `close_loop` returns it.
    dt : float
        Sampling time [s]; 0 means continuous.

    Returns
    -------
    StateSpace

    Examples
    --------
    >>> system = read_loop([[[-0.5]]], [[[1.0]]], [[[1.0]]], [[[0.0]]])
    >>> given_form(system, 0.1).A.item(), given_form(system, 0.0).A.item()
    (0.5, -0.5)
    """
    return StateSpace(system.A + _identity(system, dt), system.B, system.C, system.D)


def _identity(system: StateSpace, dt: float) -> Real:
    """Return the identity of sampled systems, zero of continuous ones."""
    n = system.A.shape[-1]
    return np.eye(n) if dt > 0 else np.zeros((n, n))


def find_norm(A: ArrayLike, B: ArrayLike, C: ArrayLike, D: ArrayLike, dt: float = 0.0) -> Peak:
    """H-infinity norm of stable systems with its frequency.

    Parameters
    ----------
    A, B, C, D : (points, n, n), (points, n, inputs), (points, outputs, n), (points, ...) float
        Any stable systems.
    dt : float
        Sampling time [s]; 0 means continuous.

    Returns
    -------
    Peak
        Value NaN where a system is not stable; frequency [rad/s].

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> find_norm(-one, one, 5 * one, 0 * one).value.round(6)
    array([5.])
    """
    system = StateSpace(*(np.asarray(matrix, dtype=float) for matrix in (A, B, C, D)))
    system = balance_loop(system)
    stable = find_stable(system.A, dt)[1]
    beside = StateSpace(system.A - _identity(system, dt), system.B, system.C, system.D)
    return peak_where(beside, dt, stable)


def peak_where(
    system: StateSpace,
    dt: float,
    chosen: Bool,
    *,
    structured: bool = False,
    carried: Real | None = None,
) -> Peak:
    """Peak gain of the chosen systems, NaN for the others.

    Parameters
    ----------
    system : StateSpace
        Systems that are stable where chosen; sampled ones with A less the identity.
    dt : float
        Sampling time [s]; 0 means continuous.
    chosen : (points,) bool
    structured : bool
        As in `ssaudit.margins.gain_curve.find_gain_peak`.
    carried : (points, n, n) float, optional
        As in `ssaudit.margins.state_space.to_modes`.

    Returns
    -------
    Peak
        Points not chosen are confirmed as long as their numbers are finite. Where nothing passes
        the value is 0, at no frequency.

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> lag = StateSpace(-one, one, 5 * one, 0 * one)
    >>> peak_where(lag, 0.0, np.array([False])).value
    array([nan])
    """
    rounded = np.zeros(system.A.shape) if carried is None else carried
    return _peaks_where(system, dt, chosen, rounded, structured=structured)[0]


def _peaks_where(
    system: StateSpace,
    dt: float,
    chosen: Bool,
    carried: Real,
    *,
    structured: bool = False,
    rest: bool = False,
) -> list[Peak]:
    """Peaks as `peak_where` gives them; with ``rest`` those of I - G too."""
    kinds = [system, _rest_of(system)] if rest else [system]
    silent = [chosen & _nothing_passes(kind) for kind in kinds]
    searched = np.nonzero(chosen & ~np.all(silent, axis=0))[0]
    found = [_nothing_found(kind) for kind in kinds]
    if len(searched):
        part, rounded = system[searched], carried[searched]
        form = to_modes(part, rounded, sampled=dt > 0)
        for number, peak in enumerate(found):
            if number == 1:
                part, form = _rest_of(part), _rest_of_form(form)
            rows = np.nonzero(~silent[number][searched])[0]
            search = _find_peak(part[rows], rounded[rows], form[rows], dt, structured)
            peak.value[searched[rows]] = search.value
            peak.frequency[searched[rows]] = unwarp(search.frequency, dt)
            peak.confirmed[searched[rows]] = search.confirmed
    for peak, nothing in zip(found, silent, strict=True):
        peak.value[nothing] = 0.0
    return found


def _nothing_found(system: StateSpace) -> Peak:
    """Peaks not searched: NaN, and confirmed where the numbers are finite."""
    nothing = np.full(len(system), np.nan)
    return Peak(nothing, nothing.copy(), finite_points(system.A, system.D))


def _rest_of(G: StateSpace) -> StateSpace:
    """I - G."""
    return StateSpace(G.A, G.B, -G.C, np.eye(G.D.shape[-1]) - G.D)


def _rest_of_form(form: ModalForm) -> ModalForm:
    """I - G as a sum over poles."""
    return replace(form, left=-form.left, D=np.eye(form.D.shape[-1]) - form.D)


def _find_peak(
    system: StateSpace, carried: Real, form: ModalForm, dt: float, structured: bool
) -> Peak:
    """Peaks by whichever way decides them, at frequencies of the mapped systems.

    Plain peaks are covered, and level sets take what the cover leaves. With scalings a level set
    needs fewer of them: there it comes first, and the cover takes what it cannot be trusted with.
    """
    norm = ScaledNorm() if structured and system.D.shape[-1] > 1 else PlainNorm()
    if norm.tunable:
        mapped = to_continuous(given_form(system, dt), dt)
        levels = _find_levels(mapped, form.poles, norm)
        off = _entry_size(system, carried, dt)
        sure = level_set_trusted(mapped, form, levels, norm, off, sampled=dt > 0)
        peak = _only(levels, sure)
    else:
        peak = cover_peak(form, norm, PEAK_RTOL)
    left = np.nonzero(~peak.confirmed)[0]
    if len(left):
        again = to_modes(system[left], carried[left], sampled=dt > 0, steps=CORRECTIONS)
        cover_left(peak, left, again, norm, PEAK_RTOL)
    left = np.nonzero(~peak.confirmed)[0]
    if len(left):
        mapped = to_continuous(given_form(system[left], dt), dt)
        if norm.tunable:
            levels = Peak(*(column[left] for column in vars(levels).values()))
        else:
            levels = _find_levels(mapped, form.poles[left], norm)
        off = _entry_size(system[left], carried[left], dt)
        sure = level_set_trusted(mapped, None, levels, norm, off, sampled=dt > 0)
        fill_in(peak, left, _only(levels, sure))
    return peak


def _find_levels(system: StateSpace, poles: Complex, norm: "PlainNorm | ScaledNorm") -> Peak:
    """Peaks by level sets, where the poles found are stable."""
    stable = np.asarray((poles.real < 0).all(axis=1))
    levels = _nothing_found(system)
    levels.confirmed[:] = False
    if stable.any():
        found = find_gain_peak(system[stable], poles[stable], structured=norm.tunable)
        fill_in(levels, np.nonzero(stable)[0], found)
    return levels


def _entry_size(system: StateSpace, carried: Real, dt: float) -> Real:
    """Size of what A's entries were rounded at, in closing and, if sampled, in the mapping."""
    size = np.linalg.norm(carried, axis=(1, 2))
    if dt == 0:
        return np.asarray(size)
    return np.asarray(
        size + np.linalg.norm(system.A, axis=(1, 2)) + 2 * np.sqrt(system.A.shape[-1])
    )


def _only(peak: Peak, sure: Bool) -> Peak:
    """Peaks where they are sure, NaN elsewhere."""
    return Peak(np.where(sure, peak.value, np.nan), np.where(sure, peak.frequency, np.nan), sure)


def level_set_trusted(
    system: StateSpace,
    form: ModalForm | None,
    peak: Peak,
    norm: "PlainNorm | ScaledNorm",
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
    norm : PlainNorm or ScaledNorm
        With scalings those at the peak stand for all.
    carried : (points,) float
        Size of the terms whose rounding A carries.
    sampled : bool
        Whether that is the A of sampled systems, before they were mapped.

    Returns
    -------
    (points,) bool
    """
    if len(system) == 0:
        return np.zeros(0, dtype=bool)
    n = system.A.shape[-1]
    with np.errstate(all="ignore"):
        logs = norm.multipliers(respond(system, np.arange(len(system)), peak.frequency))
        G = _scaled(system, logs)
        reach = _reach(G, sampled) if form is None else _reach_of_form(form, logs, sampled)
        drive, read, drive_given, read_given = (np.array(part) for part in reach)
        H = _hamiltonian(G, peak.value * (1 + PEAK_RTOL))
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


def _scaled(G: StateSpace, logs: Real) -> StateSpace:
    """diag(e^x) G diag(e^-x)."""
    row, column = np.exp(logs)[:, :, np.newaxis], np.exp(logs)[:, np.newaxis, :]
    return StateSpace(G.A, G.B / column, row * G.C, row * G.D / column)


class ScaledNorm:
    """Largest singular values with the channels scaled so as to make them small."""

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


def _nothing_passes(system: StateSpace) -> Bool:
    """Where no path leads from any input to any output, whatever the numbers on it."""
    reached = (system.B != 0).any(axis=2)
    steps = system.A != 0
    for _ in range(system.A.shape[-1]):
        further = reached | (steps & reached[:, np.newaxis]).any(axis=2)
        if (further == reached).all():
            break
        reached = further
    shown = ((system.C != 0) & reached[:, np.newaxis]).any(axis=(1, 2))
    return np.asarray(~(shown | (system.D != 0).any(axis=(1, 2))))
