"""The sampled loop: poles, margins, bandwidth, sensitivities of the loop that really runs.

Rules of this file:

- Everything near z = 1 is computed in delta = z - 1, where nothing cancels at high sample rates.
- Stability is told from the poles, never from a margin.
- Plant in SI, controller in code per count; the two scales between them are in `ClosedLoop`.
- This module knows no laws, no words and no files.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from plant2.errors import OutOfRangeError
from plant2.sampled import SampledPlant, plant_response, sample

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]


class DeltaController(Protocol):
    """A controller in falling powers of delta = z - 1, one monic denominator.

    Notes
    -----
    output = reference(delta) r - position(delta) y, in code per count.
    """

    @property
    def reference(self) -> Real:
        """Numerator from the reference, shape (n + 1,). [code per count]

        Notes
        -----
        Definition.
        """

    @property
    def position(self) -> Real:
        """Numerator from the position, shape (n + 1,). [code per count]

        Notes
        -----
        Definition.
        """

    @property
    def denominator(self) -> Real:
        """Denominator, shape (n + 1,), monic. [-]

        Notes
        -----
        Definition.
        """


@dataclass(frozen=True, slots=True, kw_only=True)
class Controller:
    """A plain `DeltaController`, for loops that are assembled here.

    Parameters
    ----------
    reference, position, denominator : array of float, shape (n + 1,)
        Falling powers of delta; denominator monic. [code per count]

    Notes
    -----
    Definition.
    """

    reference: Real
    position: Real
    denominator: Real


@dataclass(frozen=True, slots=True, kw_only=True)
class ClosedLoop:
    """A sampled plant with its controller around it.

    Parameters
    ----------
    sampled : SampledPlant
        Exact sampled plant, delay included.
    controller : DeltaController
        Raw codes from raw counts. [code per count]
    count_per_position : float
        Sensor scale with its polarity. [1/m or 1/rad]
    effort_per_code : float
        Actuator scale with its polarity: what the plant takes per code. [N, N m or V]

    Notes
    -----
    Loop gain L = position(z) x count_per_position x G(z) x effort_per_code.
    """

    sampled: SampledPlant
    controller: DeltaController
    count_per_position: float
    effort_per_code: float

    @property
    def scale(self) -> float:
        """Product of the two scales. [count per code per (m/N)]

        Notes
        -----
        Definition.
        """
        return self.count_per_position * self.effort_per_code


@dataclass(frozen=True, slots=True, kw_only=True)
class LoopFigures:
    """What the sampled loop is like; None where a figure does not exist.

    Parameters
    ----------
    damping_ratio : float or None
        Of the placed pair. [-]
    natural_frequency_hz : float or None
        Of the placed pair. [Hz]
    bandwidth_hz : float or None
        -3 dB from reference to position, over the value at rest. [Hz]
    poles_z : tuple of complex
        All poles of the minimal loop, largest magnitude first. [-]
    stable : bool
        Every pole inside the unit circle.
    phase_margin_deg, gain_margin_db, gain_reduction_db : float or None
        Over all crossings; None when unstable or when there is none. [deg], [dB], [dB]
    delay_margin_s : float or None
        Confirmed by the poles. [s]
    peak_sensitivity : float or None
        Largest |1/(1 + L)|. [-]
    crossover_hz : float or None
        Last gain crossing. [Hz]

    Notes
    -----
    Definitions in docs/definitions.md.
    """

    damping_ratio: float | None
    natural_frequency_hz: float | None
    bandwidth_hz: float | None
    poles_z: tuple[complex, ...]
    stable: bool
    phase_margin_deg: float | None
    gain_margin_db: float | None
    gain_reduction_db: float | None
    delay_margin_s: float | None
    peak_sensitivity: float | None
    crossover_hz: float | None


# --- assembling ---------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, kw_only=True)
class LoopMatrices:
    """The closed loop as a state space in delta: delta x = m x + inputs.

    Parameters
    ----------
    m : array of float, shape (n, n)
        State matrix minus identity. [mixed]
    b_reference, b_noise : array of float, shape (n,)
        From the reference in counts and from sensor noise in counts. [per count]
    b_force : array of float, shape (n,)
        From a force on the main mass, held over each sample. [per N]
    c_position, c_effort : array of float, shape (n,)
        True position, and the controller's output in plant units. [m], [N or V]
    d_effort_reference, d_effort_noise : float
        Direct part of the output from reference and noise. [N or V per count]

    Notes
    -----
    States: plant, stored outputs (whole and fractional delay), controller in observable form.
    """

    m: Real
    b_reference: Real
    b_noise: Real
    b_force: Real
    c_position: Real
    c_effort: Real
    d_effort_reference: float
    d_effort_noise: float


def loop_matrices(loop: ClosedLoop, gain: float = 1.0) -> LoopMatrices:
    """Assemble the closed loop in delta form.

    Parameters
    ----------
    loop : ClosedLoop
        Plant and controller.
    gain : float
        Extra factor on the loop gain. [-]

    Returns
    -------
    LoopMatrices
        Order: plant states + stored outputs + controller order.

    Notes
    -----
    Own derivation from x[k+1] = Phi x + Gamma0 u[k-d] + Gamma1 u[k-d-1] (Astrom & Wittenmark,
    Computer-Controlled Systems, ch. 3, from memory).
    """
    plant = loop.sampled
    control = loop.controller
    n = plant.psi.shape[0]
    d = plant.whole_delay
    stored = d + (1 if plant.fraction > 0.0 else 0)
    nc = len(control.denominator) - 1
    size = n + stored + nc
    ka = loop.effort_per_code * gain
    ks = loop.count_per_position
    c_measured = plant.c_measured

    # output in plant units as a row over the state, and its direct parts
    c_effort = np.zeros(size)
    ny0, nr0 = float(control.position[0]), float(control.reference[0])
    c_effort[:n] = -ka * ny0 * ks * c_measured
    if nc:
        c_effort[n + stored] = ka
    d_reference, d_noise = ka * nr0, -ka * ny0

    m = np.zeros((size, size))
    b_reference, b_noise, b_force = np.zeros(size), np.zeros(size), np.zeros(size)
    m[:n, :n] = plant.psi
    b_force[:n] = plant.gamma_force

    def drive(column: Real, lag: int) -> None:
        if lag == 0:
            m[:n, :] += np.outer(column, c_effort)
            b_reference[:n] += column * d_reference
            b_noise[:n] += column * d_noise
        else:
            m[:n, n + lag - 1] += column

    drive(plant.gamma0, d)
    if plant.fraction > 0.0:
        drive(plant.gamma1, d + 1)
    if stored:
        m[n, :] += c_effort
        m[n, n] -= 1.0
        b_reference[n] += d_reference
        b_noise[n] += d_noise
        for j in range(1, stored):
            m[n + j, n + j - 1] = 1.0
            m[n + j, n + j] = -1.0
    if nc:
        base = n + stored
        den = control.denominator[1:]
        by = control.position[1:] - den * ny0
        br = control.reference[1:] - den * nr0
        m[base:, base] -= den
        for j in range(nc - 1):
            m[base + j, base + j + 1] += 1.0
        m[base:, :n] -= np.outer(by, ks * c_measured)
        b_reference[base:] += br
        b_noise[base:] -= by
    c_position = np.zeros(size)
    c_position[:n] = plant.c_position
    return LoopMatrices(
        m=m,
        b_reference=b_reference,
        b_noise=b_noise,
        b_force=b_force,
        c_position=c_position,
        c_effort=c_effort,
        d_effort_reference=d_reference,
        d_effort_noise=d_noise,
    )


def _balanced(m: Real) -> Real:
    """Diagonal similarity by powers of two that evens out rows and columns (Osborne 1960)."""
    a = m.copy()
    n = a.shape[0]
    off = ~np.eye(n, dtype=bool)
    for _ in range(12):
        done = True
        for i in range(n):
            c = float(np.abs(a[off[:, i], i]).sum())
            r = float(np.abs(a[i, off[i]]).sum())
            if c == 0.0 or r == 0.0:
                continue
            e = round(0.5 * math.log2(r / c))
            if abs(e) >= 1:
                f = 2.0**e
                a[:, i] *= f
                a[i, :] /= f
                done = False
        if done:
            break
    return a


def _controller_at(control: DeltaController, delta: Complex) -> tuple[Complex, Complex]:
    """Values from position and from reference at delta."""
    den = np.polyval(control.denominator, delta)
    position: Complex = np.asarray(np.polyval(control.position, delta) / den, dtype=complex)
    reference: Complex = np.asarray(np.polyval(control.reference, delta) / den, dtype=complex)
    return position, reference


def _loop_gain_and_slope(loop: ClosedLoop, delta: Complex) -> tuple[Complex, Complex]:
    """L and its derivative with respect to z."""
    g, dg = plant_response(loop.sampled, delta, loop.sampled.c_measured)
    control = loop.controller
    num, den = control.position, control.denominator
    n, d = np.polyval(num, delta), np.polyval(den, delta)
    c = n / d
    dn = np.polyval(np.polyder(num), delta) if len(num) > 1 else np.zeros_like(delta)
    dd = np.polyval(np.polyder(den), delta) if len(den) > 1 else np.zeros_like(delta)
    dc = (dn - c * dd) / d
    value: Complex = np.asarray(loop.scale * c * g, dtype=complex)
    slope: Complex = np.asarray(loop.scale * (c * dg + dc * g), dtype=complex)
    return value, slope


def poles_delta(loop: ClosedLoop, *, gain: float = 1.0, polish: bool = True) -> Complex:
    """Poles of the closed loop as delta = z - 1, slowest (largest |z|) first.

    Parameters
    ----------
    loop : ClosedLoop
        Plant and controller.
    gain : float
        Extra factor on the loop gain. [-]
    polish : bool
        Refine each simple pole on 1 + L = 0, which is evaluated without cancellation near z = 1.

    Returns
    -------
    array of complex, shape (n,)
        z - 1. [-]

    Notes
    -----
    Eigenvalues of the balanced delta-form matrix, then Newton steps. Poles that another one sits
    close to (a critically damped pair) keep their eigenvalue: there the mean of the pair is
    accurate, each by itself is not.
    """
    matrices = loop_matrices(loop, gain)
    values: Complex = np.linalg.eigvals(_balanced(matrices.m)).astype(complex)
    if polish:
        scaled = replace(loop, effort_per_code=loop.effort_per_code * gain)
        values = _polished(scaled, values)
    return values[np.argsort(-np.abs(1.0 + values), kind="stable")]


def _polished(loop: ClosedLoop, values: Complex) -> Complex:
    out = values.copy()
    gap = np.abs(values[:, None] - values[None, :])
    np.fill_diagonal(gap, np.inf)
    near = gap.min(axis=1)
    size = np.abs(values)
    pick = np.flatnonzero((np.abs(1.0 + values) > 0.2) & (near > 1e-3 * size))
    if not len(pick):
        return out
    point = values[pick]
    keep = np.ones(len(pick), dtype=bool)
    step = np.zeros_like(point)
    with np.errstate(all="ignore"):
        for _ in range(4):
            try:
                value, slope = _loop_gain_and_slope(loop, point)
            except OutOfRangeError:
                # a pole of the plant itself, cancelled in the loop: its eigenvalue stands
                return out
            step = (1.0 + value) / slope
            keep &= np.isfinite(step) & (np.abs(step) < 1e-3 * near[pick])
            point = np.where(keep, point - step, point)
    good = keep & (np.abs(step) < 1e-9 * np.abs(point))
    out[pick[good]] = point[good]
    # a real matrix has conjugate poles: a pole on the real axis stays there
    real = values.imag == 0.0
    out[real] = out[real].real
    return out


def is_stable(loop: ClosedLoop, *, gain: float = 1.0) -> bool:
    """Whether every pole lies inside the unit circle.

    Parameters
    ----------
    loop : ClosedLoop
        Plant and controller.
    gain : float
        Extra factor on the loop gain. [-]

    Returns
    -------
    bool
        True if stable.

    Notes
    -----
    |z|^2 - 1 = 2 Re(delta) + |delta|^2, which loses nothing near z = 1. Poles within rounding of
    the circle count as unstable.
    """
    return bool(np.all(_outside(poles_delta(loop, gain=gain, polish=False)) < -1e-14))


def _outside(delta: Complex) -> Real:
    result: Real = 2.0 * delta.real + np.abs(delta) ** 2
    return result


def log_pole(delta: Complex | complex, period_s: float) -> Complex:
    """Continuous-time equivalent s = ln(1 + delta)/T of a pole.

    Parameters
    ----------
    delta : complex or array of complex
        z - 1. [-]
    period_s : float
        Sample period. [s]

    Returns
    -------
    array of complex
        s. [1/s]

    Notes
    -----
    ln|z| = log1p(2 Re delta + |delta|^2)/2, without cancellation near z = 1.
    """
    d = np.asarray(delta, dtype=complex)
    with np.errstate(divide="ignore"):
        real = 0.5 * np.log1p(np.maximum(_outside(d), -1.0)) / period_s
    # put together, not added: at z = 0 the real part is infinite
    s = np.empty(d.shape, dtype=complex)
    s.real = real
    s.imag = np.arctan2(d.imag, 1.0 + d.real) / period_s
    return s


def pair_figures(pair: tuple[complex, complex], period_s: float) -> tuple[float, float]:
    """Effective damping ratio and natural frequency of a pair of poles.

    Parameters
    ----------
    pair : tuple of complex
        Two poles as z - 1, conjugate or both real. [-]
    period_s : float
        Sample period. [s]

    Returns
    -------
    tuple of float
        Damping ratio [-] and natural frequency [rad/s].

    Notes
    -----
    natural frequency = sqrt(s1 s2), damping ratio = -(s1 + s2)/(2 sqrt(s1 s2)). For two poles
    that are distinct only by rounding the logarithm of the pair's mean is what counts: both
    expressions are symmetric, so the error enters squared.
    """
    s1, s2 = (complex(v) for v in log_pole(np.array(pair), period_s))
    product = s1 * s2
    omega = math.sqrt(abs(product))
    if omega == 0.0:
        return math.nan, 0.0
    return -(s1 + s2).real / (2.0 * omega), omega


def static_value(loop: ClosedLoop) -> float:
    """Position per reference at rest, in counts of true position per count. [-]

    Parameters
    ----------
    loop : ClosedLoop
        A stable loop.

    Returns
    -------
    float
        The value at z = 1. [-]

    Notes
    -----
    -c m^-1 b of the delta form, which has no pole at rest when the loop is stable.
    """
    matrices = loop_matrices(loop)
    x = np.linalg.solve(matrices.m, -matrices.b_reference)
    return float(matrices.c_position @ x) * loop.count_per_position


def step_shares(loop: ClosedLoop, poles: Complex) -> Real:
    """Share of each pole in the step response of the position.

    Parameters
    ----------
    loop : ClosedLoop
        A stable loop.
    poles : array of complex, shape (n,)
        Its poles as z - 1. [-]

    Returns
    -------
    array of float, shape (n,)
        |residue/(z - 1)| over the final value. [-]

    Notes
    -----
    Residue of R/(1 + L) at a pole is R/L'. Poles that coincide to rounding are summed with their
    neighbours, since their single residues mean nothing.
    """
    with np.errstate(all="ignore"):
        _, slope = _loop_gain_and_slope(loop, poles)
        g, _ = plant_response(loop.sampled, poles, loop.sampled.c_position)
        _, reference = _controller_at(loop.controller, poles)
        part = loop.scale * reference * g / slope / poles
    final = static_value(loop)
    # A pole the loop gain does not see (cancelled in the loop) has no slope there.
    part = np.where(np.isfinite(part), part, 0.0)
    total = part.copy()
    for i in range(len(poles)):
        close = np.abs(poles - poles[i]) < 1e-6 * max(abs(poles[i]), 1e-12)
        if close.sum() > 1:
            total[i] = part[close].sum()
    shares: Real = np.abs(total) / abs(final)
    return shares


# --- on the unit circle -------------------------------------------------------------------------


def circle(theta: Real) -> Complex:
    """delta = exp(j theta) - 1 without cancellation.

    Parameters
    ----------
    theta : array of float
        Angle per sample. [rad]

    Returns
    -------
    array of complex
        z - 1. [-]

    Notes
    -----
    exp(j t) - 1 = 2 j sin(t/2) exp(j t/2).
    """
    half = 0.5 * np.asarray(theta, dtype=float)
    value: Complex = 2j * np.sin(half) * np.exp(1j * half)
    return value


def loop_gain(loop: ClosedLoop, theta: Real) -> Complex:
    """Loop gain L on the unit circle.

    Parameters
    ----------
    loop : ClosedLoop
        Plant and controller.
    theta : array of float, shape (n,)
        Angle per sample, 0 < theta <= pi. [rad]

    Returns
    -------
    array of complex, shape (n,)
        L. [-]

    Notes
    -----
    Negative feedback: the loop's poles solve 1 + L = 0.
    """
    delta = circle(theta)
    g, _ = plant_response(loop.sampled, delta, loop.sampled.c_measured)
    position, _ = _controller_at(loop.controller, delta)
    value: Complex = loop.scale * position * g
    return value


def reference_response(loop: ClosedLoop, theta: Real) -> Complex:
    """True position over reference on the unit circle, count per count.

    Parameters
    ----------
    loop : ClosedLoop
        Plant and controller.
    theta : array of float, shape (n,)
        Angle per sample, 0 < theta <= pi. [rad]

    Returns
    -------
    array of complex, shape (n,)
        Response at the sampling instants. [-]

    Notes
    -----
    R G/(1 + L), position without the sensor's filter.
    """
    delta = circle(theta)
    position, reference = _controller_at(loop.controller, delta)
    plant = loop.sampled
    measured, _ = plant_response(plant, delta, plant.c_measured)
    true = measured
    if not np.array_equal(plant.c_measured, plant.c_position):
        true, _ = plant_response(plant, delta, plant.c_position)
    value: Complex = loop.scale * reference * true / (1.0 + loop.scale * position * measured)
    return value


def _grid(loop: ClosedLoop, poles: Complex) -> Real:
    """Angles that resolve every resonance: a coarse sweep, and clusters around poles."""
    eigen = np.linalg.eigvals(_balanced(loop.sampled.psi)).astype(complex)
    roots = np.roots(loop.controller.denominator).astype(complex)
    numerator = np.trim_zeros(loop.controller.position, "f")
    zeros = np.roots(numerator).astype(complex) if len(numerator) > 1 else np.zeros(0, complex)
    s = log_pole(np.concatenate([poles, eigen, roots, zeros]), 1.0)
    s = s[np.isfinite(s)]
    size = np.abs(s[np.abs(s) > 1e-12])
    lowest = max(1e-9, 0.02 * float(size.min())) if len(size) else 1e-6
    lowest = min(lowest, 1e-2)
    spread = np.sinh(np.linspace(-6.0, 6.0, 49)) / math.sinh(1.5)
    parts = [np.geomspace(lowest, math.pi, 300), np.linspace(lowest, math.pi, 100)]
    for value in s[s.imag > 0.0]:
        width = max(abs(value.real), 1e-9 * abs(value))
        parts.append(value.imag + width * spread)
    theta = np.concatenate(parts)
    theta = np.unique(theta[(theta >= lowest) & (theta <= math.pi)])
    return np.append(theta[theta < math.pi], math.pi)


def _crossings(f: Callable[[Real], Real], theta: Real, values: Real) -> Real:
    """All sign changes of f between grid points, to rounding."""
    sign = np.sign(values)
    index = np.flatnonzero((sign[:-1] * sign[1:] < 0) | (sign[:-1] == 0))
    if not len(index):
        return np.zeros(0)
    a, b = theta[index].copy(), theta[index + 1].copy()
    fa, fb = values[index].copy(), values[index + 1].copy()
    # Illinois variant of false position, with a bisection whenever it stalls
    for turn in range(70):
        width = b - a
        if np.all(width <= 4e-16 * b):
            break
        with np.errstate(all="ignore"):
            c = b - fb * width / (fb - fa)
        inside = (c > a) & (c < b) & np.isfinite(c)
        c = np.where(inside & (turn % 3 != 2), c, 0.5 * (a + b))
        fc = f(c)
        left = np.sign(fc) == np.sign(fa)
        new_fb = np.where(left, fb * np.where(turn % 3 == 2, 1.0, 0.5), fc)
        new_fa = np.where(left, fc, fa * np.where(turn % 3 == 2, 1.0, 0.5))
        a, b = np.where(left, c, a), np.where(left, b, c)
        fa, fb = new_fa, new_fb
        exact = fc == 0.0
        a, b = np.where(exact, c, a), np.where(exact, c, b)
    return 0.5 * (a + b)


def _zoom(
    f: Callable[[Real], Real], low: Real, high: Real, *, enough: float = math.inf
) -> tuple[Real, Real]:
    """Maxima of f, one in each bracket, by repeated subdivision; stops when all are enough."""
    fraction = np.linspace(0.0, 1.0, 9)
    a, b = low.copy(), high.copy()
    best = 0.5 * (a + b)
    value = np.zeros_like(best)
    for _ in range(14):
        t = a[:, None] + (b - a)[:, None] * fraction
        v = f(t.ravel()).reshape(t.shape)
        i = np.argmax(v, axis=1)
        rows = np.arange(len(a))
        best, value = t[rows, i], v[rows, i]
        a = t[rows, np.maximum(i - 1, 0)]
        b = t[rows, np.minimum(i + 1, 8)]
        if np.all((value > enough) | (b - a <= 1e-9 * np.maximum(b, 1e-300))):
            break
    return best, value


def _local_maxima(values: Real) -> NDArray[np.intp]:
    padded = np.concatenate([[-np.inf], values, [-np.inf]])
    inner = padded[1:-1]
    return np.flatnonzero((inner >= padded[:-2]) & (inner > padded[2:]))


def _brackets(theta: Real, index: NDArray[np.intp]) -> tuple[Real, Real]:
    return theta[np.maximum(index - 1, 0)], theta[np.minimum(index + 1, len(theta) - 1)]


def _with_extremes(
    f: Callable[[Real], Real], theta: Real, values: Real, *, last: int
) -> tuple[Real, Real]:
    """Add extremes near the level, up to grid point `last`, that the grid may have stepped over."""
    extra: list[Real] = []
    for sign in (1.0, -1.0):
        far = (sign * values >= 0.0) | (np.abs(values) > 0.7)
        facing = np.where(far, -np.inf, sign * values)
        index = _local_maxima(facing)
        index = index[np.isfinite(facing[index]) & (index < last)]
        if len(index):
            low, high = _brackets(theta, index)
            where, _ = _zoom(lambda t, s=sign: s * f(t), low, high, enough=0.0)  # type: ignore[misc]
            extra.append(where)
    if not extra:
        return theta, values
    points = np.concatenate(extra)
    merged = np.concatenate([theta, points])
    order = np.argsort(merged, kind="stable")
    return merged[order], np.concatenate([values, f(points)])[order]


def bandwidth_rad_per_s(loop: ClosedLoop, poles: Complex | None = None) -> float | None:
    """Lowest frequency at which |position/reference| falls to 1/sqrt 2 of its value at rest.

    Parameters
    ----------
    loop : ClosedLoop
        A stable loop.
    poles : array of complex or None
        Its poles as z - 1, if known. [-]

    Returns
    -------
    float or None
        Bandwidth [rad/s]; None when it does not fall so far below half the sample rate.

    Notes
    -----
    Of the sampled loop. Dips of anti-resonances between grid points are searched for.
    """
    if poles is None:
        poles = poles_delta(loop)
    level = abs(static_value(loop)) / math.sqrt(2.0)

    def f(t: Real) -> Real:
        value: Real = np.log(np.abs(reference_response(loop, t)) / level)
        return value

    theta = _grid(loop, poles)
    values = f(theta)
    below = np.flatnonzero(values < 0.0)
    last = int(below[0]) if len(below) else len(theta)
    theta, values = _with_extremes(f, theta, values, last=last)
    below = np.flatnonzero(values < 0.0)
    if not len(below):
        return None
    i = int(below[0])
    if i == 0:
        return float(theta[0]) / loop.sampled.period_s
    root = _crossings(f, theta[i - 1 : i + 1], values[i - 1 : i + 1])
    return float(root[0]) / loop.sampled.period_s


@dataclass(frozen=True, slots=True, kw_only=True)
class Crossing:
    """One gain crossing.

    Parameters
    ----------
    omega_rad_per_s : float
        Where |L| = 1. [rad/s]
    margin_rad : float
        180 deg + arg L, in (-pi, pi]. [rad]

    Notes
    -----
    Definition.
    """

    omega_rad_per_s: float
    margin_rad: float


def gain_crossings(loop: ClosedLoop, poles: Complex | None = None) -> tuple[Crossing, ...]:
    """All frequencies at which |L| = 1, rising.

    Parameters
    ----------
    loop : ClosedLoop
        Plant and controller.
    poles : array of complex or None
        Closed-loop poles as z - 1, if known. [-]

    Returns
    -------
    tuple of Crossing
        Rising frequency.

    Notes
    -----
    Grid clustered around every pole, extremes near the level searched, roots to rounding.
    """
    if poles is None:
        poles = poles_delta(loop)

    def f(t: Real) -> Real:
        value: Real = np.log(np.abs(loop_gain(loop, t)))
        return value

    theta = _grid(loop, poles)
    theta, values = _with_extremes(f, theta, f(theta), last=len(theta))
    roots = _crossings(f, theta, values)
    if not len(roots):
        return ()
    phase = np.angle(-loop_gain(loop, roots))
    return tuple(
        Crossing(omega_rad_per_s=float(t) / loop.sampled.period_s, margin_rad=float(p))
        for t, p in zip(roots, phase, strict=True)
    )


def gain_edges(loop: ClosedLoop, poles: Complex | None = None) -> tuple[float, ...]:
    """Factors on the loop gain at which L passes through -1, rising, each confirmed by the poles.

    Parameters
    ----------
    loop : ClosedLoop
        A stable loop.
    poles : array of complex or None
        Closed-loop poles as z - 1, if known. [-]

    Returns
    -------
    tuple of float
        The nearest edge below 1 and the nearest above 1, where they exist. [-]

    Notes
    -----
    Candidates are the crossings of the negative real axis; the loop must be stable on the near
    side and unstable on the far side.
    """
    if poles is None:
        poles = poles_delta(loop)

    def f(t: Real) -> Real:
        value = loop_gain(loop, t)
        ratio: Real = value.imag / np.abs(value)
        return ratio

    theta = _grid(loop, poles)
    inner = theta[theta < math.pi]
    roots = _crossings(f, inner, f(inner))
    points = np.append(roots, math.pi)
    value = loop_gain(loop, points)
    aligned = (value.real < 0.0) & (np.abs(value.imag) < 1e-6 * np.abs(value.real))
    factors = np.unique(-1.0 / value.real[aligned])
    edges: list[float] = []
    for side in (-1, 1):
        candidates = factors[factors < 1.0][::-1] if side < 0 else factors[factors > 1.0]
        for g in candidates:
            slip = 1e-4 * min(1.0, abs(math.log(g)))
            near, far = g ** (1.0 - 1e-3), g * (1.0 + side * max(slip, 1e-6))
            if is_stable(loop, gain=float(near)) and not is_stable(loop, gain=float(far)):
                edges.append(float(g))
                break
    return tuple(edges)


def peak_sensitivity(loop: ClosedLoop, poles: Complex | None = None) -> float:
    """Largest |1/(1 + L)| on the unit circle.

    Parameters
    ----------
    loop : ClosedLoop
        A stable loop.
    poles : array of complex or None
        Closed-loop poles as z - 1, if known. [-]

    Returns
    -------
    float
        Peak. [-]

    Notes
    -----
    Local maxima of the clustered grid, refined.
    """
    if poles is None:
        poles = poles_delta(loop)

    def f(t: Real) -> Real:
        value: Real = -np.log(np.abs(1.0 + loop_gain(loop, t)))
        return value

    theta = _grid(loop, poles)
    values = f(theta)
    index = _local_maxima(values)
    index = index[np.argsort(-values[index])][:6]
    low, high = _brackets(theta, index)
    _, best = _zoom(f, low, high)
    return float(math.exp(best.max()))


_MANY_SAMPLES = 60
"""Delay margins beyond so many samples are confirmed without assembling the loop's matrix."""


