"""Delays of the records in tests/published/vectors/delay*_codes.csv against their reference.

The cross-correlation is the circular one of the discrete Fourier transform. Columns: the largest of
its whole-sample values; a parabola and a cosine through three of them; and the maximum of the trigonometric
polynomial through all of them (Newton steps on the exact derivative), which is the maximum-likelihood delay of a
band-limited pulse in white noise. Lags count from the reference's own place.
`--write` replaces the expected values; without it they are compared. `--bounds` prints the Cramer-Rao bounds.
"""
import sys

import numpy as np
from scipy.signal import hilbert

from tables import agree, finish, numbers, table, write

SEARCH = 8  # whole lags each way; the delays were drawn within +-4 samples


def delays(record, reference):
    """Whole lag, parabola, cosine, band-limited maximum; in samples."""
    length = len(reference)
    cross = np.fft.rfft(record, length) * np.conj(np.fft.rfft(reference, length))
    lags = np.fft.irfft(cross, length)
    whole = max(range(-SEARCH, SEARCH + 1), key=lambda lag: lags[lag])
    before, at, after = lags[whole - 1], lags[whole], lags[whole + 1]
    parabola = whole + 0.5 * (before - after) / (before - 2 * at + after)
    angle = np.arccos((before + after) / (2 * at))
    cosine = whole + np.arctan2(after - before, 2 * at * np.sin(angle)) / angle
    omega = 2 * np.pi * np.arange(len(cross)) / length
    shift = cosine
    for _ in range(20):
        turned = cross * np.exp(1j * omega * shift)
        shift += (1j * omega * turned).real.sum() / (omega**2 * turned).real.sum()
    return whole, parabola, cosine, shift


def bound(reference, snr_db):
    """Cramer-Rao bound of the delay in samples: sigma / (A sqrt(sum of squared derivatives)).

    The derivative is taken of the noisy, rounded reference itself, so it agrees with the stored bound (made from
    the pulse before noise and with the rounding noise added) within 6 %.
    """
    omega = 2 * np.pi * np.arange(len(reference) // 2 + 1) / len(reference)
    slope = np.fft.irfft(1j * omega * np.fft.rfft(reference), len(reference))
    return np.abs(hilbert(reference)).max() * 10 ** (-snr_db / 20) / np.sqrt((slope**2).sum())


expected = table("vectors/delays.csv")
references = numbers("vectors/delay_references.csv")
worst = {"whole": 0.0, "parabola": 0.0, "cosine": 0.0, "interpolated": 0.0, "bound, relative": 0.0}
rows = []
for row in table("vectors/delay_sets.csv"):
    number = int(row["set"])
    reference = np.array(references[number]) / float(row["reference_scale"])
    stored_bound = float(row["bound_samples"])
    value = float(bound(reference, float(row["snr_db"])))
    if "--bounds" in sys.argv:
        print(f"set {number}: bound {value:.6f} samples, stored {stored_bound:.6f}")
    difference = agree(f"set {number} bound", value, stored_bound, 0.06 * stored_bound)
    worst["bound, relative"] = max(worst["bound, relative"], difference / stored_bound)
    members = [r for r in expected if int(r["set"]) == number]
    for index, (record, member) in enumerate(zip(numbers(f"vectors/delay{number}_codes.csv"), members, strict=True)):
        computed = delays(np.array(record, float), reference)
        rows.append([number, member["true_delay"], *(f"{v:.6f}" for v in computed)])
        for column, v, tolerance in zip(
            ("whole_lag", "parabola", "cosine", "interpolated"), computed, (0.0, 1e-6, 2e-6, 1e-6)
        ):
            key = "whole" if column == "whole_lag" else column
            what = f"set {number} row {index} {column}"
            worst[key] = max(worst[key], agree(what, float(v), member[column], tolerance))
if "--write" in sys.argv:
    write("vectors/delays.csv", list(expected[0]), rows)
else:
    finish("delays", worst)
