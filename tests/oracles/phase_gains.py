"""Can the gains of an interleaved record's phases be told from the record itself? Scatter of an arrival over the Cramer-Rao bound.

Three echoes of a Gaussian pulse of 60 % (relative heights 1, 0.7, 0.49), 40 dB over the noise, phases that differ in gain by
2 % rms. A gain pattern mirrors the echo about multiples of the base rate, into its band and beside it; what is beside the band is
regressed on what is inside, phase by phase, until nothing is left (with all sums over several rounds for the last column).

Needs NumPy only: python3 tests/oracles/phase_gains.py (a few minutes).
"""
import numpy as np

rng = np.random.default_rng(1)


def pulse(t, f, bandwidth=0.6):
    sigma = np.sqrt(2 * (6 / 20) * np.log(10)) / (np.pi * f * bandwidth)
    return np.exp(-0.5 * (t / sigma) ** 2) * np.cos(2 * np.pi * f * t)


def scatter(f, base, phases, gain, rounds, correct, trials):
    rate = base * phases
    count = 1600 // phases * phases
    t, phase = np.arange(count) / rate, np.arange(count) % phases
    inside = np.abs(np.fft.rfftfreq(count, 1 / rate) / f - 1) < 0.7
    amplitude, noise, errors = 1000.0, 10.0, []
    for _ in range(trials):
        gains = 1 + gain * rng.standard_normal(phases)
        found, product, power = np.zeros(phases), np.zeros(phases), np.zeros(phases)
        for _ in range(rounds):
            place = (300 + 20 * rng.random()) / rate
            echoes = sum(h * pulse(t - place - k * 400 / rate, f) for k, h in enumerate([1, 0.7, 0.49]))
            x = gains[phase] * amplitude * echoes + noise * rng.standard_normal(count)
            if not correct:
                continue
            e = found.copy()
            for _ in range(30):
                y = x * (1 - e[phase])
                band = np.fft.irfft(np.fft.rfft(y) * inside, count)
                p, q = np.bincount(phase, (y - band) * band, phases), np.bincount(phase, band * band, phases)
                e += 0.9 * p / q.max()
                e -= e.mean()
            product, power = product + e * q, power + q
            found = product / power
        if correct:
            # What noise explains of the pattern is no pattern.
            chance = noise**2 / power.mean()
            pattern = max(0.0, np.mean(found**2) - chance)
            x = x * (1 - found[phase] * pattern / (pattern + chance))
        around, tau = int(round(place * rate)) + np.arange(-40, 41), place
        for _ in range(3):
            at = around / rate - tau
            slope = -(pulse(at + 1e-10, f) - pulse(at - 1e-10, f)) / 2e-10
            a, b = np.linalg.lstsq(np.stack([pulse(at, f), slope], 1), x[around], rcond=None)[0]
            tau += b / a
        errors.append((tau - place) * rate)
    near = np.arange(-60, 61) / rate
    slope = (pulse(near + 1e-10, f) - pulse(near - 1e-10, f)) / 2e-10 / rate
    return np.std(errors) / (noise / (amplitude * np.sqrt((slope**2).sum())))


for f, base, phases in [(5e6, 2e6, 25), (5e6, 5e6, 10), (5e6, 10e6, 5), (10e6, 25e6, 4), (10e6, 5e6, 20)]:
    row = [
        scatter(f, base, phases, gain, rounds, correct, trials)
        for gain, rounds, correct, trials in [
            (0.0, 1, False, 300), (0.02, 1, False, 300), (0.0, 1, True, 300), (0.02, 1, True, 300), (0.02, 8, True, 150),
        ]
    ]
    print(
        f"{f / 1e6:g} MHz, {phases} x {base / 1e6:g} MS/s: equal gains {row[0]:.2f}, 2 % {row[1]:.2f}; corrected by the record itself: "
        f"equal {row[2]:.2f}, 2 % {row[3]:.2f}; by eight rounds {row[4]:.2f}",
        flush=True,
    )
