#!/usr/bin/env python3
"""Closed-loop poles of sampled loops, as roots of their characteristic polynomial.

A(s) = I K Z(s) / (N s) in partial fractions gives A*(z) = T (d T z/(z-1)^2 + c z/(z-1) + sum r z/(z - e^(-pT)));
the poles are the roots of D(z) (1 + A*(z)). Writes stability_reference.json; with --check it compares.
"""
import json
import pathlib
import sys

import numpy as np

FILE = pathlib.Path(__file__).with_suffix(".json")


def impedance(c):
    """Numerator and denominator of Z(s), loaded ladder, by polynomial arithmetic from the far end."""
    volts, amperes = np.poly1d([1.0]), np.poly1d([0.0])
    for r, f in c["ladder"][::-1]:
        amperes = amperes + np.poly1d([f, 0]) * volts
        volts = volts + r * amperes
    # Shunt: C1 and R2 + C2 in series: Y = s C1 + s C2 / (1 + s R2 C2).
    one = np.poly1d([c["r2"] * c["c2"], 1])
    total = amperes * one + volts * (np.poly1d([c["c1"], 0]) * one + np.poly1d([c["c2"], 0]))
    return one, total


def poles(c, current, gain, divider, pfd):
    num, den = impedance(c)
    num = num * (current * gain / divider)
    den = den * np.poly1d([1, 0])
    t = 1 / pfd
    # Known poles: two at zero; the rest by roots.
    rest = np.real(np.roots(np.polydiv(den.coeffs, [1, 0, 0])[0]))
    residues = [float(np.real(num(p) / np.polyder(den)(p))) for p in rest]
    # Double pole: d = lim s^2 A, c = d/ds (s^2 A) at 0.
    bare = np.poly1d(den.coeffs[:-2])
    d = float(num(0) / bare(0))
    single = float((np.polyder(num)(0) * bare(0) - num(0) * np.polyder(bare)(0)) / bare(0) ** 2)
    decays = np.exp(rest * t)
    one = np.poly1d([1, -1])
    others = [np.poly1d([1, -x]) for x in decays]
    whole = one * one
    for o in others:
        whole = whole * o
    p = whole
    every = np.poly1d([1.0])
    for o in others:
        every = every * o
    z = np.poly1d([1, 0])
    p = p + t * d * t * z * every + t * single * z * one * every
    for i, r in enumerate(residues):
        rest_product = np.poly1d([1.0])
        for j, o in enumerate(others):
            if j != i:
                rest_product = rest_product * o
        p = p + t * r * z * one * one * rest_product
    edge = 1 + t * (d * t * -1 / 4 + single * 0.5 + sum(r * -1 / (-1 - x) for r, x in zip(residues, decays)))
    return np.roots(p.coeffs), float(np.real(edge)) - 1


def compute():
    rng = np.random.default_rng(20261)
    cases = []
    while len(cases) < 80:
        order = int(rng.integers(2, 5))
        c = {"c1": 10 ** rng.uniform(-11, -8.5), "r2": 10 ** rng.uniform(2, 4.5), "c2": 10 ** rng.uniform(-10, -7.5)}
        c["ladder"] = [[10 ** rng.uniform(1.5, 4), 10 ** rng.uniform(-11.5, -9)] for _ in range(order - 2)]
        point = [10 ** rng.uniform(-4, -2), 10 ** rng.uniform(6.5, 8), 10 ** rng.uniform(1.3, 3), 10 ** rng.uniform(5, 8)]
        found, edge = poles(c, *point)
        sizes = np.abs(found)
        # Poles too near the circle are left out: no route tells them apart.
        if np.any(np.abs(sizes - 1) < 1e-4):
            continue
        outside = int(np.sum(sizes > 1))
        # Of each kind enough: settled, seen at half the PFD frequency, and growing although that does not tell.
        kind = "stable" if outside == 0 else ("edge" if edge <= -1 else "hidden")
        if sum(x["kind"] == kind for x in cases) >= {"stable": 35, "edge": 25, "hidden": 20}[kind]:
            continue
        cases.append({"components": c, "point": point, "outside": outside, "edge": edge, "kind": kind})
    return {"cases": cases}


def main():
    data = compute()
    if "--check" in sys.argv:
        kept = json.loads(FILE.read_text())
        assert len(kept["cases"]) == len(data["cases"])
        for a, b in zip(kept["cases"], data["cases"]):
            assert a["outside"] == b["outside"] and a["kind"] == b["kind"]
            assert np.isclose(a["edge"], b["edge"], rtol=1e-6), (a["edge"], b["edge"])
        print(f"{len(kept['cases'])} loops as numpy finds them")
        return
    FILE.write_text(json.dumps(data, indent=1) + "\n")


if __name__ == "__main__":
    main()
