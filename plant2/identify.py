"""From a log to a plant: what a free decay or an excited motion tells, and what it cannot tell.

Rules of this file:

- Every estimate is an interval for 95 %, or it is absent with a reason and the measurement that
  would tell.
- A kind of damping is named only where the data ask for it; what lies between is undecided.
- A log that tells nothing is refused with the reason; nothing is guessed.
- "Position" stands for metre, radian or count, as in the log; rates of friction and drag are
  divided by the mass, which a free decay cannot tell.
- numpy only, so that a start costs little.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.polynomial import chebyshev
from numpy.typing import NDArray

from plant2.errors import Plant2Error
from plant2.logs import Log, in_units_of
from plant2.loopfile import Loop
from plant2.plant import Plant, StateSpace, state_space
from plant2.quantity import format_si
from plant2.sampled import SampledPlant, propagate, sample, split_delay
from plant2.solve import Fit, least_squares

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Kinds = tuple[str, ...]
Pair = tuple[float, float]

KINDS_OF_DAMPING: Kinds = ("viscous", "coulomb", "quadratic")
"""Kinds of damping that are told apart."""

CLEAR = 10.0
"""A term is added when it lowers the information criterion by more than this."""

DOUBTFUL = 2.0
"""A term that lowers it by more than this, but not clearly, is undecided."""

AVERAGED_FROM_CYCLES = 150.0
"""From this many cycles on, amplitudes of blocks are fitted, before single samples."""

MOST_WITH_FRICTION = 6000
"""Friction under a measured input is looked for in logs of up to this many samples."""

MOST_DELAY = 40
"""Delays up to this many samples are looked for."""

_Z95 = 1.959963984540054
_POINTS_PER_CYCLE = 12.0
_TIME_NODES = 20
_SIZE_NODES = 16
_STRETCH = 1.15
_LOOKED_AT = 65_536
_SEARCHED = 20_000
_BLIND = 1e-12


class IdentificationError(Plant2Error):
    """A log does not tell what is asked; the rule says why and the remedy what to log instead."""


# --------------------------------------------------------------------------------------------------
# What comes out


@dataclass(frozen=True, slots=True, kw_only=True)
class Estimate:
    """A value and its interval for 95 %.

    Parameters
    ----------
    value : float
        Best estimate. [unit of the quantity]
    low : float
        Lower end of the interval. [unit of the quantity]
    high : float
        Upper end of the interval. [unit of the quantity]
    """

    value: float
    low: float
    high: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Candidate:
    """One mix of dampings and how well it explains a free decay.

    Parameters
    ----------
    kinds : tuple of str
        Some of `KINDS_OF_DAMPING`; empty for a motion that does not decay.
    parameters : int
        Numbers that were fitted.
    cost : float
        Sum of squared residuals. [square of the position's unit]
    criterion : float
        ``n ln(cost/n) + parameters ln n``; the least explains best. [-]
    """

    kinds: Kinds
    parameters: int
    cost: float
    criterion: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Identification:
    """What a log tells about a plant, and what it does not.

    Parameters
    ----------
    kind : str
        "ring_down" for a free decay, "response" for a motion under a measured input.
    position_unit : str
        "m", "rad" or "count", as the log has it.
    natural_frequency_hz : Estimate or None
        Undamped natural frequency. [Hz]
    damping_ratio : Estimate or None
        Of the viscous part. [-]
    mass : Estimate or None
        [kg or kg m^2]
    damping : Estimate or None
        Viscous. [N s/m or N m s/rad]
    stiffness : Estimate or None
        [N/m or N m/rad]
    delay_s : Estimate or None
        From the sampling instant to the instant the input acts. [s]
    friction : Estimate or None
        Coulomb level. [N or N m]
    unknown : tuple of pairs of str
        Names of this class that are None, each with its reason and what would tell.
    damping_kinds : tuple of str
        Kinds of damping that the data ask for.
    undecided : tuple of str
        Kinds that the data neither ask for nor exclude.
    candidates : tuple of Candidate
        All mixes that were tried, the best criterion first; empty where none were.
    decay_rate_per_s : Estimate or None
        Viscous damping over twice the mass. [1/s]
    friction_acceleration : Estimate or None
        Coulomb level over mass. [position/s^2]
    drag_per_position : Estimate or None
        Quadratic drag over mass. [1/position]
    offset : Estimate or None
        Position of rest. [position]
    release_s : Estimate or None
        When a held mass was let go, from the first sample. [s]
    gain : Estimate or None
        Acceleration per unit of the input. [position/s^2 per `input_unit`]
    input_name : str
        Column that drives: "force", "current" or "output"; empty for a free decay.
    input_unit : str
        Its unit.
    first_s, last_s : float
        The part of the log that was fitted, from its first sample. [s]
    cycles : float
        Cycles in that part. [-]
    residual_rms : float
        What the model leaves, per sample. [position]
    noise_rms : float
        Noise of the position, per sample. [position]
    rate_hz : float
        Samples per second. [Hz]
    samples : int
        Rows of the log.
    complaints : tuple of str
        What is odd about the log or the fit.
    """

    kind: str
    position_unit: str
    natural_frequency_hz: Estimate | None = None
    damping_ratio: Estimate | None = None
    mass: Estimate | None = None
    damping: Estimate | None = None
    stiffness: Estimate | None = None
    delay_s: Estimate | None = None
    friction: Estimate | None = None
    unknown: tuple[tuple[str, str], ...] = ()
    damping_kinds: Kinds = ()
    undecided: Kinds = ()
    candidates: tuple[Candidate, ...] = ()
    decay_rate_per_s: Estimate | None = None
    friction_acceleration: Estimate | None = None
    drag_per_position: Estimate | None = None
    offset: Estimate | None = None
    release_s: Estimate | None = None
    gain: Estimate | None = None
    input_name: str = ""
    input_unit: str = ""
    first_s: float
    last_s: float
    cycles: float
    residual_rms: float
    noise_rms: float
    rate_hz: float
    samples: int
    complaints: tuple[str, ...] = ()


# --------------------------------------------------------------------------------------------------
# Free decay: amplitudes and turning points


def amplitude_after(
    time_s: float | Real,
    *,
    amplitude: float,
    decay_rate_per_s: float = 0.0,
    friction_loss_per_s: float = 0.0,
    drag_rate: float = 0.0,
) -> Real:
    """Amplitude of a free decay with viscous, Coulomb and quadratic damping together.

    Parameters
    ----------
    time_s : float or array of float, any shape
        Times, at least 0. [s]
    amplitude : float
        Amplitude at time 0, at least 0. [position]
    decay_rate_per_s : float
        Viscous: damping over twice the mass, at least 0. [1/s]
    friction_loss_per_s : float
        Coulomb: ``2 F/(pi w)`` with F the friction over mass, at least 0. [position/s]
    drag_rate : float
        Quadratic: ``4 Q w/(3 pi)`` with Q the drag over mass, at least 0. [1/(position s)]

    Returns
    -------
    array of float, the shape of time_s
        Amplitudes; 0 from where the motion ends. [position]

    Notes
    -----
    ``a' = -(beta + alpha a + gamma a^2)`` by first-order averaging (Nayfeh and Mook, *Nonlinear
    Oscillations*, from memory). With ``D = alpha^2 - 4 beta gamma`` and ``w = tanh(sqrt(D) t/2)/
    sqrt(D)``, the tangent for D below 0: ``a = (a0 (1 - alpha w) - 2 beta w)/(1 + (2 gamma a0 +
    alpha) w)``; own derivation.

    Examples
    --------
    >>> round(float(amplitude_after(2.0, amplitude=1.0, friction_loss_per_s=0.25)), 12)
    0.5
    """
    t = np.asarray(time_s, dtype=np.float64)
    alpha, beta, gamma = decay_rate_per_s, friction_loss_per_s, drag_rate
    discriminant = alpha * alpha - 4.0 * beta * gamma
    root = math.sqrt(abs(discriminant))
    half = 0.5 * root * t
    ended = np.zeros(t.shape, dtype=bool)
    if discriminant >= 0.0:
        ratio = np.tanh(half) / root if root > 0.0 else 0.5 * t
    else:
        ended = half >= 0.5 * math.pi
        ratio = np.tan(np.where(ended, 0.0, half)) / root
    # Near a vanishing discriminant tanh(x)/x is 1 but its factors are not numbers any more.
    ratio = np.where(half < 1e-9, 0.5 * t, ratio)
    above = amplitude * (1.0 - alpha * ratio) - 2.0 * beta * ratio
    below = 1.0 + (2.0 * gamma * amplitude + alpha) * ratio
    return np.where(ended, 0.0, np.maximum(above / below, 0.0))


def turning_points(
    *,
    amplitude: float,
    natural_frequency_rad_per_s: float,
    decay_rate_per_s: float = 0.0,
    friction_acceleration: float = 0.0,
    count: int = 1_000_000,
) -> Real:
    """Where a mass with viscous damping and Coulomb friction turns, until it stands.

    Parameters
    ----------
    amplitude : float
        Position at which it is let go, from the middle of the dead zone. [position]
    natural_frequency_rad_per_s : float
        Undamped, above the decay rate. [rad/s]
    decay_rate_per_s : float
        Damping over twice the mass, at least 0. [1/s]
    friction_acceleration : float
        Friction over mass, at least 0. [position/s^2]
    count : int
        Most half swings.

    Returns
    -------
    array of float, shape (k,)
        Signed positions, the start first; the last is where it stands, if it does within `count`
        half swings. They follow each other by ``pi/wd``. [position]

    Raises
    ------
    IdentificationError
        If the motion does not swing, or would swing for ever and `count` is not given.

    Notes
    -----
    ``|X'| = rho (|X| - xc) - xc`` with ``xc = F/w0^2`` and ``rho = exp(-alpha pi/wd)``; stands
    where ``|X| <= xc``. Exact (Markho, ASME J. Dyn. Sys. 102 (1980), from memory).

    Examples
    --------
    >>> turning_points(amplitude=5.0, natural_frequency_rad_per_s=2.0, friction_acceleration=4.0)
    array([ 5., -3.,  1.])
    """
    omega, alpha = natural_frequency_rad_per_s, decay_rate_per_s
    if not omega > alpha >= 0.0:
        raise IdentificationError(
            "decay_rate_per_s", alpha, "1/s", "must be at least 0 and below the frequency", ""
        )
    dead = friction_acceleration / omega**2
    keep = math.exp(-alpha * math.pi / math.sqrt(omega**2 - alpha**2))
    if dead == 0.0 and count == 1_000_000:
        raise IdentificationError(
            "friction_acceleration", 0.0, "", "without friction it never stands", "give a count"
        )
    found = [amplitude]
    size, side = abs(amplitude), math.copysign(1.0, amplitude)
    while size > dead and len(found) <= count:
        size, side = keep * (size - dead) - dead, -side
        found.append(side * size)
    return np.array(found)


def _closed_swings(
    t: Real, x0: float, t0: float, omega: float, alpha: float, friction: float
) -> Real:
    """Exact motion with viscous damping and friction, let go at x0 at t0."""
    if alpha > 0.97 * omega:
        return np.full(t.shape, np.inf)
    damped = math.sqrt(omega**2 - alpha**2)
    half = math.pi / damped
    dead = friction / omega**2
    since = t - t0
    number = np.maximum(np.floor(since / half), 0.0)
    keep = math.exp(-alpha * half)
    swings = np.arange(float(number.max(initial=0.0)) + 1.0)
    if alpha * half > 1e-12:
        summed = np.expm1(-alpha * half * swings) / math.expm1(-alpha * half)
    else:
        summed = swings
    sizes = abs(x0) * keep**swings - dead * (1.0 + keep) * summed
    still = np.flatnonzero(sizes <= dead) if dead > 0.0 else np.zeros(0, dtype=np.int64)
    sides = np.where(swings % 2.0 == 0.0, 1.0, -1.0) * math.copysign(1.0, x0)
    which = number.astype(np.int64)
    since = since - half * number
    phase = damped * since
    shape = np.exp(-alpha * since) * (np.cos(phase) + alpha / damped * np.sin(phase))
    out = sides[which] * (dead + (sizes[which] - dead) * shape)
    if still.size:
        stop = int(still[0])
        out = np.where(which >= stop, sides[stop] * sizes[stop], out)
    return out


@lru_cache(maxsize=1)
def _nodes() -> tuple[Real, Real, Real, Real, Real, Real]:
    """Chebyshev machinery for half swings.

    Nodes in time; values there to coefficients; values to integrals at the nodes, over a width of
    1; coefficients to those of the derivative; nodes in size; values there to coefficients.
    """
    times = -np.cos(np.pi * np.arange(_TIME_NODES) / (_TIME_NODES - 1))
    to_coefficients = np.linalg.inv(chebyshev.chebvander(times, _TIME_NODES - 1))
    integrals = np.empty((_TIME_NODES, _TIME_NODES))
    derivative = np.zeros((_TIME_NODES, _TIME_NODES))
    for column in range(_TIME_NODES):
        once = chebyshev.chebint(to_coefficients[:, column], lbnd=-1.0)
        integrals[:, column] = 0.5 * chebyshev.chebval(times, once)
        derivative[:-1, column] = chebyshev.chebder(np.eye(_TIME_NODES)[column])
    sizes = -np.cos(np.pi * (np.arange(_SIZE_NODES) + 0.5) / _SIZE_NODES)
    sizes_to_coefficients = np.linalg.inv(chebyshev.chebvander(sizes, _SIZE_NODES - 1))
    return (
        np.asarray(times),
        np.asarray(to_coefficients),
        integrals,
        derivative,
        np.asarray(sizes),
        np.asarray(sizes_to_coefficients),
    )


def _drag_swings(
    t: Real, x0: float, t0: float, omega: float, alpha: float, friction: float, drag: float
) -> Real:
    """Motion with viscous damping, friction and quadratic drag, let go at x0 at t0.

    Between two turning points nothing changes sign, so a half swing is a smooth function of time
    and of the logarithm of its size. It is solved once, by Picard's iteration on the integral with
    the exact response of the linear part, for a few sizes; all swings follow from these.
    """
    nodes, to_coefficients, integrals, derivative, size_nodes, size_coefficients = _nodes()
    if alpha > 0.97 * omega:
        return np.full(t.shape, np.inf)
    damped = math.sqrt(omega**2 - alpha**2)
    horizon = _STRETCH * math.pi / damped
    dead = friction / omega**2
    largest = abs(x0)
    end = float(t.max(initial=t0)) - t0
    least = 0.7 * float(
        amplitude_after(
            max(end, 0.0),
            amplitude=largest,
            decay_rate_per_s=alpha,
            friction_loss_per_s=2.0 * friction / (math.pi * omega),
            drag_rate=4.0 * drag * omega / (3.0 * math.pi),
        )
    )
    least = min(max(least, 1.02 * dead, 1e-6 * largest), 0.98 * largest)
    log_low, log_high = math.log(least), math.log(largest)
    sizes = np.exp(0.5 * (log_low + log_high) + 0.5 * (log_high - log_low) * size_nodes)

    # xi = x/size, let go at 1 and moving down: xi'' = -w0^2 xi - 2 a xi' + F/size + Q size xi'^2.
    centre, bend = dead / sizes, drag * sizes
    time = 0.5 * horizon * (nodes + 1.0)
    grow = np.exp(complex(-alpha, damped) * time)[:, np.newaxis]
    shrink = horizon / grow
    free = -(1.0 - centre) * (omega**2 / damped) * grow.imag
    speed = free
    forced = np.zeros_like(grow * speed)
    for _ in range(80):
        forced = grow * (integrals @ (shrink * (bend * speed * speed)))
        new = free + forced.real - alpha / damped * forced.imag
        change = float(np.max(np.abs(new - speed)))
        speed = new
        if change < 1e-13 * omega:
            break
        if not change < 1e3 * omega:
            # So much drag that the iteration does not settle: no motion that rings.
            return np.full(t.shape, np.inf)
    place = centre + (1.0 - centre) * (grow.real + alpha / damped * grow.imag)
    place = place + forced.imag / damped
    place_c, speed_c = to_coefficients @ place, to_coefficients @ speed

    # The half swing ends where the speed is zero again.
    slope_c = derivative @ speed_c
    orders = np.arange(_TIME_NODES)[:, np.newaxis]
    at = np.full(sizes.size, 2.0 / _STRETCH - 1.0)
    for _ in range(8):
        basis = np.cos(orders * np.arccos(at))
        move = (basis * speed_c).sum(axis=0) / (basis * slope_c).sum(axis=0)
        at = np.minimum(np.maximum(at - move, -0.2), 1.0)
        if float(np.abs(move).max()) < 1e-12:
            break
    left = -(np.cos(orders * np.arccos(at)) * place_c).sum(axis=0)
    kept_c = size_coefficients @ left
    last_c = size_coefficients @ (0.5 * horizon * (at + 1.0))

    starts, logs = [0.0], [log_high]
    width = log_high - log_low
    kept, last = kept_c.tolist(), last_c.tolist()
    while starts[-1] < end and logs[-1] > log_low:
        u = 2.0 * (logs[-1] - log_low) / width - 1.0
        starts.append(starts[-1] + _clenshaw(u, last))
        logs.append(logs[-1] + math.log(max(_clenshaw(u, kept), 1e-9)))
    begin = np.array(starts)
    log_size = np.array(logs)
    scaled = np.clip(2.0 * (log_size - log_low) / width - 1.0, -1.0, 1.0)
    shapes = chebyshev.chebvander(scaled, _SIZE_NODES - 1) @ (place_c @ size_coefficients.T).T
    sides = np.where(np.arange(begin.size) % 2 == 0, 1.0, -1.0) * math.copysign(1.0, x0)
    weights = sides * np.exp(log_size)

    since = t - t0
    which = np.clip(np.searchsorted(begin, since, side="right") - 1, 0, begin.size - 1)
    along = np.clip(2.0 * (since - begin[which]) / horizon - 1.0, -1.2, 1.0)
    basis = chebyshev.chebvander(along, _TIME_NODES - 1)
    out = weights[which] * np.einsum("km,km->k", shapes[which], basis)
    # Below the least size the motion is as good as over; the data end before.
    return np.asarray(np.where(log_size[which] <= log_low, weights[which], out))


def _clenshaw(u: float, coefficients: Sequence[float]) -> float:
    later = last = 0.0
    for c in reversed(coefficients[1:]):
        later, last = 2.0 * u * later - last + c, later
    return u * later - last + coefficients[0]


# --------------------------------------------------------------------------------------------------
# Free decay: which part of the log, and where it rings


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Decay:
    """The freely decaying part of a log on an even grid; nan where samples are missing."""

    first: int
    values: Real
    period_s: float
    held_at: float | None
    let_go: int | None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Blocks:
    """Amplitudes of the fundamental, block by block."""

    centres_s: Real
    width_s: float
    samples: int
    phasors: Complex
    offsets: Real
    variances: Real


def _grid_of(log: Log, values: Real) -> Real:
    """Values by sample number, nan where none was logged."""
    count = int(log.index[-1]) + 1
    if count == log.samples:
        return np.asarray(values)
    if count > 4 * log.samples:
        raise IdentificationError(
            log.source or "log",
            float(count - log.samples),
            "samples missing",
            f"only {log.samples} are there",
            "log without gaps",
        )
    grid = np.full(count, np.nan)
    grid[log.index] = values
    return grid


def _difference_noise(values: Real) -> float:
    """Noise by third differences, blind to slow motion."""
    third = np.diff(values, 3)
    third = third[np.isfinite(third)]
    if third.size == 0:
        return 0.0
    return 1.4826 * float(np.median(np.abs(third))) / math.sqrt(20.0)


def _decay_of(log: Log) -> _Decay:
    """Find the freely decaying part: after a hold, after a knock, or all of the log."""
    values = _grid_of(log, log.position)
    start = 0
    for column in (log.output_code, log.current_a, log.force):
        if column is not None:
            changes = np.flatnonzero(np.diff(column) != 0.0)
            if changes.size:
                start = max(start, int(log.index[changes[-1] + 1]))
    if values.size - start < 24:
        raise IdentificationError(
            log.source or "log",
            float(values.size - start),
            "samples",
            "too few without a change of the input for a free decay",
            "let it ring for several cycles with a constant output",
        )
    values = values[start:]
    period = 1.0 / log.rate_hz
    step = log.position_step or 0.0
    noise = max(_difference_noise(values), 0.3 * step)
    reach = float(np.nanmax(values) - np.nanmin(values))
    for held in (4096, 1024, 256, 64, 16):
        if held > values.size // 2:
            continue
        head = values[:held]
        level = float(np.nanmedian(head))
        spread = 1.4826 * float(np.nanmedian(np.abs(head - level)))
        if spread > max(3.0 * noise, 0.02 * reach):
            continue
        away = np.abs(values - level) > 6.0 * max(spread, noise)
        # Five in a row: a single outlier is no release.
        run = away[:-4] & away[1:-3] & away[2:-2] & away[3:-1] & away[4:]
        left = np.flatnonzero(run)
        if left.size == 0 or left[0] < held // 2:
            continue
        let_go = int(left[0])
        rest = float(np.nanmean(values[let_go:]))
        largest = float(np.nanmax(np.abs(values[let_go:] - rest)))
        if abs(level - rest) < 0.2 * largest:
            # At rest before: something knocked it, and it is free from its first peak on.
            peak = let_go + int(np.nanargmax(np.abs(values[let_go:] - rest)))
            if peak > let_go + 0.8 * (values.size - let_go):
                raise IdentificationError(
                    log.source or "log",
                    (start + peak) * period,
                    "s to the largest swing",
                    "the swing grows to the end, so that something drives it, or the log ends too "
                    "early",
                    "open the loop before the mass is let go, and log until it rests",
                )
            return _Decay(
                first=start + peak,
                values=values[peak:],
                period_s=period,
                held_at=None,
                let_go=None,
            )
        return _Decay(
            first=start + let_go,
            values=values[let_go:],
            period_s=period,
            held_at=level,
            let_go=start + let_go,
        )
    return _Decay(first=start, values=values, period_s=period, held_at=None, let_go=None)


def _filled(values: Real) -> Real:
    """Missing samples joined by straight lines, for a first look at the spectrum only."""
    bad = ~np.isfinite(values)
    if not bad.any():
        return values
    at = np.arange(values.size)
    return np.interp(at, at[~bad], values[~bad])


def _ringing_of(values: Real) -> tuple[float, float]:
    """Frequency of the clearest line of a decay and how far it stands above the noise.

    Returns radians per sample, and the power over what noise alone would reach; at most 1 there.
    """
    best = (0.0, 0.0)
    length = values.size
    while length >= 32:
        piece = values[:length] - float(values[:length].mean())
        # A decay is strongest at its start: the window falls, but does not rise.
        piece = piece * np.cos(0.5 * np.pi * np.arange(length) / length) ** 2
        size = 1 << (length - 1).bit_length()
        power = np.abs(np.fft.rfft(piece, size)) ** 2
        lowest = max(2, math.ceil(1.5 * size / length))
        inner = power[lowest:-1]
        if inner.size >= 3:
            peaks = (inner[1:-1] >= inner[:-2]) & (inner[1:-1] > inner[2:])
            at = np.flatnonzero(peaks) + 1
            if at.size:
                top = int(at[np.argmax(inner[at])])
                # Drift leaks into all low bins: the surroundings of a line count, too.
                near = inner[(top + lowest) // 2 : 2 * (top + lowest)]
                floor = float(max(np.median(inner), np.median(near))) / math.log(2.0)
                limit = math.log(inner.size) + 12.0
                above = float(inner[top]) / max(limit * floor, 1e-300)
                if above > best[1]:
                    left, mid, right = (math.log(max(v, 1e-300)) for v in inner[top - 1 : top + 2])
                    curve = left - 2.0 * mid + right
                    shift = 0.5 * (left - right) / curve if curve < 0.0 else 0.0
                    best = (2.0 * np.pi * (top + lowest + shift) / size, above)
        length //= 4
    return best


def _block_basis(step_rad: float, samples: int) -> Real:
    """Fundamental, level, slopes of the fundamental, and the third harmonic where it is seen."""
    centred = np.arange(samples) - 0.5 * (samples - 1)
    phase = step_rad * centred
    along = centred / samples
    cosine, sine = np.cos(phase), np.sin(phase)
    columns = [cosine, -sine, np.ones(samples), along * cosine, along * sine]
    if step_rad < 2.0 * math.pi / 8.0:
        columns += [np.cos(3.0 * phase), np.sin(3.0 * phase)]
    return np.stack(columns, axis=1)


def _blocks_of(values: Real, step_rad: float, period_s: float, cycles: int) -> _Blocks | None:
    """Least-squares amplitude of the fundamental in blocks of whole cycles.

    In-block slopes take up the decay, the third harmonic that of friction.
    """
    samples = round(cycles * 2.0 * math.pi / step_rad)
    count = values.size // samples
    basis = _block_basis(step_rad, samples)
    if count < 1 or samples < basis.shape[1] + 3:
        return None
    rows = values[: count * samples].reshape(count, samples)
    whole = np.isfinite(rows).all(axis=1)
    if not whole.all():
        rows = rows[whole]
    if rows.shape[0] == 0:
        return None
    shift = float(rows.mean())
    # The columns are all but orthogonal, so that the normal equations lose nothing.
    found = (rows - shift) @ np.linalg.solve(basis.T @ basis, basis.T).T
    squares = np.einsum("ij,ij->i", rows - shift, rows - shift)
    explained = np.einsum("ij,jk,ik->i", found, basis.T @ basis, found, optimize=True)
    left = np.maximum(squares - explained, 0.0) / (samples - basis.shape[1])
    centres = (np.flatnonzero(whole) * float(samples) + 0.5 * (samples - 1)) * period_s
    return _Blocks(
        centres_s=np.asarray(centres),
        width_s=samples * period_s,
        samples=samples,
        phasors=found[:, 0] + 1j * found[:, 1],
        offsets=found[:, 2] + shift,
        variances=left,
    )


# --------------------------------------------------------------------------------------------------
# Free decay: fitting the mixes


MIXES: tuple[Kinds, ...] = (
    (),
    ("viscous",),
    ("coulomb",),
    ("quadratic",),
    ("viscous", "coulomb"),
    ("viscous", "quadratic"),
    ("coulomb", "quadratic"),
    ("viscous", "coulomb", "quadratic"),
)
"""Mixes of damping that are tried, the smaller first."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Rates:
    """One fitted mix: rates of the three kinds and what goes with them."""

    kinds: Kinds
    fit: Fit
    values: Real
    covariance: Real
    candidate: Candidate


