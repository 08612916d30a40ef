"""The usual cautions, one wording for the README, the check and every emitted file.

Rules of this file:

- Short, plain, true. They defer to local codes and licensed practice and claim nothing.
"""

from __future__ import annotations

from plant2.loopfile import Loop

GENERAL = (
    "A design aid, not a safety function: nothing here is certified, and it replaces neither a "
    "risk assessment nor the codes and the licensed practice of your place.",
    "First start: hands, beams and tools away, supply limited, and the sign proven with a small "
    "pulse before the loop is closed. A loop of wrong sign drives into its end stop with all its "
    "force.",
    "Figures hold for the plant as described. Measure it, and expect every unit to differ.",
)
"""Cautions that apply to every loop."""


def cautions(loop: Loop) -> tuple[str, ...]:
    """Cautions for one loop.

    Parameters
    ----------
    loop : Loop
        The loop file.

    Returns
    -------
    tuple of str
        Whole sentences: the general ones, and those for what this loop can hurt.

    Notes
    -----
    Common practice.
    """
    out = list(GENERAL)
    out.append(
        "End stops must take the full force at full speed; software limits do not replace them."
    )
    if loop.actuator.continuous_a is not None:
        out.append(
            "Nothing here limits the coil's heat: the rms current against its continuous rating "
            "is yours to watch."
        )
    else:
        out.append(
            "No continuous rating is given: whether the coil stands the holding current is not "
            "checked."
        )
    if loop.mechanics.motion == "rotary":
        out.append(
            "Where the mirror carries a laser beam: beam off until the loop holds, and interlocked "
            "against a standing or lost axis."
        )
    if loop.mechanics.bias_force:
        out.append(
            "The axis carries a constant load: with the output at zero, or after a trip, it moves."
        )
    return tuple(out)
