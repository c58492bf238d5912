"""What SciPy says of the eight echoes in tests/published/vectors/echo_codes.csv.

Envelope: abs(scipy.signal.hilbert) over the whole record. Widths: scipy.signal.peak_widths of that envelope at
rel_height 0.5 and 0.9. Spectrum: abs(rfft) of the stated samples under a cosine taper, zero-padded to 4096,
with linearly interpolated limits at half the maximum (as first stored) and at -6 dB = 10^(-6/20). Rectified
duration: first to last crossing of 10 % of the largest absolute sample among the same samples, linearly interpolated.
`--write` replaces the expected values; without it they are compared.
"""
import sys

import numpy as np
from scipy.signal import hilbert, peak_widths

from tables import agree, finish, numbers, table, write


def limits(spectrum, step, level):
    """The two frequencies next to the maximum where the spectrum passes `level`."""
    low = high = int(spectrum.argmax())
    while spectrum[low] > level:
        low -= 1
    while spectrum[high] > level:
        high += 1
    lower = low + (level - spectrum[low]) / (spectrum[low + 1] - spectrum[low])
    upper = high - (level - spectrum[high]) / (spectrum[high - 1] - spectrum[high])
    return lower * step, upper * step


def rectified_width(x):
    """Distance in samples between the first and the last crossing of 10 % of the largest |x|.

    From 40 dB upwards only: at 30 dB the noise itself passes 10 %.
    """
    size = np.abs(x)
    level = 0.1 * size.max()
    above = np.nonzero(size >= level)[0]
    a, b = int(above[0]), int(above[-1])
    first = a - (size[a] - level) / (size[a] - size[a - 1])
    last = b + (size[b] - level) / (size[b] - size[b + 1])
    return last - first


def figures(codes, row):
    """The expected values of one echo, and its envelope."""
    x = np.array(codes, float)
    envelope = np.abs(hilbert(x))
    peak = int(envelope.argmax())
    first, end, taper = (int(row[key]) for key in ("spectrum_first", "spectrum_end", "taper_samples"))
    length = int(row["transform_length"])
    window = np.ones(end - first)
    ramp = 0.5 * (1 - np.cos(np.pi * (np.arange(taper) + 0.5) / taper))
    window[:taper], window[-taper:] = ramp, ramp[::-1]
    spectrum = np.abs(np.fft.rfft(x[first:end] * window, length))
    step = float(row["sample_rate_hz"]) / length
    lower, upper = limits(spectrum, step, 0.5 * spectrum.max())
    lower_6db, upper_6db = limits(spectrum, step, 10 ** (-6 / 20) * spectrum.max())
    return {
        "envelope_peak_index": peak,
        "envelope_peak_codes": float(envelope[peak]),
        "width_6db_samples": float(peak_widths(envelope, [peak], rel_height=0.5)[0][0]),
        "width_20db_samples": float(peak_widths(envelope, [peak], rel_height=0.9)[0][0]),
        "rectified_20db_samples": float(rectified_width(x[first:end])),
        "lower_frequency_hz": float(lower),
        "upper_frequency_hz": float(upper),
        "centre_of_limits_hz": float((lower + upper) / 2),
        "peak_frequency_hz": float(spectrum.argmax() * step),
        "lower_6db_hz": float(lower_6db),
        "upper_6db_hz": float(upper_6db),
    }, envelope


rows = table("vectors/echoes.csv")
codes = numbers("vectors/echo_codes.csv")
results = [figures(x, row) for x, row in zip(codes, rows, strict=True)]
if "--write" in sys.argv:
    for row, (values, _) in zip(rows, results):
        row.update({key: repr(value) for key, value in values.items()})
    header = list(rows[0])
    write("vectors/echoes.csv", header, [[row[key] for key in header] for row in rows])
    write("vectors/echo_envelopes.csv", [], [[f"{value:.3f}" for value in envelope] for _, envelope in results])
else:
    worst = {}
    for row, (values, _) in zip(rows, results):
        for key, value in values.items():
            tolerance = 1e-6 * max(abs(value), 1.0)
            worst[key] = max(worst.get(key, 0.0), agree(f"echo {row['echo']} {key}", value, row[key], tolerance))
    worst["envelope"] = 0.0
    for row, stored, (_, envelope) in zip(rows, numbers("vectors/echo_envelopes.csv", float), results):
        for a, b in zip(envelope, stored, strict=True):
            worst["envelope"] = max(worst["envelope"], agree(f"echo {row['echo']} envelope", float(a), b, 6e-4))
    finish("echoes", worst)
