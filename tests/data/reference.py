"""Independent reference for sequences, line spectra, densities and words.

Written from the definitions with numpy, scipy and Python's fractions; it shares no code with the program.
    python3 tests/data/reference.py            rewrites tests/data/reference.json
    python3 tests/data/reference.py --check    recomputes and compares (exit status 1 on a difference)
"""
import hashlib
import json
import math
import pathlib
import sys
from fractions import Fraction

import numpy as np
from scipy import optimize, signal

HERE = pathlib.Path(__file__).parent
# Registers x^a + x^b + 1: ITU-T O.150 (9, 11, 15), maximal-length tables (7).
TAPS = {7: (7, 6), 9: (9, 5), 11: (11, 9), 15: (15, 14)}


def register_bits(length, seed, count):
    """Output of the register x^a + x^b + 1 by its recurrence: bit[n] = bit[n - a] xor bit[n - b].

    The first `length` outputs are the bits of the seed, most significant first."""
    a, b = TAPS[length]
    bits = [(seed >> (length - 1 - i)) & 1 for i in range(length)]
    while len(bits) < count:
        bits.append(bits[-a] ^ bits[-b])
    return np.array(bits[:count], dtype=np.int64)


def mash(m, k, order, seeds, length, dither=None):
    """y[n] = sum_i (1 - z^-1)^(i-1) c_i[n], one accumulator after the other, whole arrays at a time."""
    x = np.full(length, k, dtype=np.int64)
    y = np.zeros(length, dtype=np.int64)
    for stage in range(order):
        if dither is not None and dither[0] == stage + 1:
            x = x + dither[1]
        total = np.cumsum(x) + seeds[stage]
        wraps = total // m
        carry = np.diff(np.concatenate(([0], wraps)))
        for _ in range(stage):
            carry = np.diff(np.concatenate(([0], carry)))
        y += carry
        x = total - wraps * m
    return y


def brute_period(m, k, order, seeds, most):
    """Steps until the state of all accumulators returns."""
    state = list(seeds[:order])
    start = tuple(state)
    for step in range(1, most + 1):
        x = k
        for i in range(order):
            state[i] = (state[i] + x) % m
            x = state[i]
        if tuple(state) == start:
            return step
    return None


def charge(p, mismatch, dead_zone):
    beyond = np.maximum(np.abs(p) - dead_zone, 0.0)
    return np.sign(p) * beyond + 0.5 * mismatch * beyond


