#!/usr/bin/env python3
"""`legwise analyse` beside a straightforward NumPy/SciPy script on the same recordings, in one run.

Both do the same work: 16-bit two-channel WAV to volts, strict limit check of each leg and of the
average with exact counts and extremes, Welch spectra of common and differential mode (1024 points,
periodic Hann, 50 % overlap, mean removed per segment, averaged every 2 s). The script keeps the whole
file in memory-mapped blocks and uses vectorised calls only.

    pip install numpy scipy
    cargo build --release
    python3 tests/benches/compare_numpy.py [PAIRS ...]

Prints pairs per second (user + system time of the process, best of three) and peak resident memory.
"""

import json
import os
import subprocess
import sys
import tempfile
import time

RATE_HZ = 500_000
FULL_SCALE_V = 20.0

REFERENCE = r"""
import json, resource, sys
import numpy as np
from scipy import signal
path, full_scale_v, rate = sys.argv[1], float(sys.argv[2]), float(sys.argv[3])
raw = np.memmap(path, dtype="<i2", mode="r", offset=44).reshape(-1, 2)
low, high, block = -7.0, 12.0, 1_000_000
outside = 0
extremes = [np.inf, -np.inf, np.inf, -np.inf, np.inf, -np.inf]
for start in range(0, len(raw), block):
    volts = raw[start : start + block] * (full_scale_v / 32768)
    a, b = volts[:, 0], volts[:, 1]
    cm, dm = (a + b) / 2, a - b
    outside += int(((a < low) | (a > high) | (b < low) | (b > high) | (cm < low) | (cm > high)).sum())
    for number, quantity in enumerate((a, b, cm)):
        extremes[2 * number] = min(extremes[2 * number], float(quantity.min()))
        extremes[2 * number + 1] = max(extremes[2 * number + 1], float(quantity.max()))
    if len(a) >= 1024:
        for mode in (cm, dm):
            signal.welch(mode, fs=rate, window="hann", nperseg=1024, noverlap=512, detrend="constant")
print(json.dumps({"outside": outside, "extremes": extremes}))
"""


def write_recording(path, pairs):
    """Traffic with noise and a few common-mode pulses, as a WAV file of 16-bit samples."""
    import numpy as np

    header = b"RIFF" + (36 + 4 * pairs).to_bytes(4, "little") + b"WAVEfmt " + (16).to_bytes(4, "little")
    header += (1).to_bytes(2, "little") + (2).to_bytes(2, "little") + RATE_HZ.to_bytes(4, "little")
    header += (4 * RATE_HZ).to_bytes(4, "little") + (4).to_bytes(2, "little") + (16).to_bytes(2, "little")
    header += b"data" + (4 * pairs).to_bytes(4, "little")
    random = np.random.default_rng(1)
    with open(path, "wb") as file:
        file.write(header)
        for start in range(0, pairs, 1_000_000):
            count = min(1_000_000, pairs - start)
            index = np.arange(start, start + count)
            busy = (index // 20_000) % 3 == 0
            bit = random.integers(0, 2, count // 50 + 1).repeat(50)[:count]
            dm = np.where(busy, np.where(bit == 1, 2.1, -1.9), 0.25)
            cm = 2.4 + 1.5 * np.sin(2 * np.pi * 50 * index / RATE_HZ)
            cm[:40] += 11.0
            noise = random.normal(0, 0.003, (count, 2))
            volts = np.stack((cm + dm / 2, cm - dm / 2), axis=1) + noise
            file.write(np.round(volts * 32768 / FULL_SCALE_V).astype("<i2").tobytes())


def resident_peak(pid):
    """Peak resident bytes of a running process; 0 once it has gone."""
    try:
        with open(f"/proc/{pid}/status") as status:
            return next((int(line.split()[1]) * 1024 for line in status if line.startswith("VmHWM")), 0)
    except OSError:
        return 0


def measure(command):
    """Best user + system seconds of three runs, peak resident bytes, and the output."""
    best, peak, output = float("inf"), 0, b""
    for _ in range(3):
        with tempfile.TemporaryFile() as out:
            process = subprocess.Popen(command, stdout=out)
            status, usage = None, None
            while status is None:
                # The kernel's own peak would include this script's memory from before the exec.
                peak = max(peak, resident_peak(process.pid))
                time.sleep(0.005)
                pid, code, usage = os.wait4(process.pid, os.WNOHANG)
                status = code if pid else None
            if status != 0:
                sys.exit(f"could not run {command[0]}: status {status}; try 'cargo build --release' first")
            out.seek(0)
            output = out.read()
        best = min(best, usage.ru_utime + usage.ru_stime)
    return best, peak, output


def main():
    sizes = [int(float(size)) for size in sys.argv[1:]] or [1_000_000, 100_000_000]
    program = os.environ.get("LEGWISE", "target/release/legwise")
    print(f"{'pairs':>12} {'who':>12} {'M pairs/s':>10} {'peak MB':>8}")
    for pairs in sizes:
        with tempfile.TemporaryDirectory() as folder:
            path = os.path.join(folder, "pair.wav")
            write_recording(path, pairs)
            ours = measure([program, "analyse", path, "--full-scale", str(FULL_SCALE_V), "--json"])
            theirs = measure([sys.executable, "-c", REFERENCE, path, str(FULL_SCALE_V), str(RATE_HZ)])
            for who, (seconds, peak, _) in (("legwise", ours), ("NumPy/SciPy", theirs)):
                print(f"{pairs:>12} {who:>12} {pairs / seconds / 1e6:>10.1f} {peak / 1e6:>8.0f}")
            report, reference = json.loads(ours[2]), json.loads(theirs[2])
            same = report["excursions"]["samples_outside"] == reference["outside"]
            print(f"{'':>12} {'ratio':>12} {theirs[0] / ours[0]:>10.1f}   samples outside agree: {same}")


if __name__ == "__main__":
    main()
