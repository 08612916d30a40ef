"""Published facts of voice coils and moving-coil instruments.

Rules of this file:

- Each case names its source, the printed digits, and a tolerance of half the last printed digit,
  or the reason for another one.
- Unit factors of the sources stand beside their case.
"""

from __future__ import annotations

import math

import pytest

from plant2 import plant as pl

INCH_M = 0.0254
GAUSS_T = 1e-4
POUND_N = 4.4482216152605


def test_voice_coil_of_gogue_and_stupak() -> None:
    """G. P. Gogue, J. J. Stupak, "Voice-coil actuators", G2 Consulting, paper 8; read.

    3000 gauss, 200 turns of 2 in mean diameter: 1257 in of wire and 2.18 lb/A. The force is printed
    with the factor 0.5771e-6 lb per gauss inch ampere, a misprint of 0.57101e-6, so that 2.18 lb/A
    is 1.07 % high: 2.153 lb/A or 9.576 N/A is right (1 T x 1 m = 1 N/A).
    """
    length = pl.conductor_length_m(turns=200.0, mean_diameter_m=2.0 * INCH_M)
    assert length / INCH_M == pytest.approx(1257.0, abs=0.5)
    force = pl.coil_force_constant(flux_density_t=3000.0 * GAUSS_T, length_m=length)
    misprint = 0.5771e-6 / (GAUSS_T * INCH_M / POUND_N)
    assert misprint == pytest.approx(1.0107, abs=5e-5)
    assert force / POUND_N * misprint == pytest.approx(2.18, abs=0.005)
    assert force == pytest.approx(9.5756, abs=5e-5)


@pytest.mark.parametrize(
    ("name", "real", "imag", "period_s", "period_tolerance", "ratio", "ratio_tolerance"),
    [
        # Records of poles that travel with ObsPy 1.5.1 (gse2/tests/test_paz.py), read. The digits
        # of the poles give the frequency to 1e-6 and the ratio to 1e-6.
        ("LE-3D", -4.39823, 4.48709, 1.0, 1e-6, 0.70, 1e-5),
        # STS2_simp.cal, read. Nominal 120 s and 1/sqrt 2; the poles have four digits and describe
        # 120.40 s and 0.70461, so 0.5 % is what the nominal figures claim.
        ("STS-2", -0.03677, 0.03703, 120.0, 0.6, 0.707, 0.0035),
    ],
)
def test_poles_of_moving_coil_seismometers(
    name: str,
    real: float,
    imag: float,
    period_s: float,
    period_tolerance: float,
    ratio: float,
    ratio_tolerance: float,
) -> None:
    plant = pl.plant_of_poles(mass=1.0, pole1=complex(real, imag), pole2=complex(real, -imag))
    frequency = pl.natural_frequency_rad_per_s(plant)
    assert 2.0 * math.pi / frequency == pytest.approx(period_s, abs=period_tolerance), name
    assert pl.damping_ratio(plant) == pytest.approx(ratio, abs=ratio_tolerance), name


def test_digits_of_the_poles_are_kept() -> None:
    """Computed by hand from the same poles: 0.99999983 Hz; 120.40 s and 0.70461."""
    short = pl.plant_of_poles(mass=1.0, pole1=-4.39823 + 4.48709j, pole2=-4.39823 - 4.48709j)
    long = pl.plant_of_poles(mass=1.0, pole1=-0.03677 + 0.03703j, pole2=-0.03677 - 0.03703j)
    turn = 2.0 * math.pi
    assert pl.natural_frequency_rad_per_s(short) / turn == pytest.approx(0.99999983, abs=5e-9)
    assert turn / pl.natural_frequency_rad_per_s(long) == pytest.approx(120.40, abs=0.005)
    assert pl.damping_ratio(long) == pytest.approx(0.70461, abs=5e-6)