def settings():
    rng = np.random.default_rng(20260101)
    out = []
    for i in range(24):
        order = 1 + i % 5
        kind = ["prime", "power", "composite"][(i // 5) % 3]
        if kind == "prime":
            m = int(rng.choice([61, 251, 509] if order < 4 else [13, 31, 61]))
        elif kind == "power":
            m = 1 << int(rng.integers(5, 12 if order < 4 else 9))
        else:
            m = int(rng.choice([60, 96, 210, 360, 390, 720] if order < 4 else [60, 96]))
        k = int(rng.integers(1, m))
        seeds = [int(rng.integers(0, m)) for _ in range(order)]
        dither = None
        if i % 6 == 5 and order > 1:
            length = int(rng.choice([7, 9, 11]))
            dither = {"stage": int(rng.integers(1, order + 1)), "register": length,
                      "seed": int(rng.integers(1, 1 << length)), "weight": int(rng.integers(1, 4))}
        out.append({"order": order, "m": m, "k": k, "seeds": seeds, "dither": dither})
    return out


def sequence_case(case, index):
    m, k, order, seeds = case["m"], case["k"], case["order"], case["seeds"]
    record = 1 << 16
    dither = None
    if case["dither"]:
        d = case["dither"]
        dither = (d["stage"], register_bits(d["register"], d["seed"], record) * d["weight"])
    y = mash(m, k, order, seeds, record, dither)
    out = dict(case)
    out["first"] = y[:64].tolist()
    out["sha256_20000"] = hashlib.sha256(y[:20000].astype("<i4").tobytes()).hexdigest()
    out["period"] = None if dither else brute_period(m, k, order, seeds, 400000)
    phase = np.cumsum(y * m - k) / m
    psi = 2 * np.pi * (phase - phase.mean())
    _, density = signal.welch(psi, fs=20e6, window="hann", nperseg=4096, noverlap=2048, detrend=False,
                              return_onesided=False, scaling="density")
    out["density"] = [[b, float(density[b])] for b in (50, 137, 400, 800, 1500, 2040)]
    out["lines"] = None
    t = out["period"]
    if t and t <= 60000:
        y = mash(m, k, order, seeds, t + order - 1)
        phase = np.cumsum(y * m - k)[order - 1:] / m
        psi = phase - phase.mean()
        lines = np.fft.rfft(psi) / t
        mismatch, dead_zone, target = 0.02 + 0.01 * (index % 3), 0.003 * (index % 2), 0.02 + 0.05 * (index % 4)
        # Below the slope of the curve the mean charge rises strictly: the target lies outside the dead zone.
        rest = optimize.brentq(lambda a: charge(psi + a, mismatch, dead_zone).mean() - target, -60, 60,
                               xtol=1e-15, rtol=8.9e-16)
        bent = np.fft.rfft(charge(psi + rest, mismatch, dead_zone) - psi) / t
        pick = sorted(set(int(b) for b in np.linspace(1, max(1, t // 2), 10)))
        pick = [b for b in pick if b < len(lines)]
        out["lines"] = {
            "mismatch": mismatch, "dead_zone": dead_zone, "target": target, "rest": float(rest),
            "power": float(np.mean(psi * psi)),
            "bins": [[b, float(lines[b].real), float(lines[b].imag), float(bent[b].real), float(bent[b].imag)]
                     for b in pick],
        }
    return out


def nearest_even(value):
    floor = value.numerator // value.denominator
    rest = 2 * (value - floor)
    if rest == 1:
        return floor + floor % 2
    return floor + (1 if rest > 1 else 0)


def best_fraction(ratio, largest):
    """Best approximation with denominator up to `largest`, ties to the smaller denominator, by trying them all."""
    whole = ratio.numerator // ratio.denominator
    part = ratio - whole
    best = None
    for q in range(1, largest + 1):
        k = nearest_even(part * q)
        error = abs(Fraction(k, q) - part)
        if best is None or error < best[0]:
            best = (error, k, q)
    _, k, q = best
    return [whole + k // q, k % q, q]


def fixed(ratio, m):
    n = ratio.numerator // ratio.denominator
    k = nearest_even((ratio - n) * m)
    return {"ratio": f"{ratio.numerator}/{ratio.denominator}", "rule": "fixed", "m": m, "word": [n + k // m, k % m, m]}


def word_cases():
    cases = []
    for reference in (Fraction(19_200_000), Fraction(20_000_000), Fraction(13_000_000)):
        for i in range(70):
            channel = Fraction(400_000_000) + 1_012_500 * i + Fraction(25_000, 3) * (i % 4)
            ratio = 4 * channel / reference
            cases.extend(fixed(ratio, m) for m in (1 << 24, 1000, 2))
            if i % 10 == 0:
                cases.append({"ratio": f"{ratio.numerator}/{ratio.denominator}", "rule": "largest", "m": 511,
                              "word": best_fraction(ratio, 511)})
    # Ties to even on both sides, and carries into N.
    cases.extend(fixed(ratio, m) for ratio, m in
                 ((Fraction(43, 4), 2), (Fraction(41, 4), 2), (Fraction(1999, 20), 5), (Fraction(399, 4), 2)))
    return cases


def near_integer():
    """0 < tone offset <= guard at q = 1 over 400 ... 470 MHz inclusive, 12.5 kHz, VCO = P x output."""
    rows = []
    for pfd in (19_200_000, 20_000_000):
        for p in (4, 8):
            for guard in (200_000, 199_999):
                offsets = (p * (400_000_000 + 12_500 * i) % pfd for i in range(5601))
                rows.append([pfd, p, guard, sum(0 < min(d, pfd - d) <= guard for d in offsets)])
    return rows


def registers():
    """Period and ones of each register, by scipy's generator of maximal-length sequences."""
    out = []
    for length, (a, b) in TAPS.items():
        bits, _ = signal.max_len_seq(length, taps=[a - b])
        repeats = signal.max_len_seq(length, taps=[a - b], length=2 * len(bits))[0]
        out.append({"register": length, "period": len(bits), "ones": int(bits.sum()),
                    "repeats": bool((repeats[:len(bits)] == repeats[len(bits):]).all())})
    return out


def compute():
    return {
        "sequences": [sequence_case(case, i) for i, case in enumerate(settings())],
        "words": word_cases(),
        "near_integer": near_integer(),
        "registers": registers(),
    }


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
    target = HERE / "reference.json"
    fresh = json.loads(json.dumps(compute()))
    if "--check" in sys.argv:
        try:
            same(fresh, json.loads(target.read_text()))
        except AssertionError as difference:
            print(f"reference.json differs: {difference}")
            return 1
        print("reference.json agrees with a fresh computation")
        return 0
    target.write_text(json.dumps(fresh, separators=(",", ":")) + "\n")
    print(f"wrote {target.name}")
    return 0


if __name__ == "__main__":
    sys.exit(main())
