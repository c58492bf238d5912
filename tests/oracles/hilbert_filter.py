"""Designs the 31-tap Hilbert filter of core/src/echo/envelope.rs with scipy.signal.remez and says how well it does.

Equiripple from 0.04 to 0.46 of the rate at which it runs. Prints the odd taps, and the largest error of the envelope
over the -20 dB support of the eight echoes in tests/published/vectors/, as a share of the peak, when the filter is laid
over every stride-th sample (stride = whole part of a fifth of the samples a cycle).
"""
import numpy as np
from scipy.signal import hilbert, remez

from tables import numbers, table

taps = remez(31, [0.04, 0.46], [1.0], type="hilbert", fs=1.0)
print("taps 1, 3 .. 15:", ", ".join(f"{abs(tap):.8f}" for tap in taps[16::2]))
for codes, row in zip(numbers("vectors/echo_codes.csv"), table("vectors/echoes.csv")):
    x = np.array(codes, float)
    exact = np.abs(hilbert(x))
    cycle = float(row["sample_rate_hz"]) / float(row["centre_frequency_hz"])
    stride = max(1, int(cycle / 5))
    kernel = np.zeros(30 * stride + 1)
    kernel[::stride] = taps
    found = np.hypot(x, np.convolve(x, kernel, mode="full")[15 * stride : 15 * stride + len(x)])
    peak = exact.max()
    error = np.abs(found - exact)[exact >= 0.1 * peak].max() / peak
    print(f"echo {row['echo']}: {cycle:.2f} samples a cycle, stride {stride}, largest error {100 * error:.2f} % of the peak")
