"""Root finding and least squares behind a narrow face.

Rules of this file:

- What a check and an identification need is a few lines here, so that they start without a
  scientific library; anything larger comes from scipy.optimize inside its function.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Real = NDArray[np.float64]


def secant(
    function: Callable[[float], float | None], start: float, *, tolerance: float, turns: int = 30
) -> float | None:
    """Root near a start by secant steps.

    Parameters
    ----------
    function : callable
        Real function; None where it has no value. [-]
    start : float
        First point; the second is 0.01 beside it. [-]
    tolerance : float
        Absolute, on the root. [-]
    turns : int
        Most steps.

    Returns
    -------
    float or None
        The root; None when the steps leave the function's domain or do not converge.

    Notes
    -----
    Secant method (any numerical analysis text, from memory). Steps are held to 0.5.
    """
    a = start
    fa = function(a)
    if fa is None:
        return None
    if fa == 0.0:
        return a
    b = a - 0.01 if fa > 0.0 else a + 0.01
    fb = function(b)
    for _ in range(turns):
        if fb is None:
            return None
        if fb == 0.0:
            return b
        if fb == fa:
            return b if abs(b - a) <= 16.0 * tolerance else None
        step = -fb * (b - a) / (fb - fa)
        step = max(-0.5, min(0.5, step))
        a, fa = b, fb
        b = b + step
        if abs(step) <= tolerance:
            return b
        fb = function(b)
        if fb is not None and abs(step) < 1e-9 and abs(fb) >= abs(fa):
            # at the rounding floor of the function
            return b if abs(fb) < abs(fa) else a
    return None


def bisect(
    function: Callable[[float], float], low: float, high: float, *, tolerance: float
) -> float:
    """Root in a bracket by bisection.

    Parameters
    ----------
    function : callable
        Real function with a change of sign in the bracket. [-]
    low, high : float
        The bracket. [-]
    tolerance : float
        Absolute, on the root. [-]

    Returns
    -------
    float
        The root. [-]

    Notes
    -----
    Bisection: sure, and fast enough for what it is used for.
    """
    rising = function(low) < 0.0
    while high - low > tolerance:
        middle = 0.5 * (low + high)
        if middle in (low, high):
            break
        if (function(middle) < 0.0) == rising:
            low = middle
        else:
            high = middle
    return 0.5 * (low + high)


# --------------------------------------------------------------------------------------------------
# Least squares


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Fit:
    """Where a least-squares search ended.

    Parameters
    ----------
    values : array of float, shape (p,)
        The parameters. [-]
    residuals : array of float, shape (n,)
        The function there. [-]
    jacobian : array of float, shape (n, p)
        Its derivatives there. [-]
    at_bound : array of bool, shape (p,)
        Parameters that a bound holds back.
    converged : bool
        Whether the search ended by its tolerance and not by its turns.

    Notes
    -----
    Units are those of the caller.
    """

    values: Real
    residuals: Real
    jacobian: Real
    at_bound: NDArray[np.bool_]
    converged: bool

    @property
    def cost(self) -> float:
        """Sum of the squared residuals. [-]

        Notes
        -----
        Without the factor of one half that some texts put before it.
        """
        return float(self.residuals @ self.residuals)


def least_squares(
    function: Callable[[Real], Real],
    start: Real,
    *,
    scale: Real | None = None,
    low: Real | None = None,
    high: Real | None = None,
    jacobian: Callable[[Real, Real], Real] | None = None,
    tolerance: float = 1e-11,
    settled: float = 0.0,
    turns: int = 100,
) -> Fit:
    """Parameters of least sum of squared residuals, within bounds.

    Parameters
    ----------
    function : callable
        Residuals of the parameters, shape (n,); finite at the start. [-]
    start : array of float, shape (p,)
        First parameters; moved into the bounds. [-]
    scale : array of float, shape (p,), or None
        Changes of the parameters that matter, above 0; None for their magnitudes. [-]
    low, high : array of float, shape (p,), or None
        Bounds; None for none. [-]
    jacobian : callable or None
        Derivatives from parameters and residuals, shape (n, p); None for central differences. [-]
    tolerance : float
        The search ends when a step is below it, relative to the parameters and scales, or when the
        sum can fall no more. [-]
    settled : float
        The search ends, too, when a step promises less than this share of the mean square; 1e-4
        leaves the parameters within a hundredth of their own deviation. [-]
    turns : int
        Most steps that are tried.

    Returns
    -------
    Fit
        The best parameters found.

    Notes
    -----
    Levenberg and Marquardt's damped steps with the damping rule of Nielsen (1999), from memory;
    parameters that a bound holds back are left out of a step, the others are cut at theirs. Steps
    solve the augmented least-squares problem, so that nothing is squared.
    """
    x = np.array(start, dtype=np.float64)
    size = np.abs(x) if scale is None else np.array(scale, dtype=np.float64)
    size = np.where(size > 0.0, size, 1.0)
    low = np.full(x.size, -np.inf) if low is None else low
    high = np.full(x.size, np.inf) if high is None else high
    x = np.clip(x, low, high)
    residuals = function(x)
    cost = float(residuals @ residuals)
    slopes = _slopes(function, x, residuals, size, low, high, jacobian)
    damping, growth = 1e-3, 2.0
    converged = False
    norms = np.zeros(x.size)
    for _ in range(turns):
        gradient = slopes.T @ residuals
        held = ((x <= low) & (gradient > 0.0)) | ((x >= high) & (gradient < 0.0))
        free = np.flatnonzero(~held)
        if free.size == 0:
            converged = True
            break
        # Largest column norms so far, Marquardt's scaling as More keeps it.
        norms = np.maximum(norms, np.sqrt(np.einsum("ij,ij->j", slopes, slopes)))
        weights = np.where(norms > 0.0, norms, 1.0)[free]
        augmented = np.concatenate(
            [slopes[:, free] / weights, np.sqrt(damping) * np.eye(free.size)]
        )
        wanted = np.concatenate([-residuals, np.zeros(free.size)])
        step = np.zeros(x.size)
        step[free] = np.linalg.lstsq(augmented, wanted, rcond=None)[0] / weights
        trial = np.clip(x + step, low, high)
        step = trial - x
        small = bool(np.all(np.abs(step) <= tolerance * (np.abs(x) + size * 1e-3)))
        predicted = cost - float(np.sum((residuals + slopes @ step) ** 2))
        # A heavily damped step promises little wherever it is.
        small |= damping <= 1.0 and predicted <= settled * cost / residuals.size
        new = function(trial)
        with np.errstate(over="ignore", invalid="ignore"):
            new_cost = float(new @ new)
        if not np.isfinite(new_cost):
            new_cost = np.inf
        if new_cost < cost or (small and new_cost <= cost):
            gain = (cost - new_cost) / predicted if predicted > 0.0 else 0.0
            x, residuals, cost = trial, new, new_cost
            slopes = _slopes(function, x, residuals, size, low, high, jacobian)
            damping *= max(1.0 / 3.0, 1.0 - (2.0 * gain - 1.0) ** 3)
            growth = 2.0
            if small:
                converged = True
                break
        else:
            # The sum cannot fall by more than its rounding any more.
            if small or predicted <= 1e-15 * cost:
                converged = True
                break
            damping *= growth
            growth *= 2.0
    gradient = slopes.T @ residuals
    held = ((x <= low) & (gradient >= 0.0)) | ((x >= high) & (gradient <= 0.0))
    return Fit(values=x, residuals=residuals, jacobian=slopes, at_bound=held, converged=converged)


def _slopes(
    function: Callable[[Real], Real],
    x: Real,
    residuals: Real,
    size: Real,
    low: Real,
    high: Real,
    jacobian: Callable[[Real, Real], Real] | None,
) -> Real:
    """Derivatives, by central differences that turn one-sided at a bound."""
    if jacobian is not None:
        return jacobian(x, residuals)
    out = np.empty((residuals.size, x.size))
    for column in range(x.size):
        step = 6e-6 * max(abs(float(x[column])), 1e-3 * float(size[column]))
        up, down = x.copy(), x.copy()
        up[column] = min(x[column] + step, high[column])
        down[column] = max(x[column] - step, low[column])
        width = up[column] - down[column]
        out[:, column] = (function(up) - function(down)) / width if width > 0.0 else 0.0
    return out
