"""The check's figures recomputed from its JSON and the loop file's numbers, along another path.

Nothing of plant2 is used past the JSON: the plant comes from the loop file by hand, is sampled with
scipy's matrix exponential (delay as an extra input integral), and the loop is closed with the
published transfer functions of the words. Step, noise and margins come from plain recursions.
"""

from __future__ import annotations

import json
import math
import tomllib
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import scipy.linalg
from typer.testing import CliRunner

from plant2.cli import app

ROOT = Path(__file__).resolve().parent.parent
FACTORS = {
    "g": 1e-3, "kg": 1.0, "N*s/m": 1.0, "N/mm": 1e3, "N/m": 1.0, "mm": 1e-3, "um": 1e-6, "A": 1.0,
    "mA": 1e-3, "N/A": 1.0, "V": 1.0, "ohm": 1.0, "mH": 1e-3, "kHz": 1e3, "Hz": 1.0, "us": 1e-6,
    "N": 1.0, "g*cm**2": 1e-7, "uN*m*s/rad": 1e-6, "mN*m/rad": 1e-3, "deg": math.pi / 180,
    "mN*m/A": 1e-3, "nm": 1e-9, "urad": 1e-6, "N*m": 1.0,
}  # fmt: skip


def si(text: str) -> float:
    value, unit = text.split(" ", 1)
    return float(value) * FACTORS[unit]