def _criterion(cost: float, count: int, parameters: int) -> float:
    """Schwarz's information criterion (1978), least where a model explains best."""
    return count * math.log(max(cost, 1e-300) / count) + parameters * math.log(count)


def _chosen(fits: Sequence[_Rates]) -> tuple[_Rates, Kinds]:
    """The smallest mix that no larger one beats clearly, and the kinds left undecided."""
    by_size: dict[int, _Rates] = {}
    for fit in fits:
        size = len(fit.kinds)
        if size not in by_size or fit.candidate.criterion < by_size[size].candidate.criterion:
            by_size[size] = fit
    chosen = by_size[min(by_size)]
    for size in sorted(by_size):
        if by_size[size].candidate.criterion < chosen.candidate.criterion - CLEAR:
            chosen = by_size[size]
    undecided: set[str] = set()
    for fit in fits:
        gain = chosen.candidate.criterion - fit.candidate.criterion
        extra = set(fit.kinds) - set(chosen.kinds)
        # A larger mix that helps, though not clearly; or a rival of the same size.
        if set(fit.kinds) > set(chosen.kinds) and gain > DOUBTFUL:
            undecided |= extra
        elif len(fit.kinds) == len(chosen.kinds) and fit is not chosen and gain > -CLEAR:
            undecided |= extra
    return chosen, tuple(kind for kind in KINDS_OF_DAMPING if kind in undecided)