def _pole_near(loop: ClosedLoop, angle: float) -> float | None:
    """|z|^2 - 1 of the closed-loop pole nearest to a point of the unit circle; None if none is."""
    point = circle(np.array([angle]))
    start = point
    for _ in range(40):
        value, slope = _loop_gain_and_slope(loop, point)
        step = (1.0 + value) / slope
        point = point - step
        if not np.all(np.isfinite(point)) or np.abs(point - start)[0] > 0.2 * angle:
            return None
        if np.abs(step)[0] < 1e-14:
            return float(_outside(point)[0])
    return None


def delay_margin_s(loop: ClosedLoop, crossings: tuple[Crossing, ...] | None = None) -> float | None:
    """Extra delay that makes the loop unstable.

    Parameters
    ----------
    loop : ClosedLoop
        A stable loop.
    crossings : tuple of Crossing or None
        Its gain crossings, if known.

    Returns
    -------
    float or None
        Extra delay [s]; None when the loop has no gain crossing.

    Notes
    -----
    Least ((180 deg + arg L) mod 360 deg)/w, confirmed by the poles of the loop that is sampled
    anew with the longer delay; where the poles disagree, the edge is found from them by bisection.
    A margin of very many samples is confirmed by the one pole that reaches the circle, and told as
    none when that pole does not.
    """
    if crossings is None:
        crossings = gain_crossings(loop)
    if not crossings:
        return None
    value = min((c.margin_rad % (2.0 * math.pi)) / c.omega_rad_per_s for c in crossings)

    critical = min(crossings, key=lambda c: (c.margin_rad % (2.0 * math.pi)) / c.omega_rad_per_s)
    plant = loop.sampled

    def longer(extra_s: float) -> ClosedLoop:
        return replace(loop, sampled=sample(plant.space, plant.period_s, plant.delay_s + extra_s))

    def stable(extra_s: float) -> bool:
        return is_stable(longer(extra_s))

    if value > _MANY_SAMPLES * plant.period_s:
        # The stored outputs would make a large matrix. The pole that reaches the circle is followed
        # by itself: 1 + L knows the delay as a factor, not as states.
        angle = critical.omega_rad_per_s * plant.period_s
        inner, outer = (_pole_near(longer(x * value), angle) for x in (0.999, 1.001))
        if inner is not None and outer is not None and inner < 0.0 < outer:
            return value
        return None
    if stable(0.999 * value) and not stable(1.001 * value):
        return value
    step = min(0.25 * loop.sampled.period_s, 0.1 * value)
    low = 0.0
    while low < 4.0 * value:
        if not stable(low + step):
            high = low + step
            for _ in range(40):
                middle = 0.5 * (low + high)
                if stable(middle):
                    low = middle
                else:
                    high = middle
            return low
        low += step
        step *= 1.1
    return None


