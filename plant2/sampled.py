"""The exact sampled plant: what a held output, late by any delay, does from sample to sample.

Rules of this file:

- Position is sampled at t = kT; the output computed there acts from kT + delay until the next one.
- Transition matrices are kept minus the identity, and frequency is z = 1 + delta, so that nothing
  cancels at high sample rates.
- numpy only; no controller, no margins.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from plant2.errors import OutOfRangeError
from plant2.plant import StateSpace

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Pair = tuple[float, float]

SNAP = 1e-9
"""Fractions of a period nearer than this to a whole number count as whole."""

_TERMS = 13
_SMALL = 0.25


# --------------------------------------------------------------------------------------------------
# Transition over a time


def propagate(space: StateSpace, dt_s: float | Real) -> tuple[Real, Real, Real]:
    """Exact transition of the plant over a time with held inputs, minus the identity.

    Parameters
    ----------
    space : StateSpace
        The plant.
    dt_s : float or array of float, shape (k,)
        One or several times, finite, at least 0. [s]

    Returns
    -------
    tuple of three arrays of float, shapes (n, n), (n,), (n,) or (k, n, n), (k, n), (k, n)
        ``exp(A dt) - I``; the state that an output of 1, held over dt, leaves; the same for a
        disturbance force of 1. [SI by the states]

    Raises
    ------
    OutOfRangeError
        If a time is negative or not finite.

    Notes
    -----
    ``P = sum (A h)^j/(j+1)!`` by Horner's scheme with ``|A h| <= 1/4``, ``X = A h P`` and
    ``G = h P B``; then doubling, ``X <- 2 X + X^2`` and ``G <- 2 G + X G``, in which the identity
    never appears. States are scaled by powers of two before. Van Loan, IEEE Trans. Automatic
    Control 23 (1978), for the integral beside the exponential (from memory); the form without the
    identity is an own derivation.

    Examples
    --------
    >>> from plant2.plant import Plant, state_space
    >>> psi, gain, _ = propagate(state_space(Plant(mass=2.0)), 0.5)
    >>> psi.tolist(), gain.tolist()
    ([[0.0, 0.5], [0.0, 0.0]], [0.0625, 0.25])
    """
    times = np.atleast_1d(np.asarray(dt_s, dtype=np.float64))
    _check_times("dt_s", times)
    scale = _balance(space.a)
    a = space.a * (scale / scale[:, np.newaxis])
    inputs = np.stack([space.b, space.b_force], axis=1) / scale[:, np.newaxis]

    size = float(np.abs(a).sum(axis=0).max()) * float(times.max(initial=0.0))
    doublings = max(0, math.ceil(math.log2(size / _SMALL))) if size > _SMALL else 0
    h = np.ldexp(times, -doublings)[:, np.newaxis, np.newaxis]
    small = a * h
    identity = np.eye(a.shape[0])
    series = np.broadcast_to(identity, small.shape)
    for order in range(_TERMS, 1, -1):
        series = identity + small @ series / order
    psi = small @ series
    gain = h * (series @ inputs)
    for _ in range(doublings):
        gain = 2.0 * gain + psi @ gain
        psi = 2.0 * psi + psi @ psi

    psi = psi * (scale[:, np.newaxis] / scale)
    gain = gain * scale[:, np.newaxis]
    if np.ndim(dt_s) == 0:
        psi, gain = psi[0], gain[0]
    return psi, gain[..., 0], gain[..., 1]


def split_delay(delay_s: float, period_s: float) -> tuple[int, float]:
    """Split a delay into whole periods and the fraction that remains.

    Parameters
    ----------
    delay_s : float
        The delay, finite, at least 0. [s]
    period_s : float
        The sample period, finite, above 0. [s]

    Returns
    -------
    tuple of int and float
        Whole periods, and a fraction from 0 to below 1; exactly 0 within `SNAP` of a whole period.
        [-]

    Raises
    ------
    OutOfRangeError
        If a time lies outside the range given above.

    Notes
    -----
    ``delay = (d + f) T``, by the exact remainder of a floating-point division.

    Examples
    --------
    >>> split_delay(0.375, 0.25)
    (1, 0.5)
    """
    _check_period(period_s)
    _check_times("delay_s", np.array([delay_s]))
    rest = math.fmod(delay_s, period_s)
    whole = round((delay_s - rest) / period_s)
    fraction = rest / period_s
    if fraction < SNAP:
        return whole, 0.0
    if fraction > 1.0 - SNAP:
        return whole + 1, 0.0
    return whole, fraction


# --------------------------------------------------------------------------------------------------
# The sampled plant


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SampledPlant:
    """Plant, sample period and delay as one exact recursion.

    Parameters
    ----------
    space : StateSpace
        The plant in continuous time.
    period_s : float
        Sample period. [s]
    delay_s : float
        From the sampling instant to the instant the output acts. [s]
    whole_delay : int
        Whole periods of the delay. [-]
    fraction : float
        The rest of the delay over the period, 0 to below 1. [-]
    psi : array of float, shape (n, n)
        Transition over a period minus the identity. [SI by the states]
    gamma0 : array of float, shape (n,)
        Effect of the output that acts from ``whole_delay`` samples ago.
        [states per output]
    gamma1 : array of float, shape (n,)
        Effect of the output one sample older; exactly 0 without a fraction.
        [states per output]
    gamma_force : array of float, shape (n,)
        Effect of a disturbance force held over the period. [states per N or N m]
    scale : array of float, shape (n,)
        Powers of two that balance the states; for computing only. [-]

    Notes
    -----
    ``x[k+1] = (I + psi) x[k] + gamma0 u[k-d] + gamma1 u[k-d-1] + gamma_force F[k]``; Astrom and
    Wittenmark, *Computer-Controlled Systems*, ch. 3 (from memory). The output rows are those of
    `space`.
    """

    space: StateSpace
    period_s: float
    delay_s: float
    whole_delay: int
    fraction: float
    psi: Real
    gamma0: Real
    gamma1: Real
    gamma_force: Real
    scale: Real

    @property
    def c_position(self) -> Real:
        """Row of the true position. [m or rad per state]

        Notes
        -----
        That of `space`.
        """
        return self.space.c_position

    @property
    def c_measured(self) -> Real:
        """Row of what the converter sees. [m or rad per state]

        Notes
        -----
        That of `space`.
        """
        return self.space.c_measured

    @property
    def c_main_position(self) -> Real:
        """Row of the main mass's position. [m or rad per state]

        Notes
        -----
        That of `space`.
        """
        return self.space.c_main_position

    @property
    def c_main_velocity(self) -> Real:
        """Row of the main mass's velocity. [m/s or rad/s per state]

        Notes
        -----
        That of `space`.
        """
        return self.space.c_main_velocity

    @property
    def c_current(self) -> Real:
        """Row of the coil current. [A per state]

        Notes
        -----
        That of `space`.
        """
        return self.space.c_current

    @property
    def d_current(self) -> float:
        """Coil current per acting output, beside that of the states. [A per output]

        Notes
        -----
        That of `space`.
        """
        return self.space.d_current


def sample(space: StateSpace, period_s: float, delay_s: float) -> SampledPlant:
    """Sample a plant exactly, with a zero-order hold and any delay.

    Parameters
    ----------
    space : StateSpace
        The plant.
    period_s : float
        Sample period, finite, above 0. [s]
    delay_s : float
        From the sampling instant to the instant the output acts, finite, at least 0; may exceed a
        period. [s]

    Returns
    -------
    SampledPlant
        The recursion from sample to sample.

    Raises
    ------
    OutOfRangeError
        If a time lies outside the range given above.

    Notes
    -----
    ``gamma0`` is the integral over the last ``(1-f) T`` of a period, ``gamma1`` that over the first
    ``f T``, carried on by ``exp(A (1-f) T)``; Astrom and Wittenmark, *Computer-Controlled Systems*,
    ch. 3 (from memory).

    Examples
    --------
    >>> from plant2.plant import Plant, state_space
    >>> late = sample(state_space(Plant(mass=1.0)), 1.0, 1.25)
    >>> late.whole_delay, late.gamma0.tolist(), late.gamma1.tolist()
    (1, [0.28125, 0.75], [0.21875, 0.25])
    """
    whole, fraction = split_delay(delay_s, period_s)
    early_s = fraction * period_s
    psi, gain, gain_force = propagate(space, np.array([period_s, period_s - early_s, early_s]))
    gamma0 = gain[1]
    gamma1 = gain[2] + psi[1] @ gain[2] if fraction > 0.0 else np.zeros_like(gamma0)
    scale = _balance(space.a)
    arrays = [np.ascontiguousarray(v) for v in (psi[0], gamma0, gamma1, gain_force[0], scale)]
    for array in arrays:
        array.setflags(write=False)
    return SampledPlant(
        space=space,
        period_s=period_s,
        delay_s=delay_s,
        whole_delay=whole,
        fraction=fraction,
        psi=arrays[0],
        gamma0=arrays[1],
        gamma1=arrays[2],
        gamma_force=arrays[3],
        scale=arrays[4],
    )


def plant_response(
    sampled: SampledPlant, delta: complex | Real | Complex, row: Real
) -> tuple[Complex, Complex]:
    """Response of the sampled plant at complex frequencies, and its slope.

    Parameters
    ----------
    sampled : SampledPlant
        The plant.
    delta : complex or array of complex, any shape
        Frequencies as ``z - 1``; for ``z = exp(j w T)`` compute them as ``expm1(j w T)``, see
        `delta_of`. [-]
    row : array of float, shape (n,)
        What is looked at, such as ``sampled.c_measured``. [quantity per state]

    Returns
    -------
    tuple of two arrays of complex, the shape of delta
        Row's quantity at the sampling instants per controller output, delay included; and its
        derivative with respect to z. [quantity per output]

    Raises
    ------
    OutOfRangeError
        If a frequency is exactly a pole, such as 0 for a free mass; carries its magnitude.

    Notes
    -----
    ``G = row (delta I - psi)^-1 (gamma0 z^-d + gamma1 z^-(d+1))``, the derivative from
    ``d(M^-1) = -M^-1 dM M^-1``; own derivation. A direct part, as of the current, is not in it.

    Examples
    --------
    >>> from plant2.plant import Plant, state_space
    >>> at_once = sample(state_space(Plant(mass=1.0)), 1.0, 0.0)
    >>> value, slope = plant_response(at_once, 1.0, at_once.c_position)
    >>> complex(value), complex(slope)
    ((1.5+0j), (-2.5+0j))
    """
    delta = np.asarray(delta, dtype=np.complex128)
    flat = delta.reshape(-1)
    scale = sampled.scale
    psi = sampled.psi * (scale / scale[:, np.newaxis])
    gammas = np.stack([sampled.gamma0, sampled.gamma1], axis=1) / scale[:, np.newaxis]
    out = (row * scale).astype(np.complex128)
    n = psi.shape[0]

    matrix = np.empty((flat.size, n, n), dtype=np.complex128)
    matrix[:] = -psi
    matrix[:, np.arange(n), np.arange(n)] += flat[:, np.newaxis]
    ask = np.broadcast_to(gammas.astype(np.complex128), (flat.size, n, 2))
    look_at = np.broadcast_to(out[:, np.newaxis], (flat.size, n, 1))
    try:
        states = np.linalg.solve(matrix, ask)
        look = np.linalg.solve(np.swapaxes(matrix, 1, 2), look_at)[:, :, 0]
    except np.linalg.LinAlgError:
        raise OutOfRangeError(
            "delta",
            _first_singular(matrix, flat),
            "",
            "is a pole of the sampled plant, which has no finite answer there",
            "leave the point out",
        ) from None

    z = 1.0 + flat
    d = sampled.whole_delay
    late0 = z**-d
    late1 = late0 / z
    direct = states[:, :, 0] * late0[:, np.newaxis] + states[:, :, 1] * late1[:, np.newaxis]
    value = direct @ out
    turned = (-d * late1)[:, np.newaxis] * gammas[:, 0] + (-(d + 1) * late1 / z)[
        :, np.newaxis
    ] * gammas[:, 1]
    slope = np.einsum("ki,ki->k", look, turned - direct)
    return value.reshape(delta.shape), slope.reshape(delta.shape)


def delta_of(omega_rad_per_s: float | Real, period_s: float) -> Complex:
    """Points of the unit circle, minus 1, without cancellation.

    Parameters
    ----------
    omega_rad_per_s : float or array of float, any shape
        Angular frequencies. [rad/s]
    period_s : float
        Sample period. [s]

    Returns
    -------
    array of complex, the same shape
        ``exp(j w T) - 1``. [-]

    Notes
    -----
    ``2 sin(x/2) (-sin(x/2) + j cos(x/2))`` with ``x = w T``; half-angle identity.

    Examples
    --------
    >>> complex(delta_of(1e-9, 1.0)).real
    -5e-19
    """
    half = 0.5 * np.asarray(omega_rad_per_s, dtype=np.float64) * period_s
    return np.asarray(2.0 * np.sin(half) * (-np.sin(half) + 1j * np.cos(half)))


def pulse_transfer(sampled: SampledPlant, row: Real | None = None) -> tuple[Real, Real]:
    """Numerator and denominator of the sampled plant in falling powers of z.

    Parameters
    ----------
    sampled : SampledPlant
        The plant.
    row : array of float, shape (n,), or None
        What is looked at; None is the true position. [quantity per state]

    Returns
    -------
    tuple of two arrays of float
        Numerator and monic denominator; the denominator carries the delay as powers of z.
        [quantity per output, -]

    Notes
    -----
    Numerator = denominator x Markov parameters, which loses fewer digits than a difference of
    characteristic polynomials (own derivation). An expanded polynomial still loses digits at high
    sample rates: for printing and checks, not for poles; `plant_response` does without it.

    Examples
    --------
    The double integrator:

    >>> from plant2.plant import Plant, state_space
    >>> top, bottom = pulse_transfer(sample(state_space(Plant(mass=1.0)), 1.0, 0.0))
    >>> top.tolist(), bottom.tolist()
    ([0.5, 0.5], [1.0, -2.0, 1.0])
    """
    row = sampled.c_position if row is None else row
    scale = sampled.scale
    psi = sampled.psi * (scale / scale[:, np.newaxis])
    gamma0, gamma1, out = sampled.gamma0 / scale, sampled.gamma1 / scale, row * scale
    n = psi.shape[0]
    plain = np.real(np.poly(1.0 + np.linalg.eigvals(psi)))
    length = n + 1 if sampled.fraction > 0.0 else n
    markov = np.zeros(length)
    state0, state1 = gamma0, gamma1
    for k in range(length):
        markov[k] += out @ state0
        if k + 1 < length:
            markov[k + 1] += out @ state1
        state0, state1 = state0 + psi @ state0, state1 + psi @ state1
    numerator = np.convolve(plain, markov)[:length]
    trailing = sampled.whole_delay + (1 if sampled.fraction > 0.0 else 0)
    return numerator, np.concatenate([plain, np.zeros(trailing)])


# --------------------------------------------------------------------------------------------------
# Small textbook facts of sampling


def hold_phase_lag_rad(omega_rad_per_s: float, period_s: float, delay_s: float = 0.0) -> float:
    """Phase that the hold and a delay cost.

    Parameters
    ----------
    omega_rad_per_s : float
        Angular frequency. [rad/s]
    period_s : float
        Sample period, above 0. [s]
    delay_s : float
        Delay, at least 0. [s]

    Returns
    -------
    float
        The lag. [rad]

    Raises
    ------
    OutOfRangeError
        If a time lies outside the range given above.

    Notes
    -----
    ``w (T/2 + delay)``: a hold is late by half a period. Franklin, Powell and Workman, *Digital
    Control of Dynamic Systems* (from memory).

    Examples
    --------
    >>> hold_phase_lag_rad(2.0, 0.25, 0.125)
    0.5
    """
    _check_period(period_s)
    _check_times("delay_s", np.array([delay_s]))
    return omega_rad_per_s * (0.5 * period_s + delay_s)


def in_stability_triangle(a1: float, a2: float) -> bool:
    """Whether both roots of z^2 + a1 z + a2 lie inside the unit circle.

    Parameters
    ----------
    a1, a2 : float
        Real coefficients. [-]

    Returns
    -------
    bool
        True when both roots lie strictly inside. [-]

    Notes
    -----
    ``|a2| < 1`` and ``|a1| < 1 + a2``; Jury's test for two roots (from memory).

    Examples
    --------
    >>> in_stability_triangle(-1.9, 0.95), in_stability_triangle(-2.0, 1.0)
    (True, False)
    """
    return abs(a2) < 1.0 and abs(a1) < 1.0 + a2


def tustin_section(
    numerator: Pair, denominator: Pair, *, period_s: float, match_rad_per_s: float = 0.0
) -> tuple[float, float, float]:
    """Sample a first-order section by the trapezoidal rule.

    Parameters
    ----------
    numerator, denominator : tuple of two floats
        Coefficients of s and of 1. [s, - in a common unit]
    period_s : float
        Sample period, above 0. [s]
    match_rad_per_s : float
        Frequency at which both responses agree exactly, from 0 to below pi/period. [rad/s]

    Returns
    -------
    tuple of three floats
        b0, b1, a1 of ``(b0 + b1/z)/(1 + a1/z)``. [unit of the section, -]

    Raises
    ------
    OutOfRangeError
        If period or frequency lie outside the range given above.

    Notes
    -----
    ``s = c (z-1)/(z+1)``, ``c = w1/tan(w1 T/2)``, which is 2/T for w1 = 0; Franklin, Powell and
    Workman, *Digital Control of Dynamic Systems* (from memory).

    Examples
    --------
    An integral:

    >>> tustin_section((0.0, 1.0), (1.0, 0.0), period_s=1.0)
    (0.5, 0.5, -1.0)
    """
    _check_period(period_s)
    half = 0.5 * match_rad_per_s * period_s
    if not 0.0 <= half < 0.5 * math.pi:
        raise OutOfRangeError(
            "match_rad_per_s",
            match_rad_per_s,
            "rad/s",
            "must be from 0 to below half the sample rate",
            "lower it, or sample faster",
        )
    c = 2.0 / period_s if half == 0.0 else match_rad_per_s / math.tan(half)
    lead = denominator[0] * c + denominator[1]
    return (
        (numerator[0] * c + numerator[1]) / lead,
        (numerator[1] - numerator[0] * c) / lead,
        (denominator[1] - denominator[0] * c) / lead,
    )


def matched_section(
    numerator: Pair, denominator: Pair, *, period_s: float
) -> tuple[float, float, float]:
    """Sample a first-order section by matching pole, zero and gain at rest.

    Parameters
    ----------
    numerator, denominator : tuple of two floats
        Coefficients of s and of 1; none of them 0. [s, - in a common unit]
    period_s : float
        Sample period, above 0. [s]

    Returns
    -------
    tuple of three floats
        b0, b1, a1 of ``(b0 + b1/z)/(1 + a1/z)``. [unit of the section, -]

    Raises
    ------
    OutOfRangeError
        If the period is not above 0 or a coefficient is 0.

    Notes
    -----
    ``z = exp(s T)`` for pole and zero; Franklin, Powell and Workman, *Digital Control of Dynamic
    Systems* (from memory).

    Examples
    --------
    >>> matched_section((1.0, 2.0), (1.0, 2.0), period_s=1.0)[0]
    1.0
    """
    _check_period(period_s)
    for name, pair in (("numerator", numerator), ("denominator", denominator)):
        if 0.0 in pair:
            raise OutOfRangeError(
                name, 0.0, "", "must have no coefficient of 0", "give a pole, a zero and a gain"
            )
    zero = -numerator[1] / numerator[0] * period_s
    pole = -denominator[1] / denominator[0] * period_s
    gain = numerator[1] / denominator[1] * (math.expm1(pole) / math.expm1(zero))
    return gain, -gain * math.exp(zero), -math.exp(pole)


# --------------------------------------------------------------------------------------------------
# Inside


def _balance(a: Real) -> Real:
    """Powers of two d that make rows and columns of d^-1 a d alike, or ones where it is no help."""
    n = a.shape[0]
    scale = np.ones(n)
    work = np.abs(a) * (1.0 - np.eye(n))
    for _ in range(20):
        changed = False
        for i in range(n):
            row, column = float(work[i].sum()), float(work[:, i].sum())
            if row == 0.0 or column == 0.0:
                continue
            factor = 2.0 ** round(0.5 * math.log2(row / column))
            if factor != 1.0 and column * factor + row / factor < 0.95 * (row + column):
                work[:, i] *= factor
                work[i] /= factor
                scale[i] *= factor
                changed = True
        if not changed:
            break
    plain = np.abs(a).sum(axis=0).max()
    balanced = np.abs(a * (scale / scale[:, np.newaxis])).sum(axis=0).max()
    return scale if balanced < plain else np.ones(n)


def _first_singular(matrix: Complex, delta: Complex) -> float:
    for one, at in zip(matrix, delta, strict=True):
        try:
            np.linalg.solve(one, np.zeros(one.shape[0]))
        except np.linalg.LinAlgError:
            return float(abs(at))
    return math.nan


def _check_times(name: str, times: Real) -> None:
    bad = ~(np.isfinite(times) & (times >= 0.0))
    if bad.any():
        raise OutOfRangeError(
            name,
            float(times[bad][0]),
            "s",
            "must be finite and at least 0",
            "give 0 or a positive time",
        )


def _check_period(period_s: float) -> None:
    if not (math.isfinite(period_s) and period_s > 0.0):
        raise OutOfRangeError(
            "period_s", period_s, "s", "must be finite and above 0", "give a positive time"
        )
