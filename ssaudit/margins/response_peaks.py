"""Peaks of responses over frequency by whichever way decides them: a cover, or level sets."""

from dataclasses import replace

import numpy as np

from ssaudit.margins.cover import cover_left, cover_peak
from ssaudit.margins.gain_curve import PEAK_RTOL, find_gain_peak
from ssaudit.margins.level_trust import level_set_trusted
from ssaudit.margins.modal_form import CORRECTIONS, ModalForm, to_modes
from ssaudit.margins.norms import Norm, PlainNorm, ScaledNorm
from ssaudit.margins.peak_search import Peak, fill_in
from ssaudit.margins.state_matrices import finite_points
from ssaudit.margins.state_space import (
    Bool,
    Complex,
    Real,
    StateSpace,
    given_form,
    to_continuous,
    unwarp,
)


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
        Whose peak is wanted.
    structured : bool
        As in `ssaudit.margins.gain_curve.find_gain_peak`.
    carried : (points, n, n) float, optional
        As in `ssaudit.margins.modal_form.to_modes`.

    Returns
    -------
    Peak
        No frequency exceeds a value by more than 1e-7, relative, or 1e-6 where slow poles beside
        fast ones leave no more digits. Frequency [rad/s]. Points not chosen are confirmed as long
        as their numbers are finite. Where nothing passes the value is 0, at no frequency.

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> lag = StateSpace(-one, one, 5 * one, 0 * one)
    >>> peak_where(lag, 0.0, np.array([False])).value
    array([nan])
    """
    rounded = np.zeros(system.A.shape) if carried is None else carried
    return _peaks_where(system, dt, chosen, rounded, structured=structured)[0]


def peaks_of_both(system: StateSpace, dt: float, chosen: Bool, carried: Real) -> tuple[Peak, Peak]:
    """Peak gains of the chosen systems G, and of I - G, which share their poles.

    Parameters
    ----------
    system : StateSpace
        G, with as many inputs as outputs; else as in `peak_where`.
    dt : float
        Sampling time [s]; 0 means continuous.
    chosen : (points,) bool
        Whose peaks are wanted.
    carried : (points, n, n) float
        As in `ssaudit.margins.modal_form.to_modes`.

    Returns
    -------
    of_system, of_rest : Peak
        As `peak_where` gives them.

    Examples
    --------
    >>> one = np.ones((1, 1, 1))
    >>> lag = StateSpace(-one, one, 5 * one, 0 * one)  # 5/(s + 1)
    >>> first, second = peaks_of_both(lag, 0.0, np.array([True]), 0 * one)
    >>> first.value.round(6), second.value.round(6)
    (array([5.]), array([4.]))
    """
    first, second = _peaks_where(system, dt, chosen, carried, rest=True)
    return first, second


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
    norm: Norm = ScaledNorm() if structured and system.D.shape[-1] > 1 else PlainNorm()
    if norm.tunable:
        peak = _trusted_levels(system, carried, form, norm, dt)
    else:
        peak = cover_peak(form, norm, PEAK_RTOL)
    left = np.nonzero(~peak.confirmed)[0]
    if len(left):
        again = to_modes(system[left], carried[left], sampled=dt > 0, steps=CORRECTIONS)
        cover_left(peak, left, again, norm, PEAK_RTOL)
    left = np.nonzero(~peak.confirmed)[0]
    if len(left) and not norm.tunable:
        fill_in(peak, left, _trusted_levels(system[left], carried[left], form[left], norm, dt))
    return peak


def _trusted_levels(
    system: StateSpace, carried: Real, form: ModalForm, norm: Norm, dt: float
) -> Peak:
    """Peaks by level sets where these can be trusted, by quick upper bounds or else by solving."""
    mapped = to_continuous(given_form(system, dt), dt)
    levels = _find_levels(mapped, form.poles, norm)
    off = _entry_size(system, carried, dt)
    sure = level_set_trusted(mapped, form, levels, norm, off, sampled=dt > 0)
    rest = np.nonzero(levels.confirmed & ~sure)[0]
    if len(rest):
        some = Peak(*(column[rest] for column in vars(levels).values()))
        sure[rest] = level_set_trusted(mapped[rest], None, some, norm, off[rest], sampled=dt > 0)
    return _only(levels, sure)


def _find_levels(system: StateSpace, poles: Complex, norm: Norm) -> Peak:
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
