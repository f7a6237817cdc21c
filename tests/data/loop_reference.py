"""Independent reference for the loop: margins by python-control, integrals by scipy's quad, one whole noise plan.

    python3 tests/data/loop_reference.py            rewrites tests/data/loop_reference.json
    python3 tests/data/loop_reference.py --check    recomputes and compares (exit status 1 on a difference)
"""
import json
import math
import pathlib
import sys

import control
import numpy as np
from scipy import integrate

HERE = pathlib.Path(__file__).parent


def impedance(c, s):
    """Transfer impedance from the pump node to the tuning node of the loaded ladder, by nodal analysis."""
    stages = [(c["r3"], c["c3"])] if c.get("r3") else []
    if c.get("r4"):
        stages.append((c["r4"], c["c4"]))
    size = 1 + len(stages)
    y = np.zeros((size, size), dtype=complex)
    y[0, 0] = s * c["c1"] + 1 / (c["r2"] + 1 / (s * c["c2"]))
    for i, (r, cap) in enumerate(stages, start=1):
        y[i - 1, i - 1] += 1 / r
        y[i, i] += 1 / r + s * cap
        y[i - 1, i] -= 1 / r
        y[i, i - 1] -= 1 / r
    current = np.zeros(size, dtype=complex)
    current[0] = 1
    return np.linalg.solve(y, current)[-1]


def rational(c):
    """The same as polynomials in s (numpy order), by the same ladder walked from the tuning node."""
    voltage, current = np.poly1d([1.0]), np.poly1d([0.0])
    s = np.poly1d([1.0, 0.0])
    stages = [(c["r3"], c["c3"])] if c.get("r3") else []
    if c.get("r4"):
        stages.append((c["r4"], c["c4"]))
    for r, cap in reversed(stages):
        current = current + s * cap * voltage
        voltage = voltage + r * current
    current = current + s * c["c1"] * voltage
    zero = np.poly1d([c["r2"] * c["c2"], 1.0])
    return zero, current * zero + s * c["c2"] * voltage


def margins():
    rng = np.random.default_rng(71)
    out = []
    while len(out) < 30:
        c = {"c1": 10 ** rng.uniform(-11, -9), "r2": 10 ** rng.uniform(2, 4), "c2": 10 ** rng.uniform(-9, -7.5)}
        if len(out) % 3 >= 1:
            c["r3"], c["c3"] = 10 ** rng.uniform(1.5, 3), 10 ** rng.uniform(-11.5, -10.5)
        if len(out) % 3 == 2:
            c["r4"], c["c4"] = 10 ** rng.uniform(1.5, 3), 10 ** rng.uniform(-12, -11)
        current, gain, divider = 10 ** rng.uniform(-3.3, -2), 10 ** rng.uniform(7, 8), float(rng.uniform(40, 900))
        num, den = rational(c)
        loop = control.tf((current * gain / divider) * num.coeffs, (den * np.poly1d([1.0, 0.0])).coeffs)
        gain_margin, margin, _, crossover = control.margin(loop)
        if not np.isfinite(crossover) or margin <= 5 or margin >= 89:
            continue
        out.append({"components": c, "current": current, "gain": gain, "divider": divider,
                    "unity_hz": float(crossover / (2 * math.pi)), "margin_deg": float(margin)})
    return out



PLAN = {
    "components": {"c1": 2.2e-9, "r2": 510.0, "c2": 15e-9, "r3": 220.0, "c3": 330e-12},
    "current": 2.5e-3, "gain": 32e6, "divider": 90.25, "pfd": 19.2e6, "output_divider": 4,
    "reference": [[10, -95], [1e3, -145], [1e5, -155]], "reference_hz": 19.2e6,
    "oscillator": [[1e4, -88], [1e6, -133]],
    "floor": -226.0, "flicker": -118.0, "divider_floor": -160.0, "order": 3, "temperature": 290.0,
    "limits": [100.0, 9.6e6], "folded": 3.1e-12,
}


def curve(points, role, f):
    """dB linear in log offset; beyond the points as the program states it."""
    x = [p[0] for p in points]
    if f < x[0]:
        slope = (points[1][1] - points[0][1]) / math.log10(x[1] / x[0])
        if role == "oscillator":
            slope = min(slope, -30.0)
        return points[0][1] + slope * math.log10(f / x[0])
    if f > x[-1]:
        return points[-1][1] + (-20.0 * math.log10(f / x[-1]) if role == "oscillator" else 0.0)
    return float(np.interp(math.log10(f), np.log10(x), [p[1] for p in points]))


def alias_sum(f, aliases=4000):
    """A(f) and A*(f) by adding aliases; the tail of 1/k^3 and faster is below 1e-9 here."""
    p = PLAN
    def a(f):
        s = 2j * math.pi * f
        return p["current"] * p["gain"] * impedance(p["components"], s) / (s * p["divider"])
    total = a(f)
    for k in range(1, aliases + 1):
        total += a(f + k * p["pfd"]) + a(f - k * p["pfd"])
    return a(f), total