def loop_figures(
    loop: ClosedLoop, pair: tuple[complex, complex] | None, poles: Complex | None = None
) -> LoopFigures:
    """All figures of a sampled loop.

    Parameters
    ----------
    loop : ClosedLoop
        Plant and controller.
    pair : tuple of complex or None
        The placed pair as z - 1. [-]
    poles : array of complex or None
        Closed-loop poles as z - 1, if known. [-]

    Returns
    -------
    LoopFigures
        Figures; margins and bandwidth None when the loop is unstable.

    Notes
    -----
    Definitions in docs/definitions.md.
    """
    if poles is None:
        poles = poles_delta(loop)
    period = loop.sampled.period_s
    damping, omega = (None, None) if pair is None else pair_figures(pair, period)
    frequency = None if omega is None else omega / (2.0 * math.pi)
    if damping is not None and math.isnan(damping):
        damping = None
    zs = tuple(complex(1.0 + p) for p in poles)
    if not bool(np.all(_outside(poles) < -1e-14)):
        return LoopFigures(
            damping_ratio=damping,
            natural_frequency_hz=frequency,
            bandwidth_hz=None,
            poles_z=zs,
            stable=False,
            phase_margin_deg=None,
            gain_margin_db=None,
            gain_reduction_db=None,
            delay_margin_s=None,
            peak_sensitivity=None,
            crossover_hz=None,
        )
    crossings = gain_crossings(loop, poles)
    edges = gain_edges(loop, poles)
    rise = [20.0 * math.log10(g) for g in edges if g > 1.0]
    fall = [-20.0 * math.log10(g) for g in edges if g < 1.0]
    width = bandwidth_rad_per_s(loop, poles)
    last = crossings[-1].omega_rad_per_s if crossings else None
    return LoopFigures(
        damping_ratio=damping,
        natural_frequency_hz=frequency,
        bandwidth_hz=None if width is None else width / (2.0 * math.pi),
        poles_z=zs,
        stable=True,
        phase_margin_deg=min(abs(math.degrees(c.margin_rad)) for c in crossings)
        if crossings
        else None,
        gain_margin_db=min(rise) if rise else None,
        gain_reduction_db=min(fall) if fall else None,
        delay_margin_s=delay_margin_s(loop, crossings),
        peak_sensitivity=peak_sensitivity(loop, poles),
        crossover_hz=None if last is None else last / (2.0 * math.pi),
    )


