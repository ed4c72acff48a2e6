#!/usr/bin/env python3
"""Writes the recordings of this folder. Run it here; the tests need only what it wrote.

One talk on every pair: idle, then bits of ten samples that alternate, then idle again, 2000 pairs at
100 kHz. Each recording disturbs it in one way. What a report must say is worked out by hand beside
each, from leg A = CM + DM/2 and leg B = CM - DM/2; nothing here computes it.
"""

import struct

RATE_HZ = 100_000
PAIRS = 2000


def talk(idle_v=0.2, high_v=2.0, low_v=-2.0, cm_v=2.5, driven_cm_v=None):
    """Pairs of legs in volts: idle, 1200 samples of bits from sample 400 on, idle."""
    pairs = []
    for sample in range(PAIRS):
        is_driven = 400 <= sample < 1600
        dm = idle_v
        if is_driven:
            dm = high_v if (sample - 400) // 10 % 2 == 0 else low_v
        cm = driven_cm_v if is_driven and driven_cm_v is not None else cm_v
        pairs.append([cm + dm / 2, cm - dm / 2])
    return pairs


def shift(pairs, first, count, volts, legs=(0, 1)):
    for pair in pairs[first : first + count]:
        for leg in legs:
            pair[leg] += volts
    return pairs


def place(pairs, first, count, volts, leg):
    for pair in pairs[first : first + count]:
        pair[leg] = volts
    return pairs


def sidecar(name, origin, expected, **keys):
    lines = [f"{key} = {value}" for key, value in keys.items()]
    lines += [f'origin = "{origin}"', "", expected.strip(), ""]
    with open(name + ".toml", "w", encoding="utf-8") as file:
        file.write("\n".join(lines))


def csv(name, pairs, origin, expected, **keys):
    with open(name, "w", encoding="ascii") as file:
        file.write("leg_a_v,leg_b_v\n")
        file.writelines(f"{a:.6f},{b:.6f}\n" for a, b in pairs)
    sidecar(name, origin, expected, sample_rate_hz=float(RATE_HZ), **keys)


