#!/usr/bin/env python3
"""Step responses of linear loops by scipy: frequency error after a step, E(s) = 1/(1 + A(s)).

A(s) = I K Z(s) / (N s), Z of the loaded ladder C1 || (R2 + C2), R3-C3, R4-C4. Writes settling_reference.json; with
--check it compares.
"""
import json
import pathlib
import sys

import numpy as np
from scipy import signal

FILE = pathlib.Path(__file__).with_suffix(".json")
CURRENT, GAIN, DIVIDER = 2.5e-3, 32e6, 90.25
LOOPS = [
    {"c1": 1.2e-9, "r2": 620.0, "c2": 11e-9, "ladder": []},
    {"c1": 1.0e-9, "r2": 680.0, "c2": 10e-9, "ladder": [[330.0, 220e-12]]},
    {"c1": 0.9e-9, "r2": 700.0, "c2": 10e-9, "ladder": [[330.0, 150e-12], [470.0, 82e-12]]},
]


def response(c, times):
    volts, amperes = np.poly1d([1.0]), np.poly1d([0.0])
    for r, f in c["ladder"][::-1]:
        amperes = amperes + np.poly1d([f, 0]) * volts
        volts = volts + r * amperes
    one = np.poly1d([c["r2"] * c["c2"], 1])
    total = amperes * one + volts * (np.poly1d([c["c1"], 0]) * one + np.poly1d([c["c2"], 0]))
    # A = g*one/(s*total); E = s*total/(s*total + g*one).
    g = CURRENT * GAIN / DIVIDER
    den = np.poly1d([1, 0]) * total
    _, y = signal.step((den.coeffs, (den + g * one).coeffs), T=times)
    return y


def compute():
    times = np.linspace(0, 80e-6, 81)
    return {
        "current": CURRENT,
        "gain": GAIN,
        "divider": DIVIDER,
        "loops": [{"components": c, "error": [float(x) for x in response(c, times)]} for c in LOOPS],
        "step_s": 1e-6,
    }


def main():
    data = compute()
    if "--check" in sys.argv:
        kept = json.loads(FILE.read_text())
        for a, b in zip(kept["loops"], data["loops"], strict=True):
            assert np.allclose(a["error"], b["error"], atol=1e-6)
        print(f"{len(data['loops'])} step responses as scipy finds them")
        return
    FILE.write_text(json.dumps(data, indent=1) + "\n")


if __name__ == "__main__":
    main()