def resistor_gains(c, s):
    """Open-loop gain from each resistor's noise voltage to the tuning node, by nodal analysis with a Norton source."""
    y = np.zeros((2, 2), dtype=complex)
    branch = c["r2"] + 1 / (s * c["c2"])
    y[0, 0] = s * c["c1"] + 1 / branch + 1 / c["r3"]
    y[1, 1] = 1 / c["r3"] + s * c["c3"]
    y[0, 1] = y[1, 0] = -1 / c["r3"]
    r2 = np.linalg.solve(y, np.array([1 / branch, 0]))[1]
    r3 = np.linalg.solve(y, np.array([-1 / c["r3"], 1 / c["r3"]]))[1]
    return {c["r2"]: r2, c["r3"]: r3}


def noise_at(f, aliases=400):
    p = PLAN
    a, star = alias_sum(f, aliases)
    h = a / (1 + star)
    e = 1 - h
    vco = p["pfd"] * p["divider"]
    lin = lambda db: 10 ** (db / 10)
    low = lin(curve(p["reference"], "reference", f)) * (vco / p["reference_hz"]) ** 2
    low += lin(p["floor"] + 20 * math.log10(vco / p["pfd"]) + 10 * math.log10(p["pfd"]))
    low += lin(p["flicker"] + 10 * math.log10(1e4 / f) + 20 * math.log10(vco / 1e9))
    low += (2 * math.pi) ** 2 / (12 * p["pfd"]) * (2 * math.sin(math.pi * f / p["pfd"])) ** (2 * (p["order"] - 1))
    low += p["folded"]
    high = lin(curve(p["oscillator"], "oscillator", f))
    s = 2j * math.pi * f
    volts = sum(4 * 1.380649e-23 * p["temperature"] * r * abs(g) ** 2 for r, g in resistor_gains(p["components"], s).items())
    high += 0.5 * volts * (p["gain"] / f) ** 2
    return (low * abs(h) ** 2 + high * abs(e) ** 2) / p["output_divider"] ** 2 + lin(p["divider_floor"])


def noise_plan():
    offsets = [100.0, 1e3, 1e4, 3e4, 6e4, 1e5, 3e5, 1e6, 5e6]
    low, high = PLAN["limits"]
    # Gauss-Legendre over short log pieces: smooth integrand, no kink but at the points of the curves.
    breaks = sorted({low, high, *np.geomspace(low, high, 41), *(p[0] for p in PLAN["reference"] if low < p[0] < high),
                     *(p[0] for p in PLAN["oscillator"] if low < p[0] < high)})
    nodes, weights = np.polynomial.legendre.leggauss(6)
    total = 0.0
    for a, b in zip(breaks, breaks[1:]):
        la, lb = math.log(a), math.log(b)
        for x, w in zip(nodes, weights):
            f = math.exp(0.5 * (lb - la) * x + 0.5 * (la + lb))
            total += w * 0.5 * (lb - la) * f * noise_at(f)
    a, star = alias_sum(6e4)
    return {"plan": PLAN, "density": [[f, 10 * math.log10(noise_at(f, 4000))] for f in offsets],
            "phase_deg": math.degrees(math.sqrt(2 * total)),
            "open_loop_60k": [a.real, a.imag], "sampled_60k": [star.real, star.imag]}


def integrals():
    """rms phase of piecewise log-log curves by adaptive quadrature."""
    rng = np.random.default_rng(5)
    out = []
    for _ in range(30):
        n = int(rng.integers(3, 9))
        offsets = np.sort(10 ** rng.uniform(1, 7, n))
        levels = np.sort(rng.uniform(-160, -60, n))[::-1] + rng.uniform(-8, 8, n)
        low, high = float(offsets[0] * 1.1), float(offsets[-1] * 0.9)
        def density(f):
            return 10 ** (np.interp(math.log10(f), np.log10(offsets), levels) / 10)
        total = 0.0
        edges = [low] + [float(x) for x in offsets if low < x < high] + [high]
        for a, b in zip(edges, edges[1:]):
            part, _ = integrate.quad(lambda u: math.exp(u) * density(math.exp(u)), math.log(a), math.log(b),
                                     epsrel=1e-12, epsabs=0, limit=500)
            total += part
        out.append({"points": [[float(f), float(l)] for f, l in zip(offsets, levels)], "limits": [low, high],
                    "phase_rad": math.sqrt(2 * total)})
    return out


def compute():
    return {"margins": margins(), "integrals": integrals(), "noise_plan": noise_plan()}


def same(a, b, path="$"):
    if isinstance(a, dict):
        assert a.keys() == b.keys(), path
        for key in a:
            same(a[key], b[key], f"{path}.{key}")
    elif isinstance(a, list):
        assert len(a) == len(b), path
        for i, (x, y) in enumerate(zip(a, b)):
            same(x, y, f"{path}[{i}]")
    elif isinstance(a, float) or isinstance(b, float):
        assert math.isclose(a, b, rel_tol=1e-7, abs_tol=1e-13), f"{path}: {a} against {b}"
    else:
        assert a == b, f"{path}: {a} against {b}"


def main():
    target = HERE / "loop_reference.json"
    fresh = json.loads(json.dumps(compute()))
    if "--check" in sys.argv:
        try:
            same(fresh, json.loads(target.read_text()))
        except AssertionError as difference:
            print(f"{target.name} differs: {difference}")
            return 1
        print(f"{target.name} agrees with a fresh computation")
        return 0
    target.write_text(json.dumps(fresh, separators=(",", ":")) + "\n")
    print(f"wrote {target.name}")
    return 0


if __name__ == "__main__":
    sys.exit(main())
