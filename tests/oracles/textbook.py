"""What SciPy makes of the textbook's way through a record: Hilbert filter, magnitude, correlation with a pulse.

Record: the first line of tests/published/vectors/scene_codes.csv (4096 samples, 50 MS/s, 5 MHz, 60 %). Filter:
scipy.signal.remez, 63 taps, equiripple from 0.03 to 0.47 of the sample rate. Pulse: 64 samples of
scipy.signal.gausspulse with its middle at sample 32. Every 16th value of abs(x + j convolve(x, taps)), of
abs(scipy.signal.hilbert(x)) and of scipy.signal.correlate(x, pulse, "full") is stored. `--write` replaces the table;
`--constants` prints taps and pulse as firmware-example/textbook/src/lib.rs holds them.
"""
import sys

import numpy as np
from scipy.signal import correlate, gausspulse, hilbert, remez

from tables import agree, finish, numbers, table, write

NAME = "vectors/textbook.csv"
taps = np.append(remez(63, [0.03, 0.47], [1.0], type="hilbert", fs=1.0), 0.0)
# remez leaves rounding errors where the filter is zero.
taps[1::2] = 0.0
pulse = gausspulse((np.arange(64) - 32) / 50e6, fc=5e6, bw=0.6, bwr=-6)
if "--constants" in sys.argv:
    for name, values in (("taps", taps), ("pulse", pulse)):
        print(name + ":", ", ".join(f"{value:.9e}" for value in values))
x = np.array(numbers("vectors/scene_codes.csv")[0], float)
# Output n of the filter stands for the record's sample n: the filter's middle is its tap 31.
quadrature = np.convolve(x, taps)[31 : 31 + len(x)]
envelope, exact, correlation = np.hypot(x, quadrature), np.abs(hilbert(x)), correlate(x, pulse, "full")
rows = [[n, *(repr(float(a[n])) for a in (envelope, exact, correlation))] for n in range(0, len(x), 16)]
if "--write" in sys.argv:
    write(NAME, ["sample", "filter_envelope", "hilbert_envelope", "correlation"], rows)
worst = {}
for row in table(NAME):
    n = int(row["sample"])
    for key, values in (("filter_envelope", envelope), ("hilbert_envelope", exact), ("correlation", correlation)):
        difference = agree(f"{key} {n}", float(values[n]), row[key], 1e-6)
        worst[key] = max(worst.get(key, 0.0), difference)
inside = slice(64, -64)
print(f"filter against hilbert, largest: {np.abs(envelope - exact)[inside].max() / exact.max():.4f} of the peak")
finish("textbook.py", worst)
