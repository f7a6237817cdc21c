#!/usr/bin/env python3
"""Captured divider sequences made outside the program, with numpy, and what made them.

Writes tests/data/captures/*; with --check it only compares. The modulators are written from their recurrences:
multi-stage: v = in + s (+ a*c for a prime modulus, c the last carry), c = floor(v / W), s = v - W*c, W = M or 2^b;
the next stage takes s (output-fed: s + c); y = c1 + d(c2 + d(c3 + ...)), d = 1 - z^-1.
Error feedback: v = K + sum h_j e[n-j], y = floor(v / M), e = v - M*y.
"""
import io
import json
import pathlib
import sys

import numpy as np

FOLDER = pathlib.Path(__file__).parent / "captures"
PRIMES = {8: 251, 12: 4093, 16: 65521, 20: 1048573}


def run(structure, order, k, m, seeds, count, h=None):
    """Returns `count` outputs as an int64 array."""
    seeds = list(seeds) + [0] * (order - len(seeds))
    y = np.zeros(count, dtype=np.int64)
    if structure == "error-feedback":
        h = h or {1: [1], 2: [2, -1], 3: [3, -3, 1], 4: [4, -6, 4, -1]}[order]
        e = list(seeds)
        for n in range(count):
            v = k + sum(c * x for c, x in zip(h, e))
            y[n] = v // m
            e = [v - m * (v // m)] + e[:-1]
        return y
    wrap, a = m, 0
    if structure == "prime-mash":
        wrap = 1 << m.bit_length()
        a = wrap - m
    s, c, past = list(seeds), [0] * order, [0] * order
    for n in range(count):
        into = k
        for i in range(order):
            v = into + s[i] + a * c[i]
            c[i], s[i] = v // wrap, v % wrap
            into = s[i] + (c[i] if structure == "output-fed" else 0)
        total = 0
        # Innermost difference first; past[i] is the sum from stage i on, one cycle ago.
        for i in reversed(range(order)):
            inner = total
            total = c[i] + (inner - past[i + 1] if i + 1 < order else 0)
            if i + 1 < order:
                past[i + 1] = inner
        y[n] = total
    return y


# name, structure, order, K, M (working), seeds, N on top, file form
SETTINGS = [
    ("01", "mash", 1, 77, 512, [], 0, "txt"),
    ("02", "mash", 2, 301, 1024, [1], 0, "txt"),
    ("03", "mash", 3, 1, 4096, [1], 88, "csv"),
    ("04", "mash", 3, 32771, 65536, [1], 0, "npy"),
    ("05", "mash", 4, 1234, 8192, [1], 0, "npy"),
    ("06", "mash", 5, 99, 2048, [1], 200, "txt"),
    ("07", "mash", 3, 1234567, 1 << 21, [], 0, "npy"),
    ("08", "mash", 3, 11, 1536, [1], 92, "npy"),
    ("09", "mash", 2, 437, 1000, [1], 0, "txt"),
    ("10", "mash", 3, 17, 390, [], 0, "csv"),
    ("11", "mash", 4, 1000, 3001, [1], 0, "npy"),
    ("12", "prime-mash", 3, 100, PRIMES[8], [], 0, "npy"),
    ("13", "prime-mash", 2, 2048, PRIMES[12], [1], 0, "csv"),
    ("14", "prime-mash", 3, 12345, PRIMES[16], [1], 45, "npy"),
    ("15", "output-fed", 2, 333, 4096, [1], 0, "txt"),
    ("16", "output-fed", 3, 4097, 1 << 15, [], 0, "npy"),
    ("17", "output-fed", 3, 700, 2500, [1], 0, "npy"),
    ("18", "error-feedback", 2, 321, 1024, [], 0, "txt"),
    ("19", "error-feedback", 3, 9999, 1 << 17, [1], 0, "npy"),
    ("20", "error-feedback", 4, 45, 2047, [], 60, "csv"),
]
COUNT = 3000


def text(values, form):
    if form == "npy":
        buffer = io.BytesIO()
        np.save(buffer, values.astype(np.int16))
        return buffer.getvalue()
    if form == "csv":
        rows = "".join(f"{n};{v}\n" for n, v in enumerate(values))
        return ("sample;division\n" + rows).encode()
    return "".join(f"{v}\n" for v in values).encode()


def compute():
    files, truth = {}, []
    for name, structure, order, k, m, seeds, integer, form in SETTINGS:
        y = run(structure, order, k, m, seeds, COUNT) + integer
        files[f"{name}.{form}"] = text(y, form)
        # One value changed, and one dropped: the first index that differs from the true run.
        at = 1000 + 37 * int(name)
        changed = y.copy()
        changed[at] += 1
        dropped = np.delete(y, at)
        first = int(np.nonzero(dropped != y[: COUNT - 1])[0][0])
        truth.append(
            {
                "file": f"{name}.{form}",
                "structure": structure,
                "order": order,
                "k": k,
                "m": m,
                "seeds": seeds,
                "integer": integer,
                "changed_at": at,
                "dropped_at": at,
                "dropped_differs_at": first,
            }
        )
        if name in ("04", "12", "18"):
            files[f"{name}-changed.{form}"] = text(changed, form)
            files[f"{name}-dropped.{form}"] = text(dropped, form)
    files["truth.json"] = (json.dumps(truth, indent=1) + "\n").encode()
    return files


def main():
    files = compute()
    if "--check" in sys.argv:
        for name, data in files.items():
            assert (FOLDER / name).read_bytes() == data, f"{name} differs from what numpy makes"
        print(f"{len(files)} files as numpy makes them")
        return
    FOLDER.mkdir(exist_ok=True)
    for name, data in files.items():
        (FOLDER / name).write_bytes(data)


if __name__ == "__main__":
    main()
