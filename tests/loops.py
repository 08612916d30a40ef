"""Loop files that tests share."""

from __future__ import annotations

from plant2.loopfile import Loop, loop_from_text

REFERENCE = """
[loop]
name = "bench_stage"

[plant]
motion = "linear"
mass = "50 g"
damping = "0.4 N*s/m"
stiffness = "200 N/m"
travel = "1.9 mm"

[actuator]
drive = "current"
force_constant = "10 N/A"
full_scale = "4 A"
bits = 12
limit = "3.5 A"

[sensor]
full_scale = "2 mm"
bits = 16

[processor]
core = "host"
sample_rate = "5 kHz"
delay = "270 us"
word = 32

[aim]
law = "pd"
damping_ratio = 0.8
natural_frequency = "60 Hz"
derivative_corner = "1500 Hz"

[check]
step = "100 um"
"""
"""The reference loop of the design tests: figures known from 40-digit arithmetic."""

PID = (
    'aim.law="pid"',
    'aim.integral_corner="15 Hz"',
)

LEAD = """
law = "lead"
crossover = "80 Hz"
phase_margin = "50 deg"
derivative_corner = "1500 Hz"
"""


def reference_loop(*sets: str) -> Loop:
    """The reference loop with overrides."""
    return loop_from_text(REFERENCE, sets)


def lead_loop(*sets: str) -> Loop:
    """The reference loop with the lead law."""
    head, tail = REFERENCE.split("[aim]")
    return loop_from_text(f"{head}[aim]{LEAD}\n[check]{tail.split('[check]')[1]}", sets)
