"""The exact survey path in numpy and scipy, channel by channel: the other side of `cargo bench --bench against_numpy`.

For each channel: a third-order MASH, the phase error, the detector's mismatch, a window, one real FFT, the levels of the
in-band harmonics of K/M and the integrated in-band noise. Channels are spread over the cores by a process pool.

Two routes to the phase error, both vectorised:
  output   through the divider's sequence: accumulators (the first in closed form, the others by cumulative sums), their
           carries, the combined output, its running sum: what a script does that follows the structure;
  residue  a short cut for those who know it: the phase error is the second difference of the third residue, which is
           K times a table of binomials, made once, modulo M. No output, no sums.

Reads a JSON job on the first line of standard input, then one command a line:
  time ROUTE   surveys all channels, prints the seconds this took (interpreter, imports and pool are already up);
  show ROUTE   surveys all channels, prints the levels and noise as JSON;
  fft          prints the seconds of one real FFT of the record, the shortest of 30.
"""

import json
import multiprocessing
import os
import sys
import time

# One thread a process: the pool has the cores.
for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ[name] = "1"

import numpy as np
import scipy.fft

# Outputs before the periodic part of a third-order MASH.
SKIPPED = 2


class Setup:
    """What all channels share; made once in each process."""

    def __init__(self, job):
        self.record = job["record"]
        self.modulus = job["modulus"]
        self.bits = self.modulus.bit_length() - 1
        assert self.modulus == 1 << self.bits, "the comparison is made at a power of two"
        self.seed = job["seed"]
        self.mismatch = job["mismatch"]
        self.harmonics = job["harmonics"]
        self.last_bin = job["last_bin"]
        self.band_edge = self.last_bin * self.modulus / self.record
        total = self.record + SKIPPED
        self.cycle = np.arange(1, total + 1, dtype=np.int64)
        # Binomials C(n + 2, 3) and C(n + 1, 2) modulo 2^32: the third residue is K times the first plus the seed's part.
        n = self.cycle.astype(object)
        self.cubic = np.array(n * (n + 1) * (n + 2) // 6 % 2**32, dtype=np.uint32)
        self.seeded = np.array(n * (n + 1) // 2 * self.seed % 2**32, dtype=np.uint32)
        # Four cosine terms with a continuous third derivative, periodic.
        turn = 2 * np.pi * np.arange(self.record) / self.record
        self.terms = [0.338946, 0.481973, 0.161054, 0.018027]
        self.window = sum((-1) ** j * a * np.cos(j * turn) for j, a in enumerate(self.terms))
        self.squares = float(np.sum(self.window**2))
        self.phase = np.empty(self.record)
        self.bent = np.empty(self.record)

    def phase_by_output(self, word):
        """psi [cycles] through the divider's sequence."""
        mask = self.modulus - 1
        first = word * self.cycle
        first += self.seed
        second = np.cumsum(first & mask)
        third = np.cumsum(second & mask)
        # Carries up to here; their differences are those of each cycle.
        carried = [(total >> self.bits).astype(np.int32) for total in (first, second, third)]
        outputs = [np.diff(total, prepend=np.int32(0)) for total in carried]
        y = outputs[0][2:] + np.diff(outputs[1])[1:] + np.diff(outputs[2], n=2)
        phase = np.cumsum(y - word / self.modulus, out=self.phase)
        phase -= phase.mean()
        return phase

    def phase_by_residue(self, word):
        """psi [cycles] as the second difference of the third residue."""
        third = self.cubic * np.uint32(word)
        third += self.seeded
        third &= np.uint32(self.modulus - 1)
        # Differences need three samples, the first of which is the seed's zero before cycle 1.
        third = third.astype(np.int32)
        phase = self.phase
        np.multiply(third[1:-1], 2, out=phase, casting="unsafe")
        phase -= third[2:]
        phase -= third[:-2]
        phase *= 1 / self.modulus
        phase -= phase.mean()
        return phase

    def line_gain(self, distance):
        """What the window leaves of a line that lies `distance` bins above a bin."""

        def comb(x):
            size = self.record if x == 0 else np.sin(np.pi * x) / np.sin(np.pi * x / self.record)
            return size * np.exp(1j * np.pi * x * (1 - 1 / self.record))

        gain = self.terms[0] * comb(distance)
        for j, a in enumerate(self.terms[1:], 1):
            gain += (-1) ** j * a / 2 * (comb(distance + j) + comb(distance - j))
        return gain

    def channel(self, word, offset, route):
        """Returns (harmonic, level [dBc]) of the in-band lines and the rms noise phase [rad] of one channel."""
        phase = self.phase_by_output(word) if route == "output" else self.phase_by_residue(word)
        phase += offset
        bent = np.abs(phase, out=self.bent)
        bent *= self.mismatch / 2
        bent += phase
        bent *= self.window
        bins = scipy.fft.rfft(bent, overwrite_x=True)[: self.last_bin + 8]
        lines = []
        noise = bins.real**2 + bins.imag**2
        noise[:5] = 0
        noise[self.last_bin + 1 :] = 0
        for harmonic in range(1, self.harmonics + 1):
            residue = harmonic * word % self.modulus
            residue = min(residue, self.modulus - residue)
            if residue == 0 or residue > self.band_edge:
                continue
            at = residue * self.record / self.modulus
            nearest = int(at + 0.5)
            size = abs(bins[nearest] / self.line_gain(at - nearest))
            lines.append((harmonic, 20 * np.log10(2 * np.pi * size)))
            noise[max(nearest - 4, 0) : nearest + 5] = 0
        power = 2 * float(noise.sum()) / (self.record * self.squares)
        return lines, 2 * np.pi * np.sqrt(power)


def start(job):
    """Makes the shared part of a worker."""
    global SETUP
    SETUP = Setup(job)


def work(item):
    """One channel in a worker."""
    word, offset, route = item
    return SETUP.channel(word, offset, route)


def main():
    """Serves commands until the input ends."""
    job = json.loads(sys.stdin.readline())
    cores = job["cores"]
    with multiprocessing.Pool(cores, start, (job,)) as pool:

        def survey(route):
            items = [(word, offset, route) for word, offset in job["channels"]]
            return pool.map(work, items, chunksize=max(1, len(items) // (4 * cores)))

        # Both routes once: pages touched, transforms planned.
        for route in ("output", "residue"):
            survey(route)
        print(json.dumps({"numpy": np.__version__, "scipy": scipy.__version__}), flush=True)
        for line in sys.stdin:
            command, _, route = line.strip().partition(" ")
            begin = time.perf_counter()
            if command == "time":
                survey(route)
                print(time.perf_counter() - begin, flush=True)
            elif command == "show":
                print(json.dumps(survey(route)), flush=True)
            elif command == "fft":
                wave = np.random.default_rng(1).standard_normal(job["record"])
                times = []
                for _ in range(30):
                    begin = time.perf_counter()
                    scipy.fft.rfft(wave)
                    times.append(time.perf_counter() - begin)
                print(min(times), flush=True)


if __name__ == "__main__":
    main()
