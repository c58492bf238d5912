"""Recomputes the figures of the Gaussian pulse and compares them with tests/published/physics/.

s(t) = exp(-t^2 / (2 sigma^2)) cos(2 pi f0 t): scipy.signal.gausspulse for the samples, scipy.signal.hilbert
and peak_widths for the duration, the discrete Fourier transform for the band limits, scipy.integrate.quad
for the energies. None of it uses the closed forms that the tables also hold.
"""
import math

import numpy as np
from scipy.integrate import quad
from scipy.signal import gausspulse, hilbert, peak_widths

from tables import agree, finish, table

worst = {"samples": 0.0, "duration (s)": 0.0, "limits (Hz)": 0.0, "energy": 0.0}

for row in table("physics/gaussian_samples.csv"):
    value = gausspulse(float(row["t_s"]), fc=5e6, bw=0.6, bwr=-6)
    worst["samples"] = max(worst["samples"], agree(f"sample at {row['t_s']}", float(value), row["s"], 1e-12))

for row in table("physics/gaussian_pulse.csv"):
    f0, relative = float(row["f0_Hz"]), float(row["fbw6"])
    rate, count = f0 * 200, 1 << 16
    t = (np.arange(count) - count // 2) / rate
    x = gausspulse(t, fc=f0, bw=relative, bwr=-6)
    envelope = np.abs(hilbert(x))
    peak = int(envelope.argmax())
    duration = peak_widths(envelope, [peak], rel_height=0.9)[0][0] / rate
    # Interpolation between samples 1/200 cycle apart limits the agreement.
    worst["duration (s)"] = max(
        worst["duration (s)"], agree(f"duration {f0} {relative}", duration, row["t20_env_numeric_s"], 3e-4 * duration)
    )
    spectrum = np.abs(np.fft.rfft(x))
    f = np.fft.rfftfreq(count, 1 / rate)
    level = spectrum.max() * 10 ** (-6 / 20)
    inside = np.nonzero(spectrum > level)[0]
    a, b = inside[0], inside[-1]
    step = f[1]
    lower = f[a] - step * (spectrum[a] - level) / (spectrum[a] - spectrum[a - 1])
    upper = f[b] + step * (spectrum[b] - level) / (spectrum[b] - spectrum[b + 1])
    for name, value, stored in (("lower", lower, row["fl6_numeric_Hz"]), ("upper", upper, row["fu6_numeric_Hz"])):
        worst["limits (Hz)"] = max(worst["limits (Hz)"], agree(f"{name} {f0} {relative}", value, stored, 1e-4 * f0))

for row in table("physics/pulse_integrals.csv"):
    f0, relative, phase = float(row["f0"]), float(row["fbw6"]), float(row["phi"])
    sigma = math.sqrt(2 * math.log(10 ** (6 / 20))) / (math.pi * f0 * relative)
    w = 2 * math.pi * f0

    def pulse(t):
        return math.exp(-t * t / (2 * sigma * sigma)) * math.cos(w * t + phase)

    def slope(t):
        return math.exp(-t * t / (2 * sigma * sigma)) * (
            -t / sigma**2 * math.cos(w * t + phase) - w * math.sin(w * t + phase)
        )

    for name, function, stored in (("energy", pulse, row["int_s2_num"]), ("slope", slope, row["int_ds2_num"])):
        value = quad(lambda t: function(t) ** 2, -8 * sigma, 8 * sigma, limit=400)[0]
        worst["energy"] = max(worst["energy"], agree(f"{name} {f0}", value, stored, 2e-6 * value) / value)

finish("gaussian_pulse", worst)
