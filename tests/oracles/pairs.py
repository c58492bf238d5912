"""Two overlapping echoes of the pulse in tests/published/vectors/pair_reference.csv.

1. `pair_bound.csv`: Cramer-Rao bound of the spacing at 30 dB, 12 bit, with delays and amplitudes free: the 4 x 4 Fisher matrix
   of the samples with numerical derivatives, inverted. x counts the envelope's -20 dB duration, 26.25 samples of 20 ns.
2. The bounds and fits of two that stand in `pairs.csv` are computed again: least squares over both delays by Nelder and
   Mead's simplex (SciPy), amplitudes by `numpy.linalg.lstsq`, from the stated delays.
3. `thin_wall_bound.csv`: the same for an interface echo and a geometric train behind it (five numbers free: interface
   amplitude and place, wall amplitude, period, decay): bound of the period.

`--write` replaces the tables of bounds; without it they are compared.
"""
import sys

import numpy as np
from scipy.optimize import minimize

from tables import agree, finish, numbers, table, write

LENGTH = 512
ORIGIN = 128
DURATION = 26.25
UNIT = 0.4 * 2048  # codes of an echo of amplitude 1

reference = np.zeros(LENGTH)
stored = np.array(numbers("vectors/pair_reference.csv")[0]) / 32111.66
reference[: len(stored)] = stored
spectrum = np.fft.rfft(reference)
omega = 2 * np.pi * np.fft.rfftfreq(LENGTH)


def pulse(place):
    """The pulse with its origin at sample `place`."""
    return np.fft.irfft(spectrum * np.exp(-1j * omega * (place - ORIGIN)), LENGTH)


def bound(model, parameters, of, noise):
    """Bound of the combination `of` of the parameters, from numerical derivatives of `model`."""
    parameters = np.asarray(parameters, float)
    step = 1e-4
    rows = []
    for i in range(len(parameters)):
        ahead, back = parameters.copy(), parameters.copy()
        ahead[i] += step
        back[i] -= step
        rows.append((model(ahead) - model(back)) / (2 * step))
    rows = np.array(rows)
    covariance = noise**2 * np.linalg.inv(rows @ rows.T)
    of = np.asarray(of, float)
    return np.sqrt(of @ covariance @ of)


def two(p):
    return p[1] * pulse(p[0]) + p[3] * pulse(p[2])


def thin(p):
    """Interface amplitude and place, first wall echo's amplitude, period, decay."""
    signal = p[0] * pulse(p[1])
    for n in range(1, 13):
        signal = signal + p[2] * p[4] ** (n - 1) * pulse(p[1] + n * p[3])
    return signal


def noise_of(snr_db):
    """Noise of an echo of amplitude 1, rounding to whole codes included."""
    return np.hypot(10 ** (-snr_db / 20), np.sqrt(1 / 12) / UNIT)


def pair_bounds():
    # In the checks the larger echo has 800 codes: rounding counts a little more.
    noise = np.hypot(10 ** (-30 / 20), np.sqrt(1 / 12) / 800)
    rows = []
    for ratio in (1.0, 0.5, -0.5):
        for x in (0.15, 0.25, 0.5, 0.8):
            value = bound(two, [150.4, 1.0, 150.4 + x * DURATION, ratio], [-1, 0, 1, 0], noise)
            rows.append([ratio, x, f"{20 * value:.5f}"])
    return rows


def thin_bounds():
    rows = []
    for snr in (20, 30):
        for x in (0.3, 0.4, 0.6):
            noise = np.hypot(10 ** (-snr / 20), np.sqrt(1 / 12) / 800)
            value = bound(thin, [1.0, 150.4, -0.6, x * DURATION, 0.5], [0, 0, 0, 1, 0], noise)
            rows.append([snr, x, f"{20 * value:.5f}"])
    return rows


def check_pairs():
    codes = numbers("vectors/pair_codes.csv")
    for number, row in enumerate(table("vectors/pairs.csv")):
        if float(row["true_ratio"]) == 0:
            continue
        noise = noise_of(float(row["snr_db"]))
        signal = np.zeros(LENGTH)
        signal[: len(codes[number])] = np.array(codes[number]) / UNIT

        def left(delays):
            both = np.stack([pulse(delays[0]), pulse(delays[1])], 1)
            amplitudes, *_ = np.linalg.lstsq(both, signal, rcond=None)
            rest = signal - both @ amplitudes
            return rest @ rest / noise**2

        start = [float(row["two_first"]), float(row["two_second"])]
        # Delays in that table count from sample 0, the pulse's origin lying at sample 128 of the reference.
        best = minimize(left, start, method="Nelder-Mead", options={"xatol": 1e-5, "fatol": 1e-5})
        limit = float(row["spacing_bound"])
        off = agree(f"pair {number}: spacing", best.x[1] - best.x[0], start[1] - start[0], 0.1 * limit)
        worst["spacing over its bound"] = max(worst.get("spacing over its bound", 0), off / limit)
        truth = [float(row["true_first"]), 1.0, float(row["true_first"]) + float(row["true_spacing"])]
        again = bound(two, truth + [float(row["true_ratio"])], [-1, 0, 1, 0], noise)
        off = agree(f"pair {number}: bound", again, limit, 0.02 * limit)
        worst["bound, relative"] = max(worst.get("bound, relative", 0), off / limit)


worst = {}
for name, header, rows in (
    ("vectors/pair_bound.csv", ["ratio", "x", "spacing_bound_ns"], pair_bounds()),
    ("vectors/thin_wall_bound.csv", ["snr_db", "x", "period_bound_ns"], thin_bounds()),
):
    if "--write" in sys.argv:
        write(name, header, rows)
    else:
        for stored_row, row in zip(table(name), rows, strict=True):
            agree(f"{name} {row[:2]}", float(row[2]), float(stored_row[header[2]]), 1e-4)
check_pairs()
finish("pairs", worst)