class Opinion:
    """One example, once more."""

    def __init__(self, name: str) -> None:
        folder = ROOT / "examples" / name
        self.file = tomllib.loads((folder / "loop.toml").read_text(encoding="utf-8"))
        done = CliRunner().invoke(app, ["check", str(folder / "loop.toml"), "--json", "-"])
        assert done.exit_code == 0
        self.data: dict[str, Any] = json.loads(done.stdout)
        self.rotary = self.file["plant"]["motion"] == "rotary"
        self._plant()
        self._sample()
        self._close()

    def _plant(self) -> None:
        """Rows of x' = a x + b u, u in newton (newton metre) or volt; position is c x."""
        plant, act, sensor = self.file["plant"], self.file["actuator"], self.file["sensor"]
        m = si(plant["inertia" if self.rotary else "mass"])
        k, b = si(plant["stiffness"]), si(plant["damping"])
        kf = si(act["torque_constant" if self.rotary else "force_constant"])
        names = ["x", "v"]
        modes = plant.get("mode", [])
        for i in range(len(modes)):
            names += [f"q{i}", f"p{i}"]
        voltage = act["drive"] == "voltage"
        if voltage or "bandwidth" in act:
            names.append("f")
        if "filter_corner" in sensor:
            names.append("s")
        n = len(names)
        at = {name: i for i, name in enumerate(names)}
        a, bu, c = np.zeros((n, n)), np.zeros(n), np.zeros(n)
        a[at["x"], at["v"]] = 1.0
        a[at["v"], at["x"]], a[at["v"], at["v"]] = -k / m, -b / m
        c[at["x"]] = 1.0
        entries = [(at["v"], 1.0 / m)]
        for i, mode in enumerate(modes):
            w, z = 2 * math.pi * si(mode["frequency"]), mode["damping_ratio"]
            mass = si(mode["mass"])
            a[at[f"q{i}"], at[f"p{i}"]] = 1.0
            a[at[f"p{i}"], at[f"q{i}"]], a[at[f"p{i}"], at[f"p{i}"]] = -w * w, -2 * z * w
            c[at[f"q{i}"]] = mode["sign"]
            entries.append((at[f"p{i}"], 1.0 / mass))
        if "f" in at:
            for row, gain in entries:
                a[row, at["f"]] = gain
            if voltage:
                r, ell = si(act["resistance"]), si(act["inductance"])
                a[at["f"], at["f"]] = -r / ell
                a[at["f"], at["v"]] = -kf * kf / ell
                bu[at["f"]] = kf / ell
            else:
                corner = 2 * math.pi * si(act["bandwidth"])
                a[at["f"], at["f"]], bu[at["f"]] = -corner, corner
        else:
            for row, gain in entries:
                bu[row] = gain
        measured = c.copy()
        if "s" in at:
            corner = 2 * math.pi * si(sensor["filter_corner"])
            a[at["s"]] += corner * c
            a[at["s"], at["s"]] -= corner
            measured = np.zeros(n)
            measured[at["s"]] = 1.0
        self.a, self.b, self.c, self.measured = a, bu, c, measured
        codes = 2 ** (act["bits"] - 1)
        self.per_code = si(act["full_scale"]) / codes * act.get("polarity", 1)
        if not voltage:
            self.per_code *= kf
        self.step = si(sensor["full_scale"]) / 2 ** (sensor["bits"] - 1)
        self.per_metre = sensor.get("polarity", 1) / self.step

    def _sample(self) -> None:
        processor = self.file["processor"]
        self.period = 1.0 / si(processor["sample_rate"])
        ratio = si(processor["delay"]) / self.period
        self.whole = math.floor(ratio + 1e-9)
        self.fraction = max(ratio - self.whole, 0.0)
        n = len(self.b)

        def held(t: float) -> tuple[Any, Any]:
            big = np.zeros((n + 1, n + 1))
            big[:n, :n], big[:n, n] = self.a, self.b
            e = scipy.linalg.expm(big * t)
            return e[:n, :n], e[:n, n]

        self.phi, _ = held(self.period)
        late_phi, self.late = held((1 - self.fraction) * self.period)
        _, early = held(self.fraction * self.period)
        self.early = late_phi @ early

    def _close(self) -> None:
        """State matrix of the loop: plant, stored codes, controller in companion form."""
        controller = self.data["controller"]
        num = np.array(controller["position"]["numerator"])
        ref = np.array(controller["reference"]["numerator"])
        den = np.array(controller["position"]["denominator"])
        n, nc = len(self.b), len(den) - 1
        stored = self.whole + (1 if self.fraction else 0)
        size = n + stored + nc
        y = np.zeros(size)
        y[:n] = self.measured * self.per_metre
        # observer form: u = num0 in + xi_1
        u = -num[0] * y
        if nc:
            u[n + stored] += 1.0
        m, b_ref = np.zeros((size, size)), np.zeros(size)
        m[:n, :n] = self.phi
        for column, lag in ((self.late, self.whole), (self.early, self.whole + 1)):
            gain = column * self.per_code
            if lag == 0:
                m[:n] += np.outer(gain, u)
                b_ref[:n] += gain * ref[0]
            elif lag <= stored:
                m[:n, n + lag - 1] += gain
        if stored:
            m[n], b_ref[n] = u, ref[0]
            for j in range(1, stored):
                m[n + j, n + j - 1] = 1.0
        for i in range(nc):
            row = n + stored + i
            m[row] += -(num[i + 1] - den[i + 1] * num[0]) * y
            m[row, n + stored] -= den[i + 1]
            if i + 1 < nc:
                m[row, row + 1] += 1.0
            b_ref[row] += ref[i + 1] - den[i + 1] * ref[0]
        self.m, self.b_ref, self.u, self.u_ref, self.y = m, b_ref, u, ref[0], y
        self.b_noise = np.zeros(size)
        if stored:
            self.b_noise[n] = -num[0]
        if self.whole == 0:
            self.b_noise[:n] += -num[0] * self.late * self.per_code
        for i in range(nc):
            self.b_noise[n + stored + i] = -(num[i + 1] - den[i + 1] * num[0])
        self.position = np.zeros(size)
        self.position[:n] = self.c


@pytest.fixture(
    scope="module", params=["focus_stage", "valve_spool", "scan_mirror", "lens_carrier"]
)
def opinion(request: pytest.FixtureRequest) -> Opinion:
    return Opinion(request.param)


def test_poles(opinion: Opinion) -> None:
    mine = np.linalg.eigvals(opinion.m)
    theirs = np.array([complex(*p) for p in opinion.data["as_built"]["poles_z"]])
    assert len(mine) == len(theirs)
    for pole in theirs:
        assert np.abs(mine - pole).min() < 1e-7


def test_damping_ratio_and_natural_frequency(opinion: Opinion) -> None:
    """s = ln(z)/T of one of the eigenvalues gives both figures."""
    built = opinion.data["as_built"]
    found = []
    for z in np.linalg.eigvals(opinion.m):
        if z.imag > 0:
            s = np.log(z) / opinion.period
            found.append((-s.real / abs(s), abs(s) / 2 / math.pi))
    wanted = (built["damping_ratio"], built["natural_frequency_hz"])
    assert any(f == pytest.approx(wanted, rel=1e-6) for f in found)