def _covariance(fit: Fit, free: Sequence[int]) -> tuple[Real, bool]:
    """Covariance of the parameters from the residuals, and whether these are alike noise.

    Where neighbours go together, sums over stretches of the record take the place of single
    residuals, which leaves their correlation in. Numbers that the data tell only together with
    others have an infinite variance.
    """
    slopes, residuals = fit.jacobian[:, free], fit.residuals
    count, parameters = slopes.shape
    norms = np.sqrt(np.einsum("ij,ij->j", slopes, slopes))
    norms = np.where(norms > 0.0, norms, 1.0)
    scaled = slopes / norms
    strengths, directions = np.linalg.eigh(scaled.T @ scaled)
    blind = strengths < _BLIND * strengths[-1]
    strengths = np.where(blind, np.inf, strengths)
    inverse = (directions / strengths) @ directions.T
    untold = (np.abs(directions[:, blind]) > 1e-3).any(axis=1)
    freedom = max(count - parameters, 1)
    variance = float(residuals @ residuals) / freedom
    inner = variance * inverse
    total = float(residuals @ residuals)
    neighbour = float(residuals[1:] @ residuals[:-1]) / total if total > 0.0 else 0.0
    white = abs(neighbour) <= 2.0 / math.sqrt(count) + parameters / count
    quantile = _quantile(freedom)
    if not white and count >= 60:
        stretches = 30
        edges = np.linspace(0, count, stretches + 1).astype(int)
        sums = np.add.reduceat(scaled * residuals[:, np.newaxis], edges[:-1], axis=0)
        meat = sums.T @ sums * (stretches / (stretches - 1.0))
        wide = inverse @ meat @ inverse
        # Never narrower than white noise of that size would be.
        grow = np.sqrt(np.maximum(np.diag(wide) / np.maximum(np.diag(inner), 1e-300), 1.0))
        inner = inner * np.outer(grow, grow)
        quantile = _quantile(stretches - 1)
    inner = inner * (quantile / _Z95) ** 2
    full = np.zeros((fit.values.size, fit.values.size))
    inner = inner / np.outer(norms, norms)
    inner[untold, untold] = np.inf
    full[np.ix_(free, free)] = inner
    return full, white


def _quantile(freedom: int) -> float:
    """97.5 % point of Student's distribution, by the expansion about the normal one."""
    z, n = _Z95, float(max(freedom, 2))
    first = (z**3 + z) / 4.0
    second = (5.0 * z**5 + 16.0 * z**3 + 3.0 * z) / 96.0
    third = (3.0 * z**7 + 19.0 * z**5 + 17.0 * z**3 - 15.0 * z) / 384.0
    return z + first / n + second / n**2 + third / n**3


def _estimate(value: float, variance: float, *, positive: bool = False) -> Estimate:
    half = _Z95 * math.sqrt(max(variance, 0.0))
    low = value - half
    return Estimate(value=value, low=max(low, 0.0) if positive else low, high=value + half)


