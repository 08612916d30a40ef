"""The sampled loop against numbers computed two other ways: 40-digit arithmetic and python-control.

The reference loop: m = 0.05 kg, b = 0.4 N s/m, k = 200 N/m, T = 0.2 ms, delay 1.35 T, derivative
corner 1500 Hz. Its figures were computed with mpmath at 40 digits, apart from this code.
"""

from __future__ import annotations

import math
from dataclasses import replace

import mpmath
import numpy as np
import pytest

from plant2.closedloop import (
    ClosedLoop,
    Controller,
    bandwidth_rad_per_s,
    circle,
    delay_margin_s,
    gain_crossings,
    gain_edges,
    is_stable,
    linear_step,
    log_pole,
    loop_figures,
    loop_gain,
    loop_matrices,
    pair_figures,
    poles_delta,
    reference_response,
    rms_gain,
    static_value,
    step_shares,
    stiffness_at_rest,
)
from plant2.loopfile import Mode
from plant2.plant import Plant, state_space
from plant2.sampled import sample

T = 2e-4
W = -math.expm1(-2 * math.pi * 1500 * T)


def reference_loop(
    law: str, *, plant: Plant | None = None, delay_s: float = 1.35 * T
) -> ClosedLoop:
    plant = plant or Plant(mass=0.05, damping=0.4, stiffness=200.0)
    sampled = sample(state_space(plant), T, delay_s)
    if law == "pd":
        kp, kd = 4951.84347488285, 23.804405318642
        den = np.array([1.0, W])
        position = kp * den + np.array([kd * W / T, 0.0])
        reference = (kp + 200.0) * den
    else:
        kp, kd, ki, beta = 6791.10793993234, 26.7762696317929, 458630.656819448, 0.7098257699518
        den = np.polymul([1.0, W], [1.0, 0.0])
        integral = ki * T * np.polymul([1.0, W], [1.0, 1.0])
        position = kp * den + np.polymul([kd * W / T, 0.0], [1.0, 0.0]) + integral
        reference = kp * beta * den + integral
    return ClosedLoop(
        sampled=sampled,
        controller=Controller(reference=reference, position=position, denominator=den),
        count_per_position=1.0,
        effort_per_code=1.0,
    )


def test_placed_pair_and_other_poles() -> None:
    poles = poles_delta(reference_loop("pd"))
    zeta, omega = pair_figures((complex(poles[0]), complex(poles[1])), T)
    assert omega == pytest.approx(2 * math.pi * 60, rel=1e-11)
    assert zeta == pytest.approx(0.8, rel=1e-11)
    z = 1 + poles
    assert z[2].real == pytest.approx(0.455794985868, abs=2e-12)
    assert z[3] == pytest.approx(-0.093360224159 + 0.060014093145j, abs=2e-12)


def test_margins_of_pd_and_pid() -> None:
    pd = loop_figures(reference_loop("pd"), None)
    assert pd.crossover_hz is not None and pd.phase_margin_deg is not None
    assert pd.crossover_hz * 2 * math.pi == pytest.approx(530.265208869, rel=1e-11)
    assert pd.phase_margin_deg == pytest.approx(54.6474128659, rel=1e-11)
    assert pd.gain_margin_db is not None and pd.peak_sensitivity is not None
    assert 10 ** (pd.gain_margin_db / 20) == pytest.approx(6.52089311836, rel=1e-11)
    assert pd.peak_sensitivity == pytest.approx(1.29218446075, rel=1e-10)
    assert pd.gain_reduction_db is None
    pid = loop_figures(reference_loop("pid"), None)
    assert pid.crossover_hz is not None and pid.phase_margin_deg is not None
    assert pid.crossover_hz * 2 * math.pi == pytest.approx(583.071894072, rel=1e-11)
    assert pid.phase_margin_deg == pytest.approx(49.7503025655, rel=1e-11)
    assert pid.gain_margin_db is not None and pid.peak_sensitivity is not None
    assert 10 ** (pid.gain_margin_db / 20) == pytest.approx(5.6947594005, rel=1e-11)
    assert pid.peak_sensitivity == pytest.approx(1.35265067888, rel=1e-10)
    # conditionally stable: unstable again for gains of 1/11.56, found at 1/11.5549 by its own path
    assert pid.gain_reduction_db == pytest.approx(20 * math.log10(11.555), abs=0.02)


def test_delay_margin_is_confirmed_by_poles() -> None:
    """The formula differs from the exact edge by 2e-7 (pd) and 2.5e-5 (pid) of itself."""
    assert delay_margin_s(reference_loop("pd")) == pytest.approx(1.7986793170921e-3, rel=1e-6)
    assert delay_margin_s(reference_loop("pid")) == pytest.approx(1.4892302485427e-3, rel=1e-4)