# --- norms and static figures -------------------------------------------------------------------


def rms_gain(matrices: LoopMatrices, row: Real, direct: float) -> float:
    """Root-mean-square of an output per unit white noise in counts at the sensor.

    Parameters
    ----------
    matrices : LoopMatrices
        A stable loop.
    row : array of float, shape (n,)
        Output row. [unit per state]
    direct : float
        Direct part from the noise. [unit per count]

    Returns
    -------
    float
        Square root of the sum of the squared impulse response. [unit per count]

    Notes
    -----
    Doubling (Smith 1968, from memory): P <- P + A P A^T, A <- A A.
    """
    a = np.eye(matrices.m.shape[0]) + matrices.m
    p = np.outer(matrices.b_noise, matrices.b_noise)
    for _ in range(64):
        step = a @ p @ a.T
        p = p + step
        a = a @ a
        if float(np.abs(step).max()) <= 1e-18 * float(np.abs(p).max()):
            break
    return math.sqrt(max(float(row @ p @ row) + direct * direct, 0.0))


def stiffness_at_rest(loop: ClosedLoop) -> float:
    """Force over position that a disturbance meets at rest; infinite with integral action.

    Parameters
    ----------
    loop : ClosedLoop
        A stable loop.

    Returns
    -------
    float
        Stiffness. [N/m or N m/rad]

    Notes
    -----
    1/(-c m^-1 b_force) of the delta form. Integral action is a controller pole at z = 1 exactly,
    which the exact coefficients in delta show as a 0.
    """
    control = loop.controller
    if control.denominator[-1] == 0.0 and control.position[-1] != 0.0:
        return math.inf
    matrices = loop_matrices(loop)
    x = np.linalg.solve(matrices.m, -matrices.b_force)
    return 1.0 / abs(float(matrices.c_position @ x))