def _gain(opinion: Opinion, hz: float) -> tuple[complex, complex]:
    """Loop gain and reference response at a frequency."""
    z = np.exp(2j * math.pi * hz * opinion.period)
    n = len(opinion.b)
    state = np.linalg.solve(
        z * np.eye(n) - opinion.phi,
        (opinion.late + opinion.early / z) * z**-opinion.whole * opinion.per_code,
    )
    controller = opinion.data["controller"]
    den = np.polyval(controller["position"]["denominator"], z)
    back = np.polyval(controller["position"]["numerator"], z) / den
    ahead = np.polyval(controller["reference"]["numerator"], z) / den
    loop = back * opinion.per_metre * (opinion.measured @ state)
    closed = ahead * opinion.per_metre * (opinion.c @ state) / (1 + loop)
    return complex(loop), complex(closed)


def test_margins_and_bandwidth(opinion: Opinion) -> None:
    built = opinion.data["as_built"]
    loop, _ = _gain(opinion, built["crossover_hz"])
    assert abs(loop) == pytest.approx(1.0, rel=1e-7)
    assert built["phase_margin_deg"] <= abs(math.degrees(np.angle(-loop))) + 1e-6
    grid = np.geomspace(0.1, 0.5 / opinion.period, 4000)
    values = np.array([_gain(opinion, f) for f in grid])
    assert np.max(1 / np.abs(1 + values[:, 0])) == pytest.approx(
        built["peak_sensitivity"], rel=2e-4
    )
    at_rest = abs(values[0, 1])
    _, closed = _gain(opinion, built["bandwidth_hz"])
    assert abs(closed) / at_rest == pytest.approx(1 / math.sqrt(2), rel=2e-4)
    first = grid[np.argmax(np.abs(values[:, 1]) < at_rest / math.sqrt(2))]
    assert first == pytest.approx(built["bandwidth_hz"], rel=5e-3)


def test_step_within_eight_counts_of_the_linear_loop(opinion: Opinion) -> None:
    """The integers' step against the recursion of the linear loop, at the samples."""
    step = opinion.data["step"]
    size = step["size_rad" if opinion.rotary else "size_m"]
    counts = round(size / opinion.step) * (1 if opinion.per_metre > 0 else -1)
    x = np.zeros(len(opinion.b_ref))
    positions, codes = [], []
    for _ in range(6000):
        positions.append(opinion.position @ x)
        codes.append(opinion.u @ x + opinion.u_ref * counts)
        x = opinion.m @ x + opinion.b_ref * counts
    final = positions[-1]
    assert final == pytest.approx(size, rel=2e-3)
    overshoot = 100 * (max(positions) - final) / size
    # the valve's actuator is coarse: one of its codes is worth many counts
    slack = 100 * 8 * opinion.step / size
    assert step["overshoot_percent"] == pytest.approx(overshoot, abs=slack)
    if not opinion.file["plant"].get("bias_force") and "rest_position" not in opinion.file["plant"]:
        assert step["peak_code"] == pytest.approx(np.abs(codes).max(), abs=8)
        limit = si(opinion.file["actuator"]["limit"])
        unit = si(opinion.file["actuator"]["full_scale"]) / 2 ** (
            opinion.file["actuator"]["bits"] - 1
        )
        linear = math.floor(limit / unit) / np.abs(codes).max() * size
        travel = si(opinion.file["plant"]["travel"])
        key = "linear_step_rad" if opinion.rotary else "linear_step_m"
        assert step[key] == pytest.approx(min(linear, travel), rel=1e-6)


def test_noise_by_a_long_recursion(opinion: Opinion) -> None:
    """Rms from the impulse response, summed sample by sample."""
    key = "position_noise_rad" if opinion.rotary else "position_noise_m"
    noise = si(opinion.file["sensor"]["noise"]) / opinion.step
    x = opinion.b_noise.copy()
    total = 0.0
    for _ in range(60000):
        total += float(opinion.position @ x) ** 2
        x = opinion.m @ x
    assert opinion.data["linear"][key] == pytest.approx(noise * math.sqrt(total), rel=1e-6)
