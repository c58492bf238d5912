"""Recomputes tests/published/physics/delay_bound.csv: Cramer-Rao bounds of a Gaussian pulse in white noise.

var(delay) >= sigma^2 / sum(s'(t_k)^2) with sigma = 10^(-SNR/20) of a pulse of envelope peak 1, summed over the
samples themselves with a central difference of the pulse as derivative: no closed form enters.
"""
import numpy as np
from scipy.signal import gausspulse

from tables import agree, finish, table

worst = {"delay, relative": 0.0, "amplitude, relative": 0.0}
for row in table("physics/delay_bound.csv"):
    f0, relative, rate = float(row["f0_Hz"]), float(row["fbw6"]), float(row["fs_Hz"])
    sigma = 10 ** (-float(row["peak_SNR_dB"]) / 20)
    t = np.arange(-4096, 4097) / rate
    half_step = 1e-4 / f0
    pulse = gausspulse(t, fc=f0, bw=relative, bwr=-6)
    slope = (
        gausspulse(t + half_step, fc=f0, bw=relative, bwr=-6) - gausspulse(t - half_step, fc=f0, bw=relative, bwr=-6)
    ) / (2 * half_step)
    for key, value, stored in (
        ("delay, relative", sigma / np.sqrt((slope**2).sum()), row["crlb_tau_s"]),
        ("amplitude, relative", sigma / np.sqrt((pulse**2).sum()), row["crlb_rel_amp"]),
    ):
        what = f"{key} {f0} {relative} {rate} {row['peak_SNR_dB']}"
        worst[key] = max(worst[key], agree(what, float(value), stored, 2e-4 * value) / value)
finish("delay_bound", worst)