def _averaged_fits(
    times_s: Real, width_s: float, envelope: Real, omega: float, mixes: Sequence[Kinds]
) -> list[_Rates]:
    """Fit the averaged decay to block amplitudes; values are amplitude, alpha, F, Q.

    Each block sees the mean of the decay over its width, by Simpson's rule.
    """
    span = max(float(times_s[-1] - times_s[0]) + width_s, 1e-300)
    nodes = np.stack([times_s - 0.5 * width_s, times_s, times_s + 0.5 * width_s])
    nodes = np.maximum(nodes - (times_s[0] - 0.5 * width_s), 0.0)
    top = max(float(envelope[0]), float(np.max(envelope)) * 0.5, 1e-300)
    friction_of_loss, drag_of_rate = 0.5 * math.pi * omega, 0.75 * math.pi / omega
    scale = np.array([top, 1.0 / span, friction_of_loss * top / span, drag_of_rate / top / span])

    # Loss over the middle half of the fall tells the size of each term on its own.
    tail = max(float(np.mean(envelope[-max(1, envelope.size // 8) :])), 1e-3 * top)
    fall = max(math.log(top / tail), 1e-3) / span
    usual = math.sqrt(top * tail)
    alone = np.array(
        [top, fall, friction_of_loss * fall * usual, drag_of_rate * fall / max(usual, 1e-300)]
    )
    found: dict[Kinds, _Rates] = {}
    out: list[_Rates] = []
    for kinds in mixes:
        active = [0] + [1 + i for i, kind in enumerate(KINDS_OF_DAMPING) if kind in kinds]

        def residuals(p: Real, active: list[int] = active) -> Real:
            full = np.zeros(4)
            full[active] = p
            a = amplitude_after(
                nodes,
                amplitude=float(full[0]),
                decay_rate_per_s=float(full[1]),
                friction_loss_per_s=float(full[2]) / friction_of_loss,
                drag_rate=float(full[3]) / drag_of_rate,
            )
            return np.asarray((a[0] + 4.0 * a[1] + a[2]) / 6.0 - envelope)

        first = alone.copy()
        first[1:] /= max(len(kinds), 1)
        starts = [first]
        inner = [found[k] for k in found if set(k) < set(kinds) and len(k) == len(kinds) - 1]
        if inner:
            starts.append(min(inner, key=lambda r: r.fit.cost).values)
        fits = [
            least_squares(
                residuals,
                s[active],
                scale=scale[active],
                low=np.zeros(len(active)),
                settled=1e-6,
            )
            for s in starts
        ]
        fit = min(fits, key=lambda f: f.cost)
        values = np.zeros(4)
        values[active] = fit.values
        covariance, _ = _covariance(fit, range(len(active)))
        full_covariance = np.zeros((4, 4))
        full_covariance[np.ix_(active, active)] = covariance
        found[kinds] = _Rates(
            kinds=kinds,
            fit=fit,
            values=values,
            covariance=full_covariance,
            candidate=Candidate(
                kinds=kinds,
                parameters=len(active),
                cost=fit.cost,
                criterion=_criterion(fit.cost, envelope.size, len(active)),
            ),
        )
        out.append(found[kinds])
    return out


def _lag_of(times_s: Real, rates: _Rates, omega: float) -> Real:
    """How far the fundamental lags behind an even phase, by friction and drag.

    Second order in the losses. The term of friction is where its centre shifts pull the
    fundamental; those of drag are the same for its third harmonic, and longer half swings.
    """
    _, alpha, friction, drag = (float(v) for v in rates.values)
    fine = np.linspace(float(times_s[0]), float(times_s[-1]), 2001)
    size = amplitude_after(
        fine - fine[0],
        amplitude=float(rates.values[0]),
        decay_rate_per_s=alpha,
        friction_loss_per_s=2.0 * friction / (math.pi * omega),
        drag_rate=4.0 * drag * omega / (3.0 * math.pi),
    )
    slower = omega * (drag * size) ** 2 / 6.0 + 16.0 / (9.0 * math.pi) * alpha * drag * size
    steps = 0.5 * (slower[1:] + slower[:-1]) * np.diff(fine)
    lag = np.concatenate([[0.0], np.cumsum(steps)])
    lag += 10.0 / (9.0 * math.pi) * drag * size
    if friction > 0.0:
        lag += 3.0 / math.pi * friction / omega**2 / np.maximum(size, friction / omega**2)
    return np.asarray(np.interp(times_s, fine, lag))


def _line_through(t: Real, y: Real, weights: Real) -> tuple[float, float, float]:
    """Weighted line: value at t = 0, slope, variance of the slope from the residuals."""
    total = float(weights.sum())
    middle = float(weights @ t) / total
    across = t - middle
    squares = float(weights @ across**2)
    slope = float(weights @ (across * y)) / squares if squares > 0.0 else 0.0
    level = float(weights @ y) / total
    left = y - level - slope * across
    freedom = max(t.size - 2, 1)
    variance = float(weights @ left**2) / freedom / squares if squares > 0.0 else math.inf
    return level - slope * middle, slope, variance


def _swing_fits(
    times_s: Real,
    values: Real,
    period_s: float,
    group: int,
    starts: dict[Kinds, Real],
    span_s: float,
) -> list[_Rates]:
    """Fit the exact motion; values are x0, t0, w0, alpha, F, Q, offset.

    Every value is the mean over `group` samples: three points stand for it, which are right to
    the fifth moment of the sample times.
    """
    second = (group**2 - 1.0) / 12.0
    fourth = (group**2 - 1.0) * (3.0 * group**2 - 7.0) / 240.0
    aside_s, weight = 0.0, 0.0
    nodes = times_s
    if group > 1:
        aside_s = period_s * math.sqrt(fourth / second)
        weight = 0.5 * second**2 / fourth
        nodes = np.concatenate([times_s - aside_s, times_s, times_s + aside_s])
    found: dict[Kinds, _Rates] = {}
    out: list[_Rates] = []
    for kinds, given in starts.items():
        rates = [3 + i for i, kind in enumerate(KINDS_OF_DAMPING) if kind in kinds]
        active = [0, 1, 2, *rates, 6]

        def model(p: Real, active: list[int] = active, drag: bool = 5 in active) -> Real:
            full = np.zeros(7)
            full[active] = p
            x0, t0, omega, alpha, friction, pull, offset = (float(v) for v in full)
            if drag:
                place = _drag_swings(nodes, x0, t0, omega, alpha, friction, pull)
            else:
                place = _closed_swings(nodes, x0, t0, omega, alpha, friction)
            if not np.isfinite(place).all():
                return np.full(times_s.size, np.inf)
            if group > 1:
                left, middle, right = place.reshape(3, -1)
                place = weight * (left + right) + (1.0 - 2.0 * weight) * middle
            return place + offset

        def residuals(p: Real, model: Any = model) -> Real:
            return np.asarray(model(p) - values)

        omega = float(given[2])
        top = abs(float(given[0]))
        scale = np.array(
            [
                top,
                1.0 / omega,
                omega,
                1.0 / span_s,
                0.25 * math.pi * omega * top / span_s,
                0.75 * math.pi / (omega * top * span_s),
                top,
            ]
        )
        # The turning point before the first value stays before it, and is the last such.
        first = float(times_s[0]) - aside_s
        far, stop, wall = np.inf, 0.9 * omega**2 * top, 1.0 / top
        low = np.array([-far, first - 1.5 * math.pi / omega, 0.2 * omega, 0.0, 0.0, 0.0, -far])
        high = np.array([far, first, 5.0 * omega, 0.95 * omega, stop, wall, far])
        side = math.copysign(1.0, float(given[0]))
        (low if side > 0.0 else high)[0] = side * 1e-3 * top

        def slopes(
            p: Real,
            left: Real,
            scale: Real = scale[active],
            high: Real = high[active],
            residuals: Any = residuals,
        ) -> Real:
            jacobian = np.empty((left.size, p.size))
            jacobian[:, -1] = 1.0
            for column in range(p.size - 1):
                step = 1e-7 * max(abs(float(p[column])), 0.1 * float(scale[column]))
                step = -step if p[column] + step > high[column] else step
                moved = p.copy()
                moved[column] += step
                jacobian[:, column] = (residuals(moved) - left) / step
            return jacobian

        begins = [given[active]]
        inner = [found[k] for k in found if set(k) < set(kinds) and len(k) == len(kinds) - 1]
        fit: Fit | None = None
        best_inner = min(inner, key=lambda r: r.fit.cost) if inner else None
        while begins:
            begin = begins.pop()
            new = least_squares(
                residuals,
                begin,
                scale=scale[active],
                low=low[active],
                high=high[active],
                jacobian=slopes,
                tolerance=1e-9,
                settled=1e-4,
                turns=60,
            )
            fit = new if fit is None or new.cost < fit.cost else fit
            # A larger mix explains at least as much; otherwise it begins where the smaller ended.
            if best_inner is not None and fit.cost > best_inner.fit.cost * (1.0 + 1e-9):
                begins.append(best_inner.values[active])
                best_inner = None
        assert fit is not None
        full = np.zeros(7)
        full[active] = fit.values
        covariance, _ = _covariance(fit, range(len(active)))
        full_covariance = np.zeros((7, 7))
        full_covariance[np.ix_(active, active)] = covariance
        found[kinds] = _Rates(
            kinds=kinds,
            fit=fit,
            values=full,
            covariance=full_covariance,
            candidate=Candidate(
                kinds=kinds,
                parameters=len(active),
                cost=fit.cost,
                criterion=_criterion(fit.cost, values.size, len(active)),
            ),
        )
        out.append(found[kinds])
    return out


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Found:
    """A fitted free decay, however it was fitted."""

    omega: float
    omega_variance: float
    fits: list[_Rates]
    chosen: _Rates
    undecided: Kinds
    rates: Real
    rate_variances: Real
    offset: float
    offset_variance: float
    turned_at_s: float | None
    turned_variance: float
    span_s: tuple[float, float]
    cycles: float
    residual_rms: float
    noise_rms: float
    other_line: tuple[float, float] | None = None
    complaints: tuple[str, ...] = ()


def _viscous_fit(t: Real, y: Real) -> tuple[float, float, Fit]:
    """Frequency and decay rate of any linear decay, ringing or not, and the fit of five numbers.

    For each frequency and decay rate the position, the speed and the offset follow from linear
    least squares (variable projection; Golub and Pereyra, 1973, from memory).
    """
    span = float(t[-1] - t[0])
    step = span / max(t.size - 1, 1)
    since = t - t[0]

    def shapes(omega: float, alpha: float) -> Real:
        root = np.emath.sqrt(alpha * alpha - omega * omega + 0j)
        slow, fast = np.exp((root - alpha) * since), np.exp((-root - alpha) * since)
        if abs(root) < 1e-6 * omega:
            kick = since * np.exp(-alpha * since)
        else:
            kick = ((slow - fast) / (2.0 * root)).real
        still = (0.5 * (slow + fast)).real + alpha * kick
        return np.stack([still, kick * omega, np.ones(t.size)], axis=1)

    def projected(p: Real) -> Real:
        basis = shapes(math.exp(float(p[0])), math.exp(float(p[0])) * float(p[1]))
        return np.asarray(basis @ np.linalg.lstsq(basis, y, rcond=None)[0] - y)

    ranked = []
    for log_omega in np.linspace(math.log(1.0 / span), math.log(1.2 / step), 48):
        for ratio in (0.01, 0.05, 0.15, 0.3, 0.5, 0.7, 0.9, 1.2, 2.0, 4.0):
            left = projected(np.array([log_omega, ratio]))
            ranked.append((float(left @ left), float(log_omega), ratio))
    ranked.sort()
    fits = [
        least_squares(
            projected, np.array([log_omega, ratio]), scale=np.array([1.0, 0.1]), low=_LOW_RATIO
        )
        for _, log_omega, ratio in ranked[:3]
    ]
    best = min(fits, key=lambda f: f.cost)
    omega = math.exp(float(best.values[0]))
    alpha = omega * float(best.values[1])
    linear = np.linalg.lstsq(shapes(omega, alpha), y, rcond=None)[0]

    def full(p: Real) -> Real:
        return np.asarray(shapes(float(p[0]), float(p[1])) @ p[2:] - y)

    start = np.concatenate([[omega, alpha], linear])
    scale = np.array([omega, 0.1 * omega, *np.full(3, max(float(np.ptp(y)), 1e-300))])
    low = np.array([1e-3 * omega, 0.0, -np.inf, -np.inf, -np.inf])
    fit = least_squares(full, start, scale=scale, low=low, turns=30)
    return float(fit.values[0]), float(fit.values[1]), fit


_LOW_RATIO = np.array([-np.inf, 0.0])


def _grouped(values: Real, period_s: float, group: int) -> tuple[Real, Real]:
    """Means over groups of samples: the times of their middles, and their values."""
    count = values.size // group
    means = values[: count * group].reshape(count, group).mean(axis=1)
    times = (np.arange(count) * group + 0.5 * (group - 1)) * period_s
    good = np.isfinite(means)
    return times[good], means[good]


def _window(values: Real, step_rad: float, period_s: float) -> tuple[int, float, _Blocks | None]:
    """Samples in which the swing stands above the noise, a better frequency, and its blocks."""
    length = values.size
    while True:
        per_cycle = 2.0 * math.pi / step_rad
        least = max(1, math.ceil(16.0 / per_cycle))
        cycles = max(least, int(length / per_cycle) // 400)
        blocks = _blocks_of(values[:length], step_rad, period_s, cycles)
        if blocks is None:
            return length, step_rad, None
        noise = math.sqrt(float(np.median(blocks.variances)))
        size = np.abs(blocks.phasors)
        floor = noise * max(0.5, 4.0 * math.sqrt(2.0 / blocks.samples))
        floor = max(floor, 1e-9 * float(size.max()))
        below = np.flatnonzero(size < floor)
        kept = size.size if below.size == 0 else int(below[0])
        if kept >= 3:
            turned = blocks.phasors * np.exp(-1j * step_rad / period_s * blocks.centres_s)
            phase = np.unwrap(np.angle(turned[:kept]))
            _, slope, _ = _line_through(blocks.centres_s[:kept], phase, size[:kept] ** 2)
            step_rad += slope * period_s
        if kept == size.size:
            return length, step_rad, blocks
        end = round(blocks.centres_s[kept] / period_s - 0.5 * (blocks.samples - 1))
        # A long block hides where a short swing ends: look again, closer.
        if cycles > least and kept < 40 and end + blocks.samples < length:
            length = end + blocks.samples
            continue
        return end, step_rad, _blocks_of(values[:end], step_rad, period_s, cycles)


def _ring_down(log: Log, loop: Loop | None) -> Identification:
    """Identify a free decay."""
    if float(np.ptp(log.position)) <= 2.0 * (log.position_step or 0.0):
        raise IdentificationError(
            "position",
            float(np.ptp(log.position)),
            f"{log.position_unit} from end to end",
            "the position does not move",
            "let the mass go from a displaced position while logging",
        )
    decay = _decay_of(log)
    filled = _filled(decay.values)
    step_rad, above = _ringing_of(filled)
    found: _Found | None = None
    if above > 1.0:
        found = _by_line(log, decay, step_rad)
    if found is None:
        found = _by_shape(log, decay)
        alpha = float(found.rates[0])
        if alpha < 0.5 * found.omega and found.cycles >= 2.0:
            # A swing that dies within few cycles is no clear line, but shows its kinds.
            length = round(found.span_s[1] / decay.period_s)
            step_rad = math.sqrt(found.omega**2 - alpha**2) * decay.period_s
            length, step_rad, blocks = _window(decay.values[:length], step_rad, decay.period_s)
            found = _by_swings(decay, length, step_rad, blocks) or found
    return _as_identification(log, loop, decay, found)


def _by_line(log: Log, decay: _Decay, step_rad: float) -> _Found | None:
    """Fit a decay that shows as a clear line in the spectrum."""
    if step_rad > 2.0 * math.pi / 2.5:
        raise IdentificationError(
            log.source or "log",
            2.0 * math.pi / step_rad,
            "samples per cycle",
            "too few to follow the swing",
            "log at four samples per cycle or more",
        )
    length, step_rad, blocks = _window(decay.values, step_rad, decay.period_s)
    cycles = length * step_rad / (2.0 * math.pi)
    _refuse_growth(log, blocks)
    if blocks is not None and cycles >= AVERAGED_FROM_CYCLES:
        found = _by_blocks(decay, length, step_rad)
        if found is not None and found.residual_rms > 1.2 * found.noise_rms:
            # Blocks are long for a decay as quick as this in noise as low: the exact motion.
            exact = None
            if cycles <= 5.0 * AVERAGED_FROM_CYCLES:
                exact = _by_swings(decay, length, step_rad, blocks)
            if exact is not None and exact.residual_rms < found.residual_rms:
                return exact
        if found is not None and decay.let_go is not None:
            # Only the first swings tell when it was let go.
            short = min(length, round(12.0 * 2.0 * math.pi / step_rad))
            begin = _window(decay.values[:short], step_rad, decay.period_s)
            first = _by_swings(decay, *begin, only=found.chosen.kinds)
            if first is not None:
                found = replace(
                    found, turned_at_s=first.turned_at_s, turned_variance=first.turned_variance
                )
        return found
    found = _by_swings(decay, length, step_rad, blocks) if cycles >= 2.0 else None
    if found is not None and found.cycles < 4.0:
        size = float(np.nanstd(decay.values))
        if found.residual_rms > 0.15 * size and found.residual_rms > 2.0 * found.noise_rms:
            return None
    return found


def _refuse_growth(log: Log, blocks: _Blocks | None) -> None:
    """A motion that grows is no free decay."""
    if blocks is None or blocks.phasors.size < 3:
        return
    size = np.abs(blocks.phasors)
    part = max(1, size.size // 3)
    early, late = float(np.mean(size[:part])), float(np.mean(size[-part:]))
    deviation = math.sqrt(2.0 * float(np.median(blocks.variances)) / blocks.samples / part)
    if late > 1.05 * early + 6.0 * deviation:
        raise IdentificationError(
            log.source or "log",
            late / early,
            "times the first amplitude at the end",
            "the swing grows, so that something drives it",
            "open the loop before the mass is let go, or log the output as well",
        )


def _by_blocks(decay: _Decay, length: int, step_rad: float) -> _Found | None:
    """Fit amplitudes and phases of blocks: for long records, where averages are all but exact."""
    period = decay.period_s
    cycles = length * step_rad / (2.0 * math.pi)
    per_block = max(2, round(cycles / 200.0), math.ceil(16.0 * step_rad / (2.0 * math.pi)))
    fits: list[_Rates] = []
    for turn in range(4):
        found = _blocks_of(decay.values[:length], step_rad, period, per_block)
        if found is None or found.phasors.size < 12:
            return None
        blocks = found
        t = blocks.centres_s
        turned = blocks.phasors * np.exp(-1j * step_rad / period * t)
        phase = np.unwrap(np.angle(turned))
        weights = np.abs(blocks.phasors) ** 2
        lag = _lag_of(t, _chosen(fits)[0], step_rad / period) if fits else np.zeros(t.size)
        start, slope, slope_variance = _line_through(t, phase + lag, weights)
        # The part across the fitted phase is noise, the part along it the amplitude.
        envelope = (turned * np.exp(-1j * (start + slope * t - lag))).real
        omega = step_rad / period + slope
        if turn > 0 and abs(slope) * period < 1e-13 * step_rad:
            break
        fits = _averaged_fits(t, blocks.width_s, envelope, omega, MIXES)
        chosen, undecided = _chosen(fits)
        step_rad = omega * period
        dead = float(chosen.values[2]) / omega**2
        short = np.flatnonzero(envelope < 2.5 * dead)
        if short.size and short[0] >= 12 and turn < 3:
            length = int(t[short[0]] / period - 0.5 * blocks.samples)
    chosen, undecided = _chosen(fits)
    omega = step_rad / period
    damped_variance = slope_variance
    alpha = float(chosen.values[1])
    total = math.hypot(omega, alpha)
    variance = (omega**2 * damped_variance + alpha**2 * float(chosen.covariance[1, 1])) / total**2
    noise = math.sqrt(float(np.median(blocks.variances)))
    model = envelope + chosen.fit.residuals
    expected = model * np.exp(1j * (start + slope * t - lag))
    missed = np.abs(turned - expected) ** 2 / 2.0
    # The noise of the amplitudes themselves is part of the noise already counted.
    left = math.sqrt(float(np.mean(blocks.variances)) + max(float(np.mean(missed)), 0.0))
    return _Found(
        omega=total,
        omega_variance=variance,
        fits=fits,
        chosen=chosen,
        undecided=undecided,
        rates=chosen.values[1:4],
        rate_variances=np.diag(chosen.covariance)[1:4],
        offset=float(np.average(blocks.offsets)),
        offset_variance=float(np.var(blocks.offsets)) / blocks.offsets.size,
        turned_at_s=None,
        turned_variance=0.0,
        span_s=(0.0, length * period),
        cycles=length * step_rad / (2.0 * math.pi),
        residual_rms=left,
        noise_rms=noise,
        other_line=_other_line(_apart_from_swing(decay.values[:length], step_rad), period, omega),
    )


def _apart_from_swing(values: Real, step_rad: float) -> Real:
    """The first samples without fundamental and third harmonic, block by block."""
    samples = round(max(8.0 * 2.0 * math.pi / step_rad, 32.0))
    count = max(1, min(values.size, _LOOKED_AT) // samples)
    rows = np.nan_to_num(values[: count * samples].reshape(count, samples), nan=0.0)
    basis = _block_basis(step_rad, samples)
    along = (np.arange(samples) / samples - 0.5)[:, np.newaxis]
    # A curved fall of the amplitude would stand beside the fundamental like another line.
    basis = np.concatenate([basis, along**2 * basis[:, :2], along**3 * basis[:, :2]], axis=1)
    found = np.linalg.solve(basis.T @ basis, (rows @ basis).T)
    return (rows - (basis @ found).T).reshape(-1)


def _by_swings(
    decay: _Decay,
    length: int,
    step_rad: float,
    blocks: _Blocks | None,
    only: Kinds | None = None,
) -> _Found | None:
    """Fit the exact motion to means over a few samples: for records of few cycles."""
    period = decay.period_s
    omega = step_rad / period
    group = max(1, int(2.0 * math.pi / step_rad / _POINTS_PER_CYCLE))
    times, means = _grouped(decay.values[:length], period, group)
    if times.size < 16:
        return None
    rough: float | None = None
    if blocks is not None and blocks.phasors.size >= 4:
        offset = float(np.average(blocks.offsets, weights=np.abs(blocks.phasors)))
    else:
        omega, rough, fit = _viscous_fit(times, means)
        offset = float(fit.values[4])
        if rough > 0.6 * omega:
            return None
    # The fit begins at a crossing of the rest position, a quarter cycle behind a turning point.
    crossed = np.flatnonzero(np.diff(np.signbit(means - offset)))
    if crossed.size < 3:
        return None
    begin = int(crossed[0]) + 1
    side = math.copysign(1.0, float(np.mean(means[max(0, begin - 3) : begin] - offset)))
    cycle = max(2, int(2.0 * math.pi / omega / (group * period)))
    top = float(np.max(np.abs(means[: begin + cycle] - offset)))
    turned = float(times[begin]) - 0.5 * math.pi / omega
    times, means = times[begin:], means[begin:]
    starts = _first_guesses(times, means, blocks, omega, rough, offset, side * top, turned)
    if only is not None:
        starts = {only: starts.get(only, starts[max(starts, key=len)])}
    fits: list[_Rates] = []
    for turn in range(3):
        if times.size < 12:
            return None
        span = float(times[-1] - times[0])
        fits = _swing_fits(times, means, period, group, starts, span)
        chosen, undecided = _chosen(fits)
        dead = float(chosen.values[4]) / float(chosen.values[2]) ** 2
        ends = _amplitudes_of(chosen, times)
        short = np.flatnonzero(ends < 2.5 * dead)
        if short.size == 0 or turn == 2 or short[0] < 24:
            break
        times, means = times[: short[0]], means[: short[0]]
        starts = {fit.kinds: fit.values for fit in fits}
    variances = np.diag(chosen.covariance)
    rows = np.arange(int(times[0] / period), min(int(times[-1] / period) + 1, length))
    rows = rows[:_LOOKED_AT]
    raw = decay.values[rows]
    values = [float(v) for v in chosen.values]
    if values[5] > 0.0:
        model = _drag_swings(np.asarray(rows * period), *values[:6]) + values[6]
    else:
        model = _closed_swings(np.asarray(rows * period), *values[:5]) + values[6]
    other = _other_line(raw - model, period, float(chosen.values[2]))
    noise = _difference_noise(raw - model)
    left = (raw - model)[np.isfinite(raw)]
    return _Found(
        omega=float(chosen.values[2]),
        omega_variance=float(variances[2]),
        fits=fits,
        chosen=chosen,
        undecided=undecided,
        rates=chosen.values[3:6],
        rate_variances=variances[3:6],
        offset=float(chosen.values[6]),
        offset_variance=float(variances[6]),
        turned_at_s=float(chosen.values[1]),
        turned_variance=float(variances[1]),
        span_s=(float(times[0]), float(times[-1])),
        cycles=float(times[-1] - times[0]) * float(chosen.values[2]) / (2.0 * math.pi),
        residual_rms=math.sqrt(float(np.mean(left**2))),
        noise_rms=noise,
        other_line=other,
    )


def _other_line(left: Real, period_s: float, omega: float) -> tuple[float, float] | None:
    """A second line in what a fit leaves: its frequency and amplitude."""
    good = np.isfinite(left)
    left = np.where(good, left, 0.0)
    step_rad, above = _ringing_of(left)
    times = step_rad / (omega * period_s)
    # What is left at the frequency itself and its multiples is the swing's own shape.
    if above <= 1.0 or times < 1.1 or abs(times - round(times)) < 0.03:
        return None
    length = min(left.size, max(64, round(40.0 * 2.0 * math.pi / step_rad)))
    phase = step_rad * np.arange(length)
    basis = np.stack([np.cos(phase), np.sin(phase)], axis=1)
    found = np.linalg.lstsq(basis, left[:length], rcond=None)[0]
    return step_rad / period_s / (2.0 * math.pi), float(np.hypot(*found))


def _amplitudes_of(rates: _Rates, times: Real) -> Real:
    """Averaged amplitudes of a fitted motion."""
    x0, t0, omega, alpha, friction, drag, _ = (float(v) for v in rates.values)
    return amplitude_after(
        np.maximum(times - t0, 0.0),
        amplitude=abs(x0),
        decay_rate_per_s=alpha,
        friction_loss_per_s=2.0 * friction / (math.pi * omega),
        drag_rate=4.0 * drag * omega / (3.0 * math.pi),
    )


def _first_guesses(
    times: Real,
    means: Real,
    blocks: _Blocks | None,
    omega: float,
    rough: float | None,
    offset: float,
    x0: float,
    turned: float,
) -> dict[Kinds, Real]:
    """Where the fit of each mix begins."""
    rates: dict[Kinds, Real] = {}
    if blocks is not None and blocks.phasors.size >= 8:
        fits = _averaged_fits(
            blocks.centres_s, blocks.width_s, np.abs(blocks.phasors), omega, MIXES
        )
        rates = {fit.kinds: fit.values[1:4] for fit in fits}
        first = float(amplitude_after(0.0, amplitude=float(fits[-1].values[0])))
        x0 = math.copysign(max(first, 0.5 * abs(x0)), x0)
    else:
        if rough is None:
            size = np.abs(means - offset)
            half = max(1, size.size // 2)
            fall = float(size[:half].max()) / max(float(size[half:].max()), 1e-300)
            rough = max(math.log(fall), 1e-3) / (0.5 * float(times[-1] - times[0]))
        usual = abs(x0) * math.exp(-0.5 * rough * float(times[-1] - times[0]))
        alone = [
            rough,
            0.5 * math.pi * omega * rough * usual,
            0.75 * math.pi / omega * rough / max(usual, 1e-300),
        ]
        for kinds in MIXES:
            share = [
                a / max(len(kinds), 1) if kind in kinds else 0.0
                for a, kind in zip(alone, KINDS_OF_DAMPING, strict=True)
            ]
            rates[kinds] = np.array(share)
    most = np.array([0.5 * omega, 0.2 * omega**2 * abs(x0), 0.3 / abs(x0)])
    return {
        kinds: np.array([x0, turned, omega, *np.minimum(rates[kinds], most), offset])
        for kinds in rates
    }


def _by_shape(log: Log, decay: _Decay) -> _Found:
    """Fit a linear decay of any damping, for motions that hardly swing."""
    values = decay.values
    noise = max(_difference_noise(values), 0.3 * (log.position_step or 0.0))
    final = float(np.nanmedian(values[-max(8, values.size // 4) :]))
    moving = np.flatnonzero(np.abs(values - final) > 5.0 * max(noise, 1e-12 * abs(final)))
    length = values.size
    if moving.size:
        length = min(length, max(2 * int(moving[-1]), 64))
    group = max(1, length // 1500)
    times, means = _grouped(values[:length], decay.period_s, group)
    spread = float(np.sum((means - means.mean()) ** 2))
    omega, alpha, fit = _viscous_fit(times, means)
    gain = times.size * math.log(max(spread, 1e-300) / max(fit.cost, 1e-300))
    if gain < 4.0 * math.log(times.size) + 40.0:
        raise IdentificationError(
            "position",
            math.sqrt(spread / times.size),
            f"{log.position_unit} rms",
            "only noise: nothing in it rings or returns to rest",
            "displace the mass by a thousand times the noise, let it go, and log from before",
        )
    covariance, _ = _covariance(fit, range(5))
    span = float(times[-1] - times[0])
    vague = not (np.isfinite(covariance).all() and _Z95 * math.sqrt(covariance[0, 0]) < 0.5 * omega)
    left_over = math.sqrt(fit.cost / spread)
    drifting = left_over > 0.15 and fit.cost / times.size > 4.0 * noise**2 / group
    if vague or drifting or omega * span < 2.0:
        raise IdentificationError(
            log.source or "log",
            span,
            "s of free motion",
            "it drifts, or returns to rest without a swing that would tell its frequency",
            "let it ring from a larger displacement, or log a step together with the output",
        )
    rates = _Rates(
        kinds=("viscous",),
        fit=fit,
        values=np.array([0.0, 0.0, omega, alpha, 0.0, 0.0, float(fit.values[4])]),
        covariance=np.zeros((7, 7)),
        candidate=Candidate(
            kinds=("viscous",),
            parameters=5,
            cost=fit.cost,
            criterion=_criterion(fit.cost, times.size, 5),
        ),
    )
    left = math.sqrt(fit.cost / times.size * group)
    cycles = float(times[-1] - times[0]) * math.sqrt(max(omega**2 - alpha**2, 0.0)) / 2.0 / math.pi
    return _Found(
        omega=omega,
        omega_variance=float(covariance[0, 0]),
        fits=[rates],
        chosen=rates,
        undecided=("coulomb", "quadratic"),
        rates=np.array([alpha, 0.0, 0.0]),
        rate_variances=np.array([covariance[1, 1], 0.0, 0.0]),
        offset=float(fit.values[4]),
        offset_variance=float(covariance[4, 4]),
        turned_at_s=None,
        turned_variance=0.0,
        span_s=(float(times[0]), float(times[-1])),
        cycles=cycles,
        residual_rms=left,
        noise_rms=_difference_noise(values),
        complaints=(
            "too few swings to tell one kind of damping from another; viscous damping is assumed",
        ),
    )


# --------------------------------------------------------------------------------------------------
# Free decay: what it tells


def _as_identification(log: Log, loop: Loop | None, decay: _Decay, found: _Found) -> Identification:
    turn = 2.0 * math.pi
    kinds = found.chosen.kinds
    alpha, friction, drag = (float(v) for v in found.rates)
    omega = found.omega
    frequency = _estimate(omega / turn, found.omega_variance / turn**2)
    rate = _rate_estimate(found, 0)
    ratio = None
    if rate is not None:
        ratio = Estimate(value=rate.value / omega, low=rate.low / omega, high=rate.high / omega)
    first_s = decay.first * decay.period_s
    release = None
    if decay.let_go is not None and found.turned_at_s is not None:
        late = found.turned_at_s
        held_s = decay.let_go * decay.period_s
        if abs(late) < 0.15 * turn / omega and held_s > 0.5 * turn / omega:
            release = _estimate(first_s + late, found.turned_variance)
    unknown = [
        (
            "mass",
            "a free decay tells stiffness and damping only over the mass; log again with a known "
            "mass added, or log a step together with the current or force",
        ),
        ("damping", "known over the mass only, see mass"),
        ("stiffness", "known over the mass only, see mass"),
        ("delay_s", "nothing was written while it rang; log a step together with the output"),
        ("friction", _why_no_friction(found)),
    ]
    complaints = [str(complaint) for complaint in log.complaints]
    complaints += found.complaints
    complaints += _doubts(log, loop, found, frequency)
    return Identification(
        kind="ring_down",
        position_unit=log.position_unit,
        natural_frequency_hz=frequency,
        damping_ratio=ratio,
        unknown=tuple(unknown),
        damping_kinds=kinds,
        undecided=found.undecided,
        candidates=tuple(sorted((fit.candidate for fit in found.fits), key=lambda c: c.criterion)),
        decay_rate_per_s=rate,
        friction_acceleration=_rate_estimate(found, 1) if "coulomb" in kinds else None,
        drag_per_position=_rate_estimate(found, 2) if "quadratic" in kinds else None,
        offset=_estimate(found.offset, found.offset_variance),
        release_s=release,
        first_s=first_s + found.span_s[0],
        last_s=first_s + found.span_s[1],
        cycles=found.cycles,
        residual_rms=found.residual_rms,
        noise_rms=found.noise_rms,
        rate_hz=log.rate_hz,
        samples=log.samples,
        complaints=tuple(complaints),
    )


def _why_no_friction(found: _Found) -> str:
    if "coulomb" in found.chosen.kinds:
        return "known over the mass only, see mass"
    if "coulomb" in found.undecided:
        return "the decay neither shows Coulomb friction nor excludes it"
    return "the decay shows no Coulomb friction"


def _rate_estimate(found: _Found, which: int) -> Estimate | None:
    """Interval of a rate; for a kind that was not chosen, 0 and what it can be at most."""
    kind = KINDS_OF_DAMPING[which]
    if kind in found.chosen.kinds:
        return _estimate(
            float(found.rates[which]), float(found.rate_variances[which]), positive=True
        )
    wanted = {*found.chosen.kinds, kind}
    for fit in found.fits:
        if set(fit.kinds) == wanted:
            column = which + fit.values.size - (3 if fit.values.size == 4 else 4)
            deviation = math.sqrt(max(float(fit.covariance[column, column]), 0.0))
            high = max(float(fit.values[column]), 0.0) + _Z95 * deviation
            return Estimate(value=0.0, low=0.0, high=high)
    return None


def _doubts(log: Log, loop: Loop | None, found: _Found, frequency: Estimate) -> list[str]:
    """What is odd about the fit of a free decay."""
    out = []
    unit = log.position_unit
    if not found.chosen.kinds:
        out.append("the motion does not decay within this log; no damping can be told")
    elif found.cycles < 5.0 and len(found.fits) > 1:
        out.append(
            f"only {found.cycles:.2g} cycles stand above the noise; kinds of damping are hard to "
            f"tell apart in so few"
        )
    if log.position_step is not None and found.noise_rms < 0.4 * log.position_step:
        out.append(
            f"noise of {_amount(found.noise_rms, unit)} rms is less than half a sensor step of "
            f"{_amount(log.position_step, unit)}: what is left is rounding and not noise, and the "
            f"intervals are not to be relied on"
        )
    if found.other_line is not None and found.other_line[1] > 0.3 * found.noise_rms:
        line_hz, size = found.other_line
        out.append(
            f"a second line at {format_si(line_hz, 'Hz')} with an amplitude of about "
            f"{_amount(size, unit)} is not in the model: another mode, or hum"
        )
    elif found.residual_rms > 1.2 * found.noise_rms and found.noise_rms > 0.0:
        out.append(
            f"the model leaves {_amount(found.residual_rms, unit)} rms where the noise is "
            f"{_amount(found.noise_rms, unit)}: something is not in it, such as a stiffness that "
            f"changes with position, a second mode, or hum"
        )
    if loop is not None:
        mechanics = loop.mechanics
        if mechanics.stiffness > 0.0:
            expected = math.sqrt(mechanics.stiffness / mechanics.mass) / (2.0 * math.pi)
            times = frequency.value / expected
            if times > 10.0 or times < 0.1:
                out.append(
                    f"natural frequency {format_si(frequency.value, 'Hz')} is {times:.3g} times "
                    f"that of the loop file, {format_si(expected, 'Hz')}; the unit of time may be "
                    f"wrong"
                )
    return out


def _amount(value: float, unit: str, digits: int = 3) -> str:
    if unit.startswith(("1/", "count")):
        return f"{value:.{digits}g} {unit}"
    return format_si(value, unit, digits)


# --------------------------------------------------------------------------------------------------
# Motion under a measured input


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Input:
    """What drives the plant: a column, and force per unit of it where that is known."""

    name: str
    unit: str
    values: Real
    force_per_unit: float | None
    why_no_force: str


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Driven:
    """The linear model of a driven plant over one stretch of a log."""

    start: StateSpace
    period_s: float
    drive: Real
    position: Real

    def columns(self, stiffness: float, damping: float, delay_s: float) -> Real:
        """Positions by a unit gain, a unit position, a unit speed and a unit constant force."""
        a = self.start.a.copy()
        a[1, 0], a[1, 1] = -stiffness, -damping
        sampled = sample(replace(self.start, a=a), self.period_s, delay_s)
        size = a.shape[0]
        begins = np.zeros((size, 2))
        begins[0, 0] = begins[1, 1] = 1.0
        if self.start.names[-1] == "filtered position":
            begins[-1, 0] = 1.0
        return _held_motion(sampled, self.drive, begins)


def _held_motion(sampled: SampledPlant, drive: Real, begins: Real) -> Real:
    """Measured position, column by column: by the drive, by each first state, by a unit force.

    The recursion is run in blocks: inside a block a Toeplitz matrix, from block to block the
    states, so that a long log costs matrix products and few turns of a loop.
    """
    size, count = sampled.psi.shape[0], drive.size
    block = int(min(max(16.0, math.sqrt(count)), 512.0))
    turns = -(-count // block)

    # States, the drive acting before (for the fraction of the delay), a constant 1 (for the force).
    step = np.zeros((size + 2, size + 2))
    step[:size, :size] = np.eye(size) + sampled.psi
    step[:size, size] = sampled.gamma1
    step[:size, size + 1] = sampled.gamma_force
    step[-1, -1] = 1.0
    enter = np.concatenate([sampled.gamma0, [1.0, 0.0]])
    row = np.concatenate([sampled.c_measured, [0.0, 0.0]])

    looks = np.empty((block + 1, size + 2))
    reach = np.empty((size + 2, block))
    looks[0], reach[:, -1] = row, enter
    for k in range(block):
        looks[k + 1] = looks[k] @ step
        if k + 1 < block:
            reach[:, block - 2 - k] = step @ reach[:, block - 1 - k]
    pulse = np.concatenate([[0.0], looks[:block] @ enter])
    at = np.arange(block)
    behind = at[:, np.newaxis] - at
    inner = np.where(behind > 0, pulse[np.maximum(behind, 0)], 0.0)
    leap = np.linalg.matrix_power(step, block)

    acting = np.zeros(turns * block)
    whole = sampled.whole_delay
    if whole < count:
        acting[whole:count] = drive[: count - whole] - drive[0]
    blocks = acting.reshape(turns, block).T
    entered = reach @ blocks
    channels = begins.shape[1] + 2
    states = np.zeros((turns, size + 2, channels))
    states[0, :size, 1:-1] = begins
    states[0, -1, -1] = 1.0
    for turn in range(turns - 1):
        states[turn + 1] = leap @ states[turn]
        states[turn + 1, :, 0] += entered[:, turn]
    out = np.einsum("ks,tsc->tkc", looks[:block], states)
    out[:, :, 0] += (inner @ blocks).T
    return np.asarray(out.reshape(turns * block, channels)[:count])


def _input_of(log: Log, loop: Loop | None) -> _Input | None:
    """The column that drives, the nearest to the force first; None where none changes."""
    rotary = log.position_unit == "rad"
    force_unit = "N m" if rotary else "N"
    known = log.position_unit != "count"
    if log.force is not None and np.ptp(log.force) > 0.0:
        return _Input(
            name="force",
            unit=log.force_unit,
            values=log.force,
            force_per_unit=1.0 if known else None,
            why_no_force="the position is in counts; give the loop file for its scale",
        )
    actuator = loop.actuator if loop is not None else None
    why = f"{force_unit} per {{}} is not known; give the loop file, or log the force"
    if log.current_a is not None and np.ptp(log.current_a) > 0.0:
        return _Input(
            name="current",
            unit="A",
            values=log.current_a,
            force_per_unit=actuator.force_constant if actuator is not None and known else None,
            why_no_force=why.format("A"),
        )
    if log.output_code is not None and np.ptp(log.output_code) > 0.0:
        if actuator is not None and actuator.drive == "voltage":
            raise IdentificationError(
                "output",
                "voltage drive",
                "",
                "with voltage drive the current depends on the motion",
                "log the current, too",
            )
        scale = None
        if actuator is not None and known:
            scale = actuator.polarity * actuator.step * actuator.force_constant
        return _Input(
            name="output",
            unit="code",
            values=log.output_code,
            force_per_unit=scale,
            why_no_force=why.format("code"),
        )
    return None


def _longest_stretch(log: Log) -> tuple[int, int]:
    """Rows of the longest stretch without missing samples."""
    breaks = np.flatnonzero(np.diff(log.index) > 1) + 1
    edges = np.concatenate([[0], breaks, [log.samples]])
    longest = int(np.argmax(np.diff(edges)))
    return int(edges[longest]), int(edges[longest + 1])


def _projected(columns: Real, position: Real) -> Real:
    """What the best mix of columns leaves of the position."""
    norms = np.sqrt(np.einsum("ij,ij->j", columns, columns))
    basis, _ = np.linalg.qr(columns / np.where(norms > 0.0, norms, 1.0))
    return np.asarray(basis @ (basis.T @ position) - position)


def _filtered_guesses(model: _Driven) -> list[Real]:
    """First guesses of stiffness and damping over mass and the delay, the better first.

    State-variable filters 1/(s + c)^3 of several corners turn the differential equation into a
    linear one for each delay (Young and Jakeman, 1980, from memory); here by Fourier transform,
    the input as held, with the transient of the ends left out.
    """
    period, count = model.period_s, model.position.size
    span = count * period
    found: list[Real] = []
    for corner in np.geomspace(12.0 / span, 0.6 / period, 8):
        settle = int(8.0 / (corner * period))
        if settle > 0.6 * count:
            continue
        size = 1 << (count + 2 * settle - 1).bit_length()
        omega = 2.0 * np.pi * np.fft.rfftfreq(size, period)
        low_pass = 1.0 / (1j * omega / corner + 1.0) ** 3
        # Held samples lag half a period, and their upper images are weaker.
        hold = np.exp(-0.5j * omega * period) * np.sinc(omega * period / (2.0 * np.pi))

        def spectrum(values: Real, size: int = size) -> Complex:
            extended = np.concatenate([values, np.full(size - count, values[-1])])
            return np.asarray(np.fft.rfft(extended - values[0]))

        y = spectrum(model.position) * low_pass
        u = spectrum(model.drive) * low_pass * hold
        keep = slice(settle, count)
        plain = np.fft.irfft(y, size)[keep]
        speed = np.fft.irfft(y * 1j * omega, size)[keep]
        acceleration = np.fft.irfft(y * (1j * omega) ** 2, size)[keep]
        # Only one column depends on the delay: the others are taken out of it once.
        others = np.stack([-plain, -speed, np.ones(plain.size)], axis=1)
        norms = np.sqrt(np.einsum("ij,ij->j", others, others))
        basis, _ = np.linalg.qr(others / np.where(norms > 0.0, norms, 1.0))
        apart = acceleration - basis @ (basis.T @ acceleration)
        delays = 0.5 * period * np.arange(min(2 * MOST_DELAY, max(2, count // 20)) + 1)
        pushed = np.fft.irfft(u * np.exp(-1j * np.outer(delays, omega)), size)[:, keep]
        pushed_apart = pushed - (pushed @ basis) @ basis.T
        strength = np.einsum("ij,ij->i", pushed_apart, pushed_apart)
        gains = (pushed_apart @ apart) / np.where(strength > 0.0, strength, np.inf)
        best = int(np.argmax(gains * gains * strength))
        left = acceleration - gains[best] * pushed[best]
        solution = np.linalg.lstsq(others, left, rcond=None)[0]
        found.append(
            np.array([max(float(solution[0]), 0.0), max(float(solution[1]), 0.0), delays[best]])
        )
    ranked = []
    for guess in found:
        missed = _projected(model.columns(*guess), model.position)
        ranked.append((float(missed @ missed), guess))
    ranked.sort(key=lambda pair: pair[0])
    return [guess for _, guess in ranked]


# --------------------------------------------------------------------------------------------------
# Motion under a measured input, with friction


def _rubbing_motion(p: Real, model: _Driven, rows: tuple[int, int], stood: bool = False) -> Real:
    """Measured position with Coulomb friction in some rows, exact between the events.

    Values are stiffness and damping over mass, delay, gain, first position, first speed, constant
    acceleration, friction over mass. Between two reversals friction is a constant force; where the
    mass stands it stays as long as spring and drive stay within the friction; a mass that stood at
    first stays in any case until the drive changes. A lag of the drive and of the sensor are exact
    but where the speed changes sign: there the lagging drive counts with its mean, and the sensor
    sees a straight way.
    """
    square, rate, delay, gain, x, v, bias, friction = (float(value) for value in p)
    begin, end = rows
    period = model.period_s
    whole, fraction = split_delay(delay, period)
    a = model.start.a.copy()
    a[1, 0], a[1, 1] = -square, -rate
    names = model.start.names
    lag_at = names.index("force") if "force" in names else 0
    eye_at = names.index("filtered position") if "filtered position" in names else 0
    lag = -float(a[lag_at, lag_at]) if lag_at else 0.0
    eye = -float(a[eye_at, eye_at]) if eye_at else 0.0

    spans = [fraction * period, (1.0 - fraction) * period]
    psi, _, push = propagate(replace(model.start, a=a), np.array(spans))
    parts = []
    for number, span in enumerate(spans):
        rows_of = []
        for at in (0, 1, eye_at):
            lagging = float(psi[number, at, lag_at]) if lag_at else 0.0
            seen = float(psi[number, at, eye_at]) if eye_at else 0.0
            first, second = psi[number, at, 0], psi[number, at, 1]
            rows_of.append((float(first), float(second), float(push[number, at]), lagging, seen))
        mean = -math.expm1(-lag * span) / (lag * span) if lag * span > 0.0 else 0.0
        parts.append((span, rows_of, math.exp(-lag * span), mean, math.exp(-eye * span)))

    # The drive's pull as far as rows need it, and what the delay reaches back to.
    back = max(0, begin - whole - 1)
    pulls = (gain * model.drive[back:end] + bias).tolist()
    behind, out = 0.0, []
    seen = x
    held = pulls[max(begin - whole, 0) - back]
    last = held
    for k in range(begin - back, end - back):
        out.append(seen)
        older, newer = pulls[max(k - whole - 1, 0)], pulls[max(k - whole, 0)]
        for (span, rows_of, keep, mean, blur), pull in zip(parts, (older, newer), strict=True):
            if span == 0.0 or (stood and pull == held):
                continue
            stood = False
            if lag_at:
                behind += last - pull
            last = pull
            force = pull + mean * behind
            if v == 0.0:
                net = force - square * x
                if -friction <= net <= friction:
                    behind *= keep
                    seen = x + (seen - x) * blur if eye_at else x
                    continue
                side = net
            else:
                side = v
            acting = pull - math.copysign(friction, side)
            (xx, xv, xg, xq, _), (vx, vv, vg, vq, _), (yx, yv, yg, yq, yy) = rows_of
            after = v + vx * x + vv * v + vg * acting + vq * behind
            if after * side < 0.0:
                old = x
                x, v = _through_turns(x, v, square, rate, force, friction, span)
                if eye_at:
                    slope = (x - old) / (eye * span)
                    seen = x - slope + (seen - old + slope) * blur
            else:
                if eye_at:
                    seen += yx * x + yv * v + yg * acting + yq * behind + yy * seen
                x, v = x + xx * x + xv * v + xg * acting + xq * behind, after
            behind *= keep
            if not eye_at:
                seen = x
        if not abs(x) < 1e12:
            return np.full(end - begin, np.inf)
    return np.array(out)


def _through_turns(
    x: float, v: float, square: float, rate: float, pull: float, friction: float, span: float
) -> Pair:
    """Position and speed after a time in which the speed changes sign."""
    for _ in range(8):
        net = pull - square * x
        if v == 0.0 and abs(net) <= friction:
            return x, 0.0
        side = math.copysign(1.0, v if v != 0.0 else net)
        push = net - rate * v - friction * side
        end_v = _speed_after(v, push, square, rate, span)
        if end_v * side >= 0.0:
            return x + _way_after(v, push, square, rate, span), end_v
        # Regula falsi; the stale end's value is halved (Illinois), from memory.
        low, high = 0.0, span
        at_low, at_high = v, end_v
        for _ in range(40):
            fall = at_low - at_high
            middle = low + (high - low) * at_low / fall if fall != 0.0 else 0.5 * (low + high)
            middle = min(max(middle, low), high)
            speed = _speed_after(v, push, square, rate, middle)
            if speed * side >= 0.0:
                done = middle - low
                low, at_low, at_high = middle, speed, 0.5 * at_high
            else:
                done = high - middle
                high, at_high, at_low = middle, speed, 0.5 * at_low
            if done <= 1e-12 * span or speed == 0.0:
                low = middle
                break
        x, v, span = x + _way_after(v, push, square, rate, low), 0.0, span - low
    return x, v


def _speed_after(v: float, push: float, square: float, rate: float, t: float) -> float:
    """Speed of the linear motion that starts with a speed and an acceleration."""
    alpha = 0.5 * rate
    inside = alpha * alpha - square
    root = math.sqrt(abs(inside))
    if root * t < 1e-8:
        even, odd = 1.0, t
    elif inside < 0.0:
        even, odd = math.cos(root * t), math.sin(root * t) / root
    else:
        even, odd = math.cosh(root * t), math.sinh(root * t) / root
    return math.exp(-alpha * t) * (v * even + (push + alpha * v) * odd)


_GAUSS = (
    (0.069431844202973714, 0.17392742256872693),
    (0.33000947820757187, 0.32607257743127307),
    (0.66999052179242813, 0.32607257743127307),
    (0.93056815579702629, 0.17392742256872693),
)


def _way_after(v: float, push: float, square: float, rate: float, t: float) -> float:
    """Way of that motion, by Gauss's rule over a time that is short against its period."""
    return t * sum(w * _speed_after(v, push, square, rate, u * t) for u, w in _GAUSS)


def _moving_stretch(model: _Driven, omega: float, noise: float) -> tuple[int, int, bool]:
    """The longest motion without a stand in it, with the stand before it and one cycle less.

    Also tells whether the stretch begins with a stand.

    Where the mass stands, friction is anything up to its level, and where it comes to stand jumps
    with the parameters: what is behind a stand tells little and spoils the search.
    """
    count = model.position.size
    cycle = max(4, round(2.0 * math.pi / (omega * model.period_s)))
    width = min(max(8, cycle // 3), count // 4)
    windows = np.lib.stride_tricks.sliding_window_view(model.position, width)
    stands = np.ptp(windows, axis=1) < 7.0 * noise
    edges = np.flatnonzero(np.diff(np.concatenate([[True], stands, [True]]).astype(int)))
    starts, ends = edges[::2], edges[1::2]
    if starts.size == 0:
        return 0, count, bool(stands[0])
    longest = int(np.argmax(ends - starts))
    begin = 0 if longest == 0 else int(ends[longest - 1])
    end = int(ends[longest])
    if end >= windows.shape[0]:
        return begin, count, bool(stands[begin])
    end = min(count, max(end - cycle, int(starts[longest]) + 2 * cycle))
    return begin, end, bool(stands[begin])


def _rubbing_fit(model: _Driven, linear: Fit, noise: float) -> tuple[Fit, tuple[int, int]] | None:
    """Fit eight numbers with friction, from several first guesses; None where none settles.

    Also returns the samples that were fitted.
    """
    period = model.period_s
    start = np.concatenate([linear.values, [0.0]])
    rate = max(math.sqrt(float(start[0])), 1.0 / (period * model.position.size))
    reach = float(np.ptp(model.position))
    force = abs(float(start[3])) * float(np.ptp(model.drive))
    scale = np.array(
        [rate**2, rate, period, abs(float(start[3])), reach, reach * rate, reach * rate**2, force]
    )
    low = np.array([0.0, 0.0, 0.0, -np.inf, -np.inf, -np.inf, -np.inf, 0.0])
    high = np.array([np.inf] * 7 + [2.0 * force])
    high[2] = (MOST_DELAY + 10) * period
    begin, end, stood = _moving_stretch(model, rate, noise)
    if end - begin < 60:
        return None
    if stood:
        # From a stand there is no first speed; the other numbers are free.
        start[4], start[5] = float(model.position[begin]), 0.0
        low[5] = high[5] = 0.0

    def residuals_to(end: int) -> Callable[[Real], Real]:
        return lambda p: _rubbing_motion(p, model, (begin, end), stood) - model.position[begin:end]

    def search(guess: Real, end: int) -> Fit:
        residuals = residuals_to(end)

        def slopes(p: Real, left: Real) -> Real:
            out = np.zeros((left.size, 8))
            for column in range(8):
                if column == 5 and stood:
                    continue
                step = 1e-6 * max(abs(float(p[column])), 1e-2 * float(scale[column]))
                moved = p.copy()
                moved[column] += step
                out[:, column] = (residuals(moved) - left) / step
            return out

        return least_squares(
            residuals,
            guess,
            scale=scale,
            low=low,
            high=high,
            jacobian=slopes,
            tolerance=1e-8,
            settled=1e-4,
            turns=40,
        )

    ranked = []
    for share in (0.003, 0.01, 0.03, 0.1, 0.25):
        for damped in (1.0, 0.3):
            guess = start.copy()
            guess[1] *= damped
            guess[7] = share * force
            left = residuals_to(end)(guess)
            ranked.append((float(left @ left), guess))
    ranked.sort(key=lambda pair: pair[0])
    best: Fit | None = None
    for number, (_, guess) in enumerate(ranked[:6]):
        fit = search(guess, end)
        best = fit if best is None or fit.cost < best.cost else best
        over = best.cost / max(noise**2 * best.residuals.size, 1e-300)
        # Where two searches end far off, it is not friction that is missing.
        if (best.converged and over < 1.2) or (number >= 1 and over > 100.0):
            break
    if best is None:
        return None
    # The last swings before a stand are ragged, too.
    dead = float(best.values[7]) / max(float(best.values[0]), 1e-300)
    cycle = max(4, round(2.0 * math.pi / (rate * period)))
    if end < model.position.size and dead > 0.0 and end - begin > 3 * cycle:
        windows = np.lib.stride_tricks.sliding_window_view(model.position[begin:end], cycle)
        wide = np.flatnonzero(np.ptp(windows, axis=1) > 5.0 * dead)
        shorter = begin + int(wide[-1]) + cycle if wide.size else end
        if begin + 60 < shorter < end:
            end = shorter
            best = search(best.values, end)
    if not (best.converged and best.cost < 1.3 * noise**2 * best.residuals.size):
        return None
    return best, (begin, end)


def _response(log: Log, loop: Loop | None, source: _Input) -> Identification:
    """Identify a plant that is driven by a measured input."""
    first, last = _longest_stretch(log)
    if last - first < 40:
        raise IdentificationError(
            log.source or "log",
            float(last - first),
            "samples without a gap",
            "too few to follow the motion",
            "log at least some hundred in a row",
        )
    position, drive = log.position[first:last], source.values[first:last]
    if float(np.ptp(position)) <= 2.0 * (log.position_step or 0.0):
        raise IdentificationError(
            "position",
            float(np.ptp(position)),
            f"{log.position_unit} from end to end",
            "the position does not move",
            f"drive it harder, or see whether the {source.name} is that of this axis",
        )
    if not float(np.ptp(drive)) > 0.0:
        raise IdentificationError(
            source.name,
            float(drive[0]),
            source.unit,
            "does not change in the longest stretch without a gap",
            "log without gaps while it changes",
        )
    actuator = loop.actuator if loop is not None else None
    corner = actuator.bandwidth_rad_per_s if actuator is not None else None
    filter_corner = loop.sensor.filter_corner_rad_per_s if loop is not None else None
    unit_mass = Plant(
        motion="rotary" if log.position_unit == "rad" else "linear",
        mass=1.0,
        current_bandwidth_rad_per_s=corner if source.name == "output" else None,
        sensor_corner_rad_per_s=filter_corner,
    )
    # The scale of the input moves into the gain; near one it keeps the columns alike.
    swing = float(np.ptp(drive))
    model = _Driven(
        start=state_space(unit_mass),
        period_s=log.period_s,
        drive=(drive - drive[0]) / swing,
        position=position - position[0],
    )
    fit, full = _driven_fit(model, loop)
    return _driven_identification(log, source, swing, model, full, (first, last))


def _busiest(model: _Driven) -> _Driven:
    """The part of a long log in which the drive changes most, for the search."""
    count = model.position.size
    if count <= _SEARCHED:
        return model
    changes = np.concatenate([[0.0], np.cumsum(np.diff(model.drive) ** 2)])
    begin = int(np.argmax(changes[_SEARCHED - 1 :] - changes[: count - _SEARCHED + 1]))
    # Not from the very first change on: what was before tells how it stood.
    begin = max(0, begin - _SEARCHED // 8)
    part = slice(begin, begin + _SEARCHED)
    return replace(model, drive=model.drive[part], position=model.position[part])


def _three_number_fit(model: _Driven, guess: Real) -> Fit:
    """Stiffness and damping over mass, and delay, of least output error."""
    period = model.period_s
    rate = max(math.sqrt(float(guess[0])), 1.0 / (period * model.position.size))
    scale = np.array([rate**2, rate, period])

    def residuals(p: Real) -> Real:
        return _projected(model.columns(*p), model.position)

    def slopes(p: Real, left: Real) -> Real:
        out = np.empty((left.size, 3))
        for column in range(3):
            step = 1e-6 * max(abs(float(p[column])), 1e-2 * float(scale[column]))
            moved = p.copy()
            moved[column] += step
            out[:, column] = (residuals(moved) - left) / step
        return out

    return least_squares(
        residuals,
        guess,
        scale=scale,
        low=np.zeros(3),
        high=np.array([np.inf, np.inf, (MOST_DELAY + 10) * period]),
        jacobian=slopes,
        tolerance=1e-9,
        settled=1e-5,
        turns=60,
    )


def _driven_fit(model: _Driven, loop: Loop | None) -> tuple[Fit, Fit]:
    """Output error over stiffness, damping and delay; the other numbers follow linearly.

    Returns the fit of the three, and one with all seven: stiffness and damping over mass, delay,
    gain, first position, first speed, constant acceleration.
    """
    period = model.period_s
    small = _busiest(model)
    guesses = _filtered_guesses(small)[:3]
    if loop is not None:
        m = loop.mechanics
        near = np.array([m.stiffness / m.mass, m.damping / m.mass, loop.processor.delay_s])
        guesses.append(near)
    if not guesses:
        usual = 12.0 / (period * small.position.size)
        guesses = [np.array([usual**2, usual, period])]
    fits = [_three_number_fit(small, guess) for guess in guesses]
    best = min(fits, key=lambda f: f.cost)
    if small is not model:
        best = _three_number_fit(model, best.values)
    columns = model.columns(*best.values)
    linear = np.linalg.lstsq(columns, model.position, rcond=None)[0]
    rate = max(math.sqrt(float(best.values[0])), 1.0 / (period * model.position.size))
    jacobian = np.empty((model.position.size, 7))
    jacobian[:, 3:] = columns
    for column, scale_of in enumerate((rate**2, rate, period)):
        step = 1e-5 * max(abs(float(best.values[column])), 1e-2 * scale_of)
        up, down = best.values.copy(), best.values.copy()
        up[column] += step
        down[column] = max(down[column] - step, 0.0)
        change = (model.columns(*up) - model.columns(*down)) @ linear
        jacobian[:, column] = change / (up[column] - down[column])
    whole = Fit(
        values=np.concatenate([best.values, linear]),
        residuals=columns @ linear - model.position,
        jacobian=jacobian,
        at_bound=np.concatenate([best.at_bound, np.zeros(4, dtype=bool)]),
        converged=best.converged,
    )
    return best, whole


def _driven_identification(
    log: Log,
    source: _Input,
    swing: float,
    model: _Driven,
    full: Fit,
    rows: tuple[int, int],
) -> Identification:
    """Turn a fitted model into quantities with intervals, and say what is missing."""
    count = model.position.size
    turn = 2.0 * math.pi
    rubbed, part, doubtful = _friction_asked_for(model, full)
    origin = rows[0]
    used = (origin + part[0], origin + part[1])

    # Without the drive the free motion alone must explain clearly less.
    undriven = _projected(model.columns(*full.values[:3])[:, 1:], model.position)
    drop = count * math.log(max(float(undriven @ undriven), 1e-300) / max(full.cost, 1e-300))
    if drop < 40.0 + 4.0 * math.log(count):
        raise IdentificationError(
            source.name,
            swing,
            f"{source.unit} from end to end",
            "moves the position too little to tell anything",
            "drive it harder, or longer",
        )

    full = rubbed or full
    covariance, white = _covariance(full, range(full.values.size))
    stiffness, damping, delay, gain = (float(v) for v in full.values[:4])

    def of(value: float, gradient: Sequence[float], *, positive: bool = True) -> Estimate:
        slope = np.array(gradient, dtype=np.float64)
        told = np.flatnonzero(slope)
        inner = covariance[np.ix_(told, told)]
        variance = math.inf
        if np.isfinite(np.diag(inner)).all():
            variance = float(slope[told] @ inner @ slope[told])
        return _estimate(value, variance, positive=positive)

    unknown: list[tuple[str, str]] = []
    square = of(stiffness, [1.0], positive=False)
    frequency = ratio = None
    # Three deviations and more: a free mass must not ring by chance.
    sprung = stiffness > 1.7 * (square.high - stiffness)
    if sprung:
        omega = math.sqrt(stiffness)
        frequency = Estimate(
            value=omega / turn, low=math.sqrt(square.low) / turn, high=math.sqrt(square.high) / turn
        )
        ratio = of(
            damping / (2.0 * omega), [-damping / (4.0 * stiffness * omega), 1.0 / (2.0 * omega)]
        )
    else:
        why = "no stiffness shows clearly: the mass is free, or the log too short for its return"
        unknown += [("natural_frequency_hz", why), ("damping_ratio", why)]
    mass = viscous = spring = None
    per_unit = gain / swing
    if source.force_per_unit is None:
        why = source.why_no_force
        unknown += [("mass", why), ("damping", why), ("stiffness", why)]
    else:
        scale = abs(source.force_per_unit / per_unit)
        relative = _Z95 * math.sqrt(max(float(covariance[3, 3]), 0.0)) / abs(gain)
        if relative < 0.5:  # infinite where only a sum with the standing force is told
            mass = Estimate(
                value=scale, low=scale / (1.0 + relative), high=scale / (1.0 - relative)
            )
            viscous = of(damping * scale, [0.0, scale, 0.0, -damping * scale / gain])
            spring = of(stiffness * scale, [scale, 0.0, 0.0, -stiffness * scale / gain])
        else:
            why = (
                f"the log does not tell it from a standing force or friction; let the "
                f"{source.name} change often, in both directions"
            )
            unknown += [("mass", why), ("damping", why), ("stiffness", why)]
    late = of(delay, [0.0, 0.0, 1.0])
    if not late.high - late.low <= 20.0 * log.period_s:
        unknown.append(("delay_s", f"the {source.name} changes too slowly to tell it"))
    rubbing = friction = None
    if rubbed is not None:
        level = float(rubbed.values[7])
        rubbing = of(level, [0.0] * 7 + [1.0])
        if mass is not None:
            scale = mass.value
            friction = of(level * scale, [0.0, 0.0, 0.0, -level * scale / gain, 0, 0, 0, scale])
        else:
            unknown.append(("friction", "known over the mass only, see mass"))
    else:
        why = "what the model leaves asks for no friction; let it ring freely to see less of it"
        if doubtful:
            why = f"what the model leaves may be friction; {doubtful}"
        unknown.append(("friction", why))
    noise = _difference_noise(full.residuals)
    left = math.sqrt(full.cost / full.residuals.size)
    rest = None
    if sprung:
        away = float(full.values[6]) - gain * float(source.values[origin]) / swing
        rest = of(
            float(log.position[origin]) + away / stiffness,
            [
                -away / stiffness**2,
                0.0,
                0.0,
                -float(source.values[origin]) / swing / stiffness,
                0.0,
                0.0,
                1.0 / stiffness,
            ],
            positive=False,
        )
    seen = of(damping, [0.0, 1.0])
    complaints = [str(complaint) for complaint in log.complaints]
    complaints += _driven_doubts(log, source, per_unit, rows, left, noise, white, full)
    return Identification(
        kind="response",
        position_unit=log.position_unit,
        natural_frequency_hz=frequency,
        damping_ratio=ratio,
        mass=mass,
        damping=viscous,
        stiffness=spring,
        delay_s=None if "delay_s" in dict(unknown) else late,
        unknown=tuple(unknown),
        friction=friction,
        damping_kinds=(("viscous",) if seen.low > 0.0 else ())
        + (("coulomb",) if rubbed is not None else ()),
        undecided=("quadratic",) if rubbed is not None else ("coulomb", "quadratic"),
        decay_rate_per_s=_if_told(of(0.5 * damping, [0.0, 0.5])),
        friction_acceleration=None if rubbing is None else _if_told(rubbing),
        gain=_if_told(of(per_unit, [0.0, 0.0, 0.0, 1.0 / swing], positive=False)),
        input_name=source.name,
        input_unit=source.unit,
        offset=None if rest is None else _if_told(rest),
        first_s=float(log.index[used[0]]) * log.period_s,
        last_s=float(log.index[used[1] - 1]) * log.period_s,
        cycles=0.0 if frequency is None else frequency.value * (used[1] - used[0]) * log.period_s,
        residual_rms=left,
        noise_rms=noise,
        rate_hz=log.rate_hz,
        samples=log.samples,
        complaints=tuple(complaints),
    )


def _if_told(estimate: Estimate) -> Estimate | None:
    return estimate if math.isfinite(estimate.high) else None


def _friction_asked_for(model: _Driven, linear: Fit) -> tuple[Fit | None, tuple[int, int], str]:
    """The fit with friction, if the linear one leaves more than noise; why not, where it does."""
    count = model.position.size
    noise = _difference_noise(linear.residuals)
    _, white = _covariance(linear, range(7))
    if white or linear.cost < 1.1 * noise**2 * count:
        return None, (0, count), ""
    if count > MOST_WITH_FRICTION:
        why = f"it is looked for in at most {MOST_WITH_FRICTION} samples without a gap; cut the log"
        return None, (0, count), why
    found = _rubbing_fit(model, linear, noise)
    if found is None:
        return None, (0, count), "no fit with it settles; let it ring freely"
    fit, (begin, end) = found
    part = replace(model, drive=model.drive[begin:end], position=model.position[begin:end])
    plain = _three_number_fit(part, linear.values[:3])
    gain = _criterion(plain.cost, end - begin, 7) - _criterion(fit.cost, end - begin, 8)
    if gain < CLEAR:
        return None, (0, count), "but it explains no better; let it ring freely"
    return fit, (begin, end), ""


def _driven_doubts(
    log: Log,
    source: _Input,
    per_unit: float,
    rows: tuple[int, int],
    left: float,
    noise: float,
    white: bool,
    fit: Fit,
) -> list[str]:
    """What is odd about the fit of a driven motion."""
    out = []
    unit = log.position_unit
    if not fit.converged:
        out.append("the fit did not settle; its values are not to be relied on")
    if rows[1] - rows[0] < log.samples:
        out.append(
            f"only the longest stretch without a gap is used: lines {int(log.lines[rows[0]])} to "
            f"{int(log.lines[rows[1] - 1])}"
        )
    sign = per_unit if source.force_per_unit is None else per_unit * source.force_per_unit
    if sign < 0.0:
        out.append(
            f"the position falls when the {source.name} rises: a polarity is wrong, and a loop "
            f"closed like this runs away"
        )
    if log.reference is not None and source.name == "output" and np.ptp(log.reference) > 0.0:
        out.append(
            "the output may come from a closed loop; noise that goes round in it biases the fit "
            "where the motion does not stand far above the noise"
        )
    if source.name != "output":
        out.append(
            f"the {source.name} is taken as held from sample to sample; where it is measured and "
            f"smooth, the delay comes out up to half a sample off"
        )
    coarse = log.position_step is not None and noise < 0.4 * log.position_step
    if coarse and log.position_step is not None:
        out.append(
            f"noise of {_amount(noise, unit)} rms is less than half a sensor step of "
            f"{_amount(log.position_step, unit)}: what is left is rounding and not noise, and the "
            f"intervals are not to be relied on"
        )
    if left > 1.2 * noise and not white:
        out.append(
            f"the model leaves {_amount(left, unit)} rms where the noise is "
            f"{_amount(noise, unit)}: something is not in it, such as friction, a stop, a second "
            f"mode, or a force that is not logged"
        )
    return out


# --------------------------------------------------------------------------------------------------
# For everyone


def identify_log(log: Log, kind: str | None = None, loop: Loop | None = None) -> Identification:
    """Tell what a log tells about the plant.

    Parameters
    ----------
    log : Log
        The log.
    kind : str or None
        "ring_down" for a free decay, "response" for a motion under a measured output, current or
        force; None to see from the log: a response where one of these columns changes.
    loop : Loop or None
        The loop file of the plant, for scales and plausibility.

    Returns
    -------
    Identification
        Estimates, what is unknown, and what is odd.

    Raises
    ------
    IdentificationError
        If the kind is unknown, or the log tells nothing; the error says why and what to log
        instead.

    Notes
    -----
    The methods and their limits are described in docs/identify.md.
    """
    if kind not in {None, "ring_down", "response"}:
        raise IdentificationError(
            "kind", kind, "", "must be ring_down or response", "leave it out to see from the log"
        )
    if loop is not None:
        log = in_units_of(log, loop)
    source = None if kind == "ring_down" else _input_of(log, loop)
    if source is not None:
        return _response(log, loop, source)
    if kind == "response":
        raise IdentificationError(
            log.source or "log",
            None,
            "",
            "no output, current or force changes in it",
            "log what drives the mass beside its position",
        )
    return _ring_down(log, loop)


def mass_of_two_decays(bare: Identification, loaded: Identification, added_mass: float) -> Estimate:
    """Mass from two free decays, one of them with a known mass added.

    Parameters
    ----------
    bare : Identification
        The decay as the plant is.
    loaded : Identification
        The decay with the mass added and nothing else changed.
    added_mass : float
        What was added, above 0. [kg or kg m^2]

    Returns
    -------
    Estimate
        Mass or inertia without what was added. [kg or kg m^2]

    Raises
    ------
    IdentificationError
        If the added mass is not above 0, or a frequency is missing, or the frequency did not
        clearly fall.

    Notes
    -----
    ``m = added/((f1/f2)^2 - 1)`` from ``k = m w1^2 = (m + added) w2^2``; the interval by linear
    propagation; own derivation.

    Examples
    --------
    >>> two, one = (Estimate(value=f, low=f, high=f) for f in (2.0, 1.0))
    >>> facts = dict(kind="ring_down", position_unit="m", first_s=0.0, last_s=1.0, cycles=9.0,
    ...              residual_rms=0.0, noise_rms=0.0, rate_hz=100.0, samples=100)
    >>> bare = Identification(natural_frequency_hz=two, **facts)
    >>> loaded = Identification(natural_frequency_hz=one, **facts)
    >>> mass_of_two_decays(bare, loaded, 0.75).value
    0.25
    """
    first, second = bare.natural_frequency_hz, loaded.natural_frequency_hz
    if first is None or second is None or not (math.isfinite(added_mass) and added_mass > 0.0):
        raise IdentificationError(
            "added_mass",
            added_mass,
            "kg or kg m^2",
            "two decays with a frequency and a mass above 0 between them are needed",
            "log both, with a mass that lowers the frequency by some percent",
        )
    square = (first.value / second.value) ** 2
    relative = math.hypot(
        (first.high - first.low) / (2.0 * first.value),
        (second.high - second.low) / (2.0 * second.value),
    )
    half = 2.0 * square * relative
    if square - 1.0 <= 2.0 * half:
        raise IdentificationError(
            "frequency ratio",
            first.value / second.value,
            "",
            "must be clearly above 1 for the added mass to tell",
            "add more mass, and change nothing else",
        )
    mass = added_mass / (square - 1.0)
    spread = mass * half / (square - 1.0)
    return Estimate(value=mass, low=mass - spread, high=mass + spread)


_LINEAR_KEYS = {
    "mass": ("mass_kg", "kg"),
    "damping": ("damping_n_s_per_m", "N s/m"),
    "stiffness": ("stiffness_n_per_m", "N/m"),
    "friction": ("friction_n", "N"),
}
_ROTARY_KEYS = {
    "mass": ("inertia_kg_m2", "kg m^2"),
    "damping": ("damping_n_m_s_per_rad", "N m s/rad"),
    "stiffness": ("stiffness_n_m_per_rad", "N m/rad"),
    "friction": ("friction_n_m", "N m"),
}


def as_json(identification: Identification) -> dict[str, Any]:
    """Write what was identified as plain data.

    Parameters
    ----------
    identification : Identification
        What was identified.

    Returns
    -------
    dict
        The keys of docs/identify.md, ready for a JSON writer.

    Notes
    -----
    Rotary motion has keys of its own for mass, damping, stiffness and friction.

    Examples
    --------
    >>> sorted(_interval(Estimate(value=2.0, low=1.0, high=3.0)).items())
    [('high', 3.0), ('low', 1.0), ('value', 2.0)]
    """
    i = identification
    keys = _ROTARY_KEYS if i.position_unit == "rad" else _LINEAR_KEYS
    renamed = {name: key for name, (key, _) in keys.items()}
    return {
        "natural_frequency_hz": _interval(i.natural_frequency_hz),
        "damping_ratio": _interval(i.damping_ratio),
        renamed["mass"]: _interval(i.mass),
        renamed["damping"]: _interval(i.damping),
        renamed["stiffness"]: _interval(i.stiffness),
        "delay_s": _interval(i.delay_s),
        renamed["friction"]: _interval(i.friction),
        "unknown": {renamed.get(name, name): reason for name, reason in i.unknown},
        "damping_kinds": list(i.damping_kinds),
        "undecided": list(i.undecided),
        "residual_rms": i.residual_rms,
        "noise_rms": i.noise_rms,
        "rate_hz": i.rate_hz,
        "samples": i.samples,
        "complaints": list(i.complaints),
    }


def _interval(estimate: Estimate | None) -> dict[str, float] | None:
    if estimate is None:
        return None
    return {"value": estimate.value, "low": estimate.low, "high": estimate.high}


def identification_text(identification: Identification, loop: Loop | None = None) -> list[str]:
    """Write what was identified for people to read.

    Parameters
    ----------
    identification : Identification
        What was identified.
    loop : Loop or None
        The loop file of the plant; its mass turns what is known over the mass into forces.

    Returns
    -------
    list of str
        Lines without newlines.

    Notes
    -----
    Wording only; intervals are for 95 %.
    """
    i = identification
    unit = i.position_unit
    keys = _ROTARY_KEYS if unit == "rad" else _LINEAR_KEYS
    what = f"free decay: {i.cycles:.3g} cycles"
    if i.kind == "response":
        what = f"motion under the {i.input_name}"
    lines = [
        f"{what}, {i.first_s:.6g} to {i.last_s:.6g} s, of {i.samples} samples at "
        f"{format_si(i.rate_hz, 'Hz', 6)}"
    ]
    rows: list[tuple[str, Estimate | None, str]] = [
        ("natural frequency", i.natural_frequency_hz, "Hz"),
        ("damping ratio", i.damping_ratio, ""),
        ("decay rate", i.decay_rate_per_s, "1/s"),
        ("friction over mass", i.friction_acceleration, f"{unit}/s^2"),
        ("drag over mass", i.drag_per_position, f"1/{unit}"),
        ("inertia" if unit == "rad" else "mass", i.mass, keys["mass"][1]),
        ("damping", i.damping, keys["damping"][1]),
        ("stiffness", i.stiffness, keys["stiffness"][1]),
        ("friction", i.friction, keys["friction"][1]),
        (f"gain of the {i.input_name}", i.gain, f"{unit}/s^2 per {i.input_unit}"),
        ("delay", i.delay_s, "s"),
        ("rest position", i.offset, unit),
        ("let go at", i.release_s, "s"),
    ]
    lines += [f"{name:<20}{_shown(e, of)}" for name, e, of in rows if e is not None]
    named = ", ".join(i.damping_kinds) if i.damping_kinds else "none seen"
    lines.append(f"{'damping':<20}{named}{_evidence(i)}")
    if i.undecided:
        lines.append(f"{'undecided':<20}{', '.join(i.undecided)}")
    lines.append(
        f"{'left by the model':<20}{_amount(i.residual_rms, unit)} rms; noise "
        f"{_amount(i.noise_rms, unit)} rms"
    )
    if loop is not None and i.kind == "ring_down" and i.natural_frequency_hz is not None:
        lines.append(_with_mass(i, loop.mechanics.mass, keys))
    lines += [f"not known: {name.removesuffix('_s')}: {reason}" for name, reason in i.unknown]
    lines += [f"note: {complaint}" for complaint in i.complaints]
    return lines


def _evidence(i: Identification) -> str:
    """How far behind the next mix is."""
    rivals = [c for c in i.candidates if c.kinds != i.damping_kinds and len(c.kinds) > 0]
    own = [c for c in i.candidates if c.kinds == i.damping_kinds]
    if not rivals or not own:
        return ""
    smaller = [c for c in rivals if len(c.kinds) <= len(i.damping_kinds)]
    if not smaller:
        return ""
    next_best = min(smaller, key=lambda c: c.criterion)
    margin = next_best.criterion - own[0].criterion
    return f"; {' + '.join(next_best.kinds)} instead explains worse by {margin:.3g} (10 is clear)"


def _with_mass(i: Identification, mass: float, keys: dict[str, tuple[str, str]]) -> str:
    assert i.natural_frequency_hz is not None
    stiffness = mass * (2.0 * math.pi * i.natural_frequency_hz.value) ** 2
    unit = keys["mass"][1]
    parts = [f"stiffness {format_si(stiffness, keys['stiffness'][1])}"]
    if i.decay_rate_per_s is not None and "viscous" in i.damping_kinds:
        damping = 2.0 * mass * i.decay_rate_per_s.value
        parts.append(f"damping {format_si(damping, keys['damping'][1])}")
    if i.friction_acceleration is not None and i.position_unit != "count":
        friction = mass * i.friction_acceleration.value
        parts.append(f"friction {format_si(friction, keys['friction'][1])}")
    return f"with the loop file's {format_si(mass, unit)}: {', '.join(parts)}"


def _shown(estimate: Estimate, unit: str) -> str:
    """Value and interval, with two digits of the interval's half-width."""
    half = 0.5 * (estimate.high - estimate.low)
    digits = 4
    if half > 0.0 and estimate.value != 0.0:
        digits = 2 + math.ceil(math.log10(max(abs(estimate.value) / half, 1.0)))
    digits = min(max(digits, 3), 12)
    numbers = [_amount(v, unit, digits) for v in (estimate.value, estimate.low, estimate.high)]
    return f"{numbers[0]:<18} ({numbers[1]} to {numbers[2]})"
