#!/usr/bin/env python3
"""Least squares of calibrations by scipy: writes calibration_reference.json, or compares it with --check.

Each case: rows of three voltage parts (one fixed, two that are scaled), levels measured with noise, upper bounds aside.
Solved by scipy.optimize.least_squares; intervals from the covariance and scipy.stats.t.
"""

import json
import pathlib
import sys

import numpy as np
from scipy.optimize import least_squares
from scipy.stats import t as student

FILE = pathlib.Path(__file__).with_name("calibration_reference.json")


def case(seed, rows):
    random = np.random.default_rng(seed)
    parts = 10 ** (random.uniform(-85, -45, (rows, 3)) / 20)
    truth = random.uniform(-6, 6, 2)

    def level(shift, p=parts):
        return 20 * np.log10(p[:, 0] + p[:, 1] * 10 ** (shift[0] / 20) + p[:, 2] * 10 ** (shift[1] / 20))

    measured = np.round(level(truth) + random.normal(0, 0.7, rows), 6)
    found = least_squares(lambda shift: measured - level(shift), [0.0, 0.0], xtol=1e-14, ftol=1e-14, gtol=1e-14)
    freedom = rows - 2
    scatter = np.sqrt(2 * found.cost / freedom)
    covariance = np.linalg.inv(found.jac.T @ found.jac)
    half = student.ppf(0.975, freedom) * scatter * np.sqrt(np.diag(covariance))
    return {
        "parts": parts.tolist(),
        "measured_dbc": measured.tolist(),
        "shift_db": found.x.tolist(),
        "half_db": half.tolist(),
        "scatter_db": float(scatter),
    }


def everything():
    return {
        "cases": [case(100 + i, rows) for i, rows in enumerate([4, 5, 6, 8, 10, 12, 16, 24, 31, 33, 40, 60])],
        "student": [[n, float(student.ppf(0.975, n))] for n in [1, 2, 5, 10, 20, 30, 31, 35, 50, 100, 1000]],
    }


def main():
    fresh = everything()
    if "--check" not in sys.argv:
        FILE.write_text(json.dumps(fresh) + "\n")
        return
    kept = json.loads(FILE.read_text())
    assert len(kept["cases"]) == len(fresh["cases"])
    for a, b in zip(kept["cases"], fresh["cases"]):
        for key in a:
            np.testing.assert_allclose(a[key], b[key], rtol=1e-5, atol=1e-6, err_msg=key)
    np.testing.assert_allclose(kept["student"], fresh["student"], rtol=1e-9)
    print(f"{len(kept['cases'])} calibrations as scipy solves them")


if __name__ == "__main__":
    main()