def linear_step(loop: ClosedLoop, samples: int) -> tuple[Real, Real]:
    """Response of the linear loop to a reference step of one count, at the sampling instants.

    Parameters
    ----------
    loop : ClosedLoop
        Plant and controller.
    samples : int
        Number of samples.

    Returns
    -------
    states : array of float, shape (samples, n)
        Plant states at t = kT. [SI]
    effort : array of float, shape (samples,)
        The controller's output computed at t = kT, in plant units. [N or V]

    Notes
    -----
    Recursion of the delta-form matrices from rest.
    """
    matrices = loop_matrices(loop)
    n = loop.sampled.psi.shape[0]
    size = matrices.m.shape[0]
    x = np.zeros(size)
    states = np.zeros((samples, n))
    effort = np.zeros(samples)
    m, b, c, d = (
        matrices.m,
        matrices.b_reference,
        matrices.c_effort,
        matrices.d_effort_reference,
    )
    for k in range(samples):
        states[k] = x[:n]
        effort[k] = c @ x + d
        x = x + (m @ x + b)
    return states, effort


# --- following a pair of poles ------------------------------------------------------------------


def follow_pair(
    designed: ClosedLoop, built: ClosedLoop, pair: tuple[complex, complex]
) -> tuple[complex, complex]:
    """The two poles of `built` that continue a pair of `designed`.

    Parameters
    ----------
    designed, built : ClosedLoop
        Same plant; controllers of the same order.
    pair : tuple of complex
        Two poles of `designed`, as z - 1. [-]

    Returns
    -------
    tuple of complex
        Two poles of `built`, as z - 1. [-]

    Notes
    -----
    The controller's coefficients go from designed to built; a step is halved until every pole's
    match is unmistakable (moved less than a quarter of its distance from the nearest stranger).
    """
    a, b = designed.controller, built.controller

    def between(t: float) -> ClosedLoop:
        return replace(
            built,
            controller=Controller(
                reference=(1.0 - t) * a.reference + t * b.reference,
                position=(1.0 - t) * a.position + t * b.position,
                denominator=(1.0 - t) * a.denominator + t * b.denominator,
            ),
        )

    current = np.array(pair)
    t, step = 0.0, 1.0
    while t < 1.0:
        target = min(1.0, t + step)
        poles = poles_delta(built if target == 1.0 else between(target))
        chosen, sure = _match(current, poles)
        if sure or step < 1e-4:
            current = chosen
            t = target
            step *= 2.0
        else:
            step *= 0.5
    return complex(current[0]), complex(current[1])


