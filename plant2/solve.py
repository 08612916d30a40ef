"""Root finding behind a narrow face.

Rules of this file:

- The two finders that a check needs are a few lines here, so that a check starts without a
  scientific library; anything larger comes from scipy.optimize inside its function.
"""

from __future__ import annotations

from collections.abc import Callable


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