@pytest.mark.parametrize("law", ["pd", "pid"])
def test_long_delay_margins_are_confirmed_by_one_pole(
    law: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Beyond 60 samples the matrix is not assembled; both ways agree where both can be had."""
    loop = reference_loop(law)
    by_matrix = delay_margin_s(loop)
    monkeypatch.setattr("plant2.closedloop._MANY_SAMPLES", 0)
    assert delay_margin_s(loop) == by_matrix
    monkeypatch.setattr("plant2.closedloop._pole_near", lambda loop, angle: -1.0)
    assert delay_margin_s(loop) is None


def test_poles_at_zero_have_a_logarithm() -> None:
    """z = 0 decays at once: minus infinity, and no warning."""
    s = log_pole(np.array([-1.0 + 0j, -1.0 + 1e-12]), 1e-4)
    assert s.real[0] == -math.inf and s.real[1] < -1e5


def test_gain_edges_are_edges() -> None:
    loop = reference_loop("pid")
    low, high = gain_edges(loop)
    assert low < 1 < high
    for edge, inward in ((low, 1.001), (high, 0.999)):
        assert is_stable(loop, gain=edge * inward)
        assert not is_stable(loop, gain=edge / inward)


def test_noise_norms() -> None:
    """H2 norms of the reference loop, computed apart at 40 digits."""
    matrices = loop_matrices(reference_loop("pd"))
    assert rms_gain(matrices, matrices.c_position, 0.0) == pytest.approx(0.294944330293, rel=1e-10)
    effort = rms_gain(matrices, matrices.c_effort, matrices.d_effort_noise)
    assert effort == pytest.approx(137373.477701, rel=1e-10)


def test_static_figures() -> None:
    pd, pid = reference_loop("pd"), reference_loop("pid")
    assert static_value(pd) == pytest.approx(1.0, rel=1e-12)
    assert static_value(pid) == pytest.approx(1.0, rel=1e-12)
    assert stiffness_at_rest(pd) == pytest.approx(200.0 + 4951.84347488285, rel=1e-11)
    assert math.isinf(stiffness_at_rest(pid))


@pytest.mark.parametrize("rate_hz", [1e3, 5e3, 2e4, 1e5, 5e5])
@pytest.mark.parametrize("delay", [0.0, 0.4, 1.0, 2.7])
def test_poles_against_fifty_digits(rate_hz: float, delay: float) -> None:
    """Eigenvalues of the same loop assembled and solved by mpmath at 50 digits."""
    period = 1.0 / rate_hz
    plant = Plant(mass=0.05, damping=0.4, stiffness=200.0)
    sampled = sample(state_space(plant), period, delay * period)
    w = -math.expm1(-2 * math.pi * min(1500.0, rate_hz / 4) * period)
    den = np.array([1.0, w])
    kp, kd = 300.0, 4.0
    loop = ClosedLoop(
        sampled=sampled,
        controller=Controller(
            reference=kp * den, position=kp * den + np.array([kd * w / period, 0]), denominator=den
        ),
        count_per_position=1.0,
        effort_per_code=1.0,
    )
    with mpmath.workdps(50):
        h = mpmath.mpf(period)
        a = mpmath.matrix(
            [
                [0, 1, 0],
                [
                    -200 / mpmath.mpf(0.05),
                    -mpmath.mpf(0.4) / mpmath.mpf(0.05),
                    1 / mpmath.mpf(0.05),
                ],
                [0, 0, 0],
            ]
        )
        d = math.floor(delay + 1e-9)
        f = mpmath.mpf(delay * period) / h - d
        if abs(f) < 1e-9:
            f = mpmath.mpf(0)
        whole = mpmath.expm(a * h)
        late = mpmath.expm(a * h * (1 - f))
        early = mpmath.expm(a * h * f)
        g0 = late[0:2, 2]
        g1 = late[0:2, 0:2] * early[0:2, 2]
        stored = d + (1 if f > 0 else 0)
        n = 2 + stored + 1
        m = mpmath.zeros(n)
        # controller: xi' = (1 - w) xi + (position part), u = xi - (kp + c) y
        c = mpmath.mpf(kd) * w / h
        direct = kp + c
        out = mpmath.zeros(1, n)
        out[0] = -direct
        out[n - 1] = 1
        for i in range(2):
            for j in range(2):
                m[i, j] = whole[i, j]
            for column, lag in ((g0, d), (g1, d + 1)):
                if lag == 0:
                    for j in range(n):
                        m[i, j] += column[i] * out[j]
                elif lag <= stored:
                    m[i, 2 + lag - 1] += column[i]
        if stored:
            for j in range(n):
                m[2, j] = out[j]
            for j in range(1, stored):
                m[2 + j, 2 + j - 1] = 1
        m[n - 1, n - 1] = 1 - mpmath.mpf(w)
        m[n - 1, 0] = -(kp * mpmath.mpf(w) - w * direct)
        values = mpmath.eig(m, left=False, right=False)
        exact = sorted((complex(v - 1) for v in values), key=lambda v: -abs(1 + v))
    found = list(poles_delta(loop))
    assert len(found) == len(exact)
    for value in exact:
        if abs(1 + value) > 0.2:
            assert min(abs(value - q) for q in found) <= 1e-11 * abs(value)
        else:
            assert min(abs(value - q) for q in found) <= 1e-9


def test_matches_python_control() -> None:
    """Margins and poles by python-control (a general library) for a delay of whole samples."""
    import control

    loop = reference_loop("pid", delay_s=2 * T)
    plant = control.ss(
        np.eye(2) + loop.sampled.psi, loop.sampled.gamma0[:, None], np.array([[1.0, 0.0]]), 0, T
    )
    z = control.tf([1, 0], [1], T)
    kp, kd, ki = 6791.10793993234, 26.7762696317929, 458630.656819448
    c = kp + kd * W / T * (z - 1) / (z - (1 - W)) + ki * T * z / (z - 1)
    gain = control.ss(c) * plant * control.ss(control.tf([1], [1, 0, 0], T))
    poles = control.feedback(gain, 1).poles()
    assert np.sort(np.abs(poles))[-3:] == pytest.approx(
        np.sort(np.abs(1 + poles_delta(loop)))[-3:], rel=1e-9
    )
    point = 0.1
    assert loop_gain(loop, np.array([point]))[0] == pytest.approx(
        gain(np.exp(1j * point)), rel=1e-9
    )
    figures = loop_figures(loop, None)
    # from its frequency response: its polynomial path loses the crossing at this sample rate
    data = control.frd(gain, np.linspace(500.0, 4000.0, 20001), smooth=True)
    rise, margin, _, _, crossing, _ = control.stability_margins(data)
    assert figures.phase_margin_deg == pytest.approx(margin, abs=1e-3)
    assert figures.crossover_hz == pytest.approx(crossing / 2 / math.pi, rel=1e-6)
    assert figures.gain_margin_db == pytest.approx(20 * math.log10(rise), abs=1e-4)


def test_bandwidth_is_where_the_response_falls() -> None:
    loop = reference_loop("pd")
    width = bandwidth_rad_per_s(loop)
    assert width is not None
    at = abs(reference_response(loop, np.array([width * T]))[0])
    assert at == pytest.approx(1 / math.sqrt(2), rel=1e-12)
    below = np.abs(reference_response(loop, np.linspace(1e-4, width * T * 0.9999, 2000)))
    assert below.min() > 1 / math.sqrt(2)


def test_narrow_modes_are_not_stepped_over() -> None:
    """A mode of damping ratio 1e-4 at 0.4 of the sample rate: all its gain crossings are found."""
    plant = Plant(
        mass=0.05,
        damping=0.4,
        stiffness=200.0,
        modes=(
            Mode(frequency_rad_per_s=2 * math.pi * 2000, damping_ratio=1e-4, mass=1.0, sign=-1),
        ),
    )
    loop = reference_loop("pd", plant=plant)
    crossings = gain_crossings(loop)
    assert len(crossings) == 3
    for c in crossings:
        gain = abs(loop_gain(loop, np.array([c.omega_rad_per_s * T]))[0])
        assert gain == pytest.approx(1.0, rel=1e-6)
    near = [c for c in crossings if abs(c.omega_rad_per_s / (2 * math.pi * 2000) - 1) < 0.01]
    assert len(near) == 2


def test_shares_add_up_to_the_step_response() -> None:
    """1 - sum of shares' terms is the step response: compared with the recursion."""
    loop = reference_loop("pd")
    poles = poles_delta(loop)
    states, _ = linear_step(loop, 400)
    shares = step_shares(loop, poles)
    # once the others are gone the error swings with the pair's amplitude, twice its share
    k = np.arange(60, 300)
    swing = np.abs(states[60:300, 0] - 1.0) / abs(1 + poles[0]) ** k
    assert swing.max() == pytest.approx(2 * shares[0], rel=2e-3)


def test_shares_are_the_same_in_other_units() -> None:
    loop = reference_loop("pid")
    scaled = replace(
        loop,
        count_per_position=1e6,
        effort_per_code=1e-3,
        controller=Controller(
            reference=loop.controller.reference * 1e-3,
            position=loop.controller.position * 1e-3,
            denominator=loop.controller.denominator,
        ),
    )
    a, b = poles_delta(loop), poles_delta(scaled)
    assert a == pytest.approx(b, rel=1e-9)
    assert step_shares(loop, a) == pytest.approx(step_shares(scaled, b), rel=1e-7)


def test_unstable_loop_has_no_margins() -> None:
    loop = replace(reference_loop("pd"), effort_per_code=10.0)
    figures = loop_figures(loop, None)
    assert not figures.stable
    assert figures.phase_margin_deg is None and figures.gain_margin_db is None
    assert figures.delay_margin_s is None and figures.bandwidth_hz is None


def test_log_pole_and_circle_near_one() -> None:
    """Against mpmath: no digits are lost at 1 MHz."""
    delta = complex(-1.3e-9, 2.1e-9)
    with mpmath.workdps(40):
        exact = mpmath.log(1 + mpmath.mpc(delta.real, delta.imag))
    assert complex(log_pole(delta, 1.0)) == pytest.approx(complex(exact), rel=1e-14)
    with mpmath.workdps(40):
        turn = complex(mpmath.expj(mpmath.mpf(3e-9)) - 1)
    assert complex(circle(np.array([3e-9]))[0]) == pytest.approx(turn, rel=1e-14)