def _match(pair: Complex, poles: Complex) -> tuple[Complex, bool]:
    """The two poles nearest to a pair, as a set: sum and difference are matched together."""
    mean = 0.5 * (pair[0] + pair[1])
    cost = np.minimum(np.abs(poles - pair[0]), np.abs(poles - pair[1]))
    order = np.argsort(cost, kind="stable")
    first = poles[order[0]]
    if abs(first.imag) > 0.0:
        second = first.conjugate()
        used = (np.abs(poles - first) == 0.0) | (np.abs(poles - second) <= 1e-12 * abs(first))
        strangers = poles[~used]
    else:
        real = [p for p in poles[order[1:]] if p.imag == 0.0]
        if not real:
            return pair, False
        second = real[0]
        keep = np.ones(len(poles), dtype=bool)
        for value in (first, second):
            keep[int(np.flatnonzero((poles == value) & keep)[0])] = False
        strangers = poles[keep]
    moved = max(
        min(
            max(abs(first - pair[0]), abs(second - pair[1])),
            max(abs(first - pair[1]), abs(second - pair[0])),
        ),
        0.0,
    )
    split = abs(pair[0] - pair[1])
    if split < 0.05 * abs(mean):
        # near the double pole each moves like the square root of a change: judge their mean
        moved = abs(0.5 * (first + second) - mean) + 0.0 * split
    room = float(np.abs(strangers - mean).min()) if len(strangers) else math.inf
    for p in pair:
        if len(strangers):
            room = min(room, float(np.abs(strangers - p).min()))
    return np.array([first, second]), bool(moved < 0.25 * room)