def wav(name, pairs, bits, is_float, full_scale_v, origin, expected):
    """RIFF/WAVE: Microsoft, Multimedia Programming Interface and Data Specifications 1.0, 1991."""
    half = 2 ** (bits - 1)
    data = bytearray()
    for pair in pairs:
        for volts in pair:
            share = volts / full_scale_v
            if is_float:
                data += struct.pack("<f", share)
            else:
                code = max(-half, min(half - 1, round(share * half)))
                data += code.to_bytes(bits // 8, "little", signed=True)
    frame = 2 * bits // 8
    form = struct.pack("<HHIIHH", 3 if is_float else 1, 2, RATE_HZ, RATE_HZ * frame, frame, bits)
    with open(name, "wb") as file:
        file.write(b"RIFF" + struct.pack("<I", 36 + len(data)) + b"WAVE")
        file.write(b"fmt " + struct.pack("<I", 16) + form)
        file.write(b"data" + struct.pack("<I", len(data)) + bytes(data))
    sidecar(name, origin, expected, full_scale_v=float(full_scale_v))


LEVELS = """
[expected.levels]
idle_v = 0.2
driven_high_v = 2.0
driven_low_v = -2.0
cm_idle_v = 2.5
"""

# Idle legs 2.6 / 2.4 V; bits 3.5 / 1.5 V and 1.5 / 3.5 V. Highest 3.5, lowest 1.5.
# Window -7 to +12 V: 8.5 V above both, so "within" (3 V of 19 V is where marginal ends).
csv(
    "undisturbed.csv",
    talk(),
    "made by hand: a talk with nothing on it",
    """
[expected]
verdict = "within"
[expected.recording]
pairs = 2000
sample_rate_hz = 100000.0
clipped_samples = 0
[expected.worst]
leg_max_v = 3.5
leg_min_v = 1.5
cm_max_v = 2.5
cm_min_v = 2.5
dm_max_v = 2.0
dm_min_v = -2.0
margin_v = 8.5
[expected.excursions]
count = 0
samples_outside = 0
list = []
"""
    + LEVELS,
)

# Both legs 10 V up for 30 samples, bits 1000..1029: legs 13.5 and 11.5 V, average 12.5 V. Every one
# of the 30 pairs has a leg at 13.5 V, 1.5 V beyond 12 V, and the average 0.5 V beyond.
BOTH = """
[expected]
verdict = "outside"
[expected.recording]
pairs = 2000
sample_rate_hz = 100000.0
[expected.worst]
leg_max_v = 13.5
leg_min_v = 1.5
cm_max_v = 12.5
cm_min_v = 2.5
margin_v = -1.5
[expected.excursions]
count = 1
samples_outside = 30
[[expected.excursions.list]]
first_sample = 1000
samples = 30
outside_samples = 30
extreme_v = 13.5
extreme_sample = 1000
"""
csv(
    "pulse-on-both-legs.csv",
    shift(talk(), 1000, 30, 10.0),
    "made by hand: the common mode 10 V up for 30 samples",
    BOTH + 'limits = ["leg-a-high", "leg-b-high", "average-high"]\nbeyond_v = 1.5\n' + LEVELS,
)

# The same through WAV. Half a step of 20 V / 2^15 is 0.31 mV, of 20 V / 2^23 1.2 µV; 32-bit steps and
# floats below 1 µV, so half a microvolt of rounding remains.
for name, bits, is_float, tolerance_v in [
    ("pulse-16-bit.wav", 16, False, 0.000306),
    ("pulse-24-bit.wav", 24, False, 0.0000017),
    ("pulse-32-bit.wav", 32, False, 0.0000006),
    ("pulse-float.wav", 32, True, 0.0000011),
]:
    wav(
        name,
        shift(talk(), 1000, 30, 10.0),
        bits,
        is_float,
        20.0,
        f"made by hand: pulse-on-both-legs.csv in {bits}-bit {'float' if is_float else 'integer'}",
        BOTH.replace("[expected]", f"[expected]\ntolerance_v = {tolerance_v:.7f}", 1).replace(
            "extreme_sample = 1000\n", ""
        ),
    )

# Leg B alone at -9 V for 5 samples of the high bit 700..709 (A at 3.5 V): average -2.75 V, inside.
csv(
    "spike-on-leg-b.csv",
    place(talk(), 700, 5, -9.0, 1),
    "made by hand: leg B alone at -9 V for 5 samples",
    """
[expected]
verdict = "outside"
[expected.worst]
leg_max_v = 3.5
leg_min_v = -9.0
cm_max_v = 2.5
cm_min_v = -2.75
dm_max_v = 12.5
margin_v = -2.0
[expected.excursions]
count = 1
samples_outside = 5
[[expected.excursions.list]]
first_sample = 700
samples = 5
extreme_v = -9.0
limits = ["leg-b-low"]
dm_max_v = 12.5
[expected.judged.average]
verdict = "within"
[expected.judged.terminal]
verdict = "outside"
"""
    + LEVELS,
)

# A leg exactly on each limit: a limit itself is inside, and nothing is left.
csv(
    "on-the-limits.csv",
    place(place(talk(), 700, 20, 12.0, 0), 900, 20, -7.0, 1),
    "made by hand: leg A exactly at +12 V, later leg B exactly at -7 V",
    """
[expected]
verdict = "marginal"
[expected.worst]
leg_max_v = 12.0
leg_min_v = -7.0
margin_v = 0.0
[expected.excursions]
count = 0
samples_outside = 0
list = []
"""
    + LEVELS,
)

# One microvolt beyond each of them.
csv(
    "a-microvolt-beyond.csv",
    place(place(talk(), 700, 1, 12.000001, 0), 900, 2, -7.000001, 1),
    "made by hand: leg A one microvolt above +12 V, later leg B one below -7 V",
    """
[expected]
verdict = "outside"
[expected.worst]
leg_max_v = 12.000001
leg_min_v = -7.000001
margin_v = -0.000001
[expected.excursions]
count = 2
samples_outside = 3
[[expected.excursions.list]]
first_sample = 700
samples = 1
extreme_v = 12.000001
[[expected.excursions.list]]
first_sample = 900
samples = 2
extreme_v = -7.000001
""",
)

# Both legs 6 V up: 9.5 V, 2.5 V left of the 3 V that part marginal from within.
csv(
    "little-room.csv",
    shift(talk(), 1000, 30, 6.0),
    "made by hand: the common mode 6 V up for 30 samples",
    """
[expected]
verdict = "marginal"
[expected.worst]
leg_max_v = 9.5
cm_max_v = 8.5
margin_v = 2.5
[expected.excursions]
count = 0
samples_outside = 0
"""
    + LEVELS,
)

# The converter ends at +8 V, below the limit: leg A stands there for 12 samples, and where it would
# have gone nobody knows.
csv(
    "at-the-rail.csv",
    place(talk(), 700, 12, 8.0, 0),
    "made by hand: leg A at the converter's rail of 8 V",
    """
[expected]
verdict = "cannot-judge"
[expected.recording]
clipped_samples = 12
[expected.worst]
leg_max_v = 8.0
margin_v = 4.0
[expected.excursions]
count = 0
samples_outside = 0
[expected.converter]
are_rails_inside_limits = true
""",
    rail_low_v=-8.0,
    rail_high_v=8.0,
)

# High-speed CAN: recessive 0 V around 2.5 V, dominant 2 V. The average at 7.1 V for 40 samples of the
# talk (4.6 V up): 0.1 V beyond the 7 V of ISO 11898-2:2003 (TI SN65HVD23x data sheet).
csv(
    "can-at-7v1.csv",
    shift(talk(idle_v=0.0, high_v=2.0, low_v=0.0), 800, 40, 4.6),
    "made by hand: CAN with its average at 7.1 V for 40 samples",
    """
[expected]
verdict = "outside"
[expected.receiver]
name = "can-2003"
[expected.worst]
leg_max_v = 8.1
cm_max_v = 7.1
margin_v = -0.1
[expected.excursions]
count = 1
samples_outside = 40
[[expected.excursions.list]]
first_sample = 800
samples = 40
extreme_v = 7.1
limits = ["average-high"]
[expected.levels]
idle_v = 0.0
driven_high_v = 2.0
""",
    receiver='"can-2003"',
)

# Ten pairs, columns the other way round, a column too many, commas as decimal points, and a clock
# that starts anywhere: 20 kHz. Leg A 0.9 to 1.8 V, leg B 0.5 V, one pair with B at -7.5 V.
with open("ten-pairs.csv", "w", encoding="ascii") as file:
    file.write("# ten pairs\nnote;leg_b_v;time_s;leg_a_v\n")
    for sample in range(10):
        leg_b = -7.5 if sample == 6 else 0.5
        row = f"x;{leg_b:.1f};{3.2 + sample * 0.00005:.5f};{0.9 + sample * 0.1:.1f}\n"
        file.write(row.replace(".", ","))
sidecar(
    "ten-pairs.csv",
    "made by hand: ten pairs in another layout",
    """
[expected]
verdict = "outside"
[expected.recording]
pairs = 10
sample_rate_hz = 20000.0
duration_s = 0.0005
[expected.worst]
leg_max_v = 1.8
leg_min_v = -7.5
cm_max_v = 1.15
cm_min_v = -3.0
margin_v = -0.5
[expected.excursions]
count = 1
samples_outside = 1
[[expected.excursions.list]]
first_sample = 6
samples = 1
extreme_v = -7.5
""",
)
