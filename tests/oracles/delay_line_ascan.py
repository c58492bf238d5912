"""Rebuilds tests/published/delay_line_ascan.csv: an A-scan from physics alone, in the frequency domain.

Y(f) = P(f) sum over paths of: absorption and delay of every leg, reflection or transmission of the oil film,
piston diffraction over the whole path. Polystyrene 8 mm (2350 m/s, 2.48 MRayl, 30 dB/m at 5 MHz, proportional to
frequency with the dispersion that causality demands), oil 5 um (1740 m/s, 1.51 MRayl), steel 4.000 mm (5920 m/s,
46.47 MRayl, 10 dB/m at 5 MHz, proportional to frequency squared), air behind; element of 6 mm diameter; Gaussian
pulse 5 MHz, 60 %, centred at 1 us; 100 MS/s; 0.3 to 14 MHz.

Diffraction: D(S) = 1 - exp(-ju) [J0(u) + j J1(u)], u = 2 pi / S, S = sum(z c) / (f a^2): P. H. Rogers and
A. L. Van Buren, J. Acoust. Soc. Am. 55 (1974) 724 (formula from memory). Film: the textbook reflection and
transmission of one layer between two half-spaces. `--write` replaces the tables; without it they are compared.
"""
import sys

import numpy as np
from scipy.signal import gausspulse, hilbert
from scipy.special import j0, j1

from tables import agree, finish, table, write

RATE, LENGTH, F0, CENTRE = 100e6, 4096, 5e6, 1e-6
FINER = 8
DELAY_LINE = {"length": 8e-3, "velocity": 2350.0, "impedance": 2.48e6, "db_per_m": 30.0}
FILM = {"length": 5e-6, "velocity": 1740.0, "impedance": 1.51e6}
STEEL = {"length": 4e-3, "velocity": 5920.0, "impedance": 46.47e6, "db_per_m": 10.0}
RADIUS = 3e-3
NEPER_PER_DB = np.log(10) / 20

t = np.arange(LENGTH) / RATE
pulse = np.fft.rfft(gausspulse(t - CENTRE, fc=F0, bw=0.6, bwr=-6))
f = np.fft.rfftfreq(LENGTH, 1 / RATE)
band = (f >= 0.3e6) & (f <= 14e6)
fb = f[band]
w = 2 * np.pi * fb


def film(z_from, z_to):
    """Pressure reflection and transmission of the oil film between two half-spaces."""
    z = FILM["impedance"]
    first, second = (z - z_from) / (z + z_from), (z_to - z) / (z_to + z)
    turn = np.exp(-1j * w * FILM["length"] / FILM["velocity"])
    below = 1 + first * second * turn**2
    return (first + second * turn**2) / below, (1 + first) * (1 + second) * turn / below


def diffraction(sum_of_path_times_velocity):
    """Loss and advance of a piston's echo (Rogers and Van Buren)."""
    u = 2 * np.pi * fb * RADIUS**2 / sum_of_path_times_velocity
    return 1 - np.exp(-1j * u) * (j0(u) + 1j * j1(u))


loss = DELAY_LINE["db_per_m"] * NEPER_PER_DB
slowness = 1 / DELAY_LINE["velocity"] - 2 / np.pi * loss / (2 * np.pi * F0) * np.log(fb / F0)
through_line = np.exp(-2 * DELAY_LINE["length"] * (loss * fb / F0 + 1j * w * slowness))
loss = STEEL["db_per_m"] * NEPER_PER_DB
through_steel = np.exp(-2 * STEEL["length"] * (loss * (fb / F0) ** 2 + 1j * w / STEEL["velocity"]))
front, into = film(DELAY_LINE["impedance"], STEEL["impedance"])
inside, out = film(STEEL["impedance"], DELAY_LINE["impedance"])
line = 2 * DELAY_LINE["length"] * DELAY_LINE["velocity"]
steel = 2 * STEEL["length"] * STEEL["velocity"]
paths = {
    "interface": (1, through_line * front * diffraction(line)),
    "BW1": (-1, -through_line * into * through_steel * out * diffraction(line + steel)),
    "BW2": (-1, through_line * into * through_steel**2 * inside * out * diffraction(line + 2 * steel)),
}

total = np.zeros(len(f), complex)
echoes = []
for name, (sign, factor) in paths.items():
    spectrum = np.zeros(len(f), complex)
    spectrum[band] = pulse[band] * factor
    total += spectrum
    padded = np.zeros(LENGTH * FINER // 2 + 1, complex)
    padded[: len(f)] = sign * spectrum * np.conj(pulse)
    correlation = np.fft.irfft(padded)
    k = int(correlation.argmax())
    a, b, c = correlation[k - 1 : k + 2]
    delay = (k + 0.5 * (a - c) / (a - 2 * b + c)) / (RATE * FINER)
    echoes.append((name, float(delay), float(np.abs(hilbert(np.fft.irfft(spectrum))).max())))
signal = np.fft.irfft(total)[600:1500]

if "--write" in sys.argv:
    write("delay_line_ascan.csv", ["i", "t_s", "y"], [[i, f"{i / RATE:.12g}", f"{y:.12g}"] for i, y in enumerate(signal, 600)])
    rows = [[n, f"{d:.12g}", f"{e:.12g}", f"{20 * np.log10(e):.12g}"] for n, d, e in echoes]
    write("delay_line_echoes.csv", ["echo", "xcorr_delay_s", "env_peak", "dB"], rows)
else:
    worst = {"sample": 0.0, "delay (s)": 0.0, "envelope": 0.0}
    for row, y in zip(table("delay_line_ascan.csv"), signal, strict=True):
        worst["sample"] = max(worst["sample"], agree(f"sample {row['i']}", float(y), row["y"], 1e-9))
    for row, (name, delay, envelope) in zip(table("delay_line_echoes.csv"), echoes, strict=True):
        worst["delay (s)"] = max(worst["delay (s)"], agree(f"{name} delay", delay, row["xcorr_delay_s"], 1e-14))
        worst["envelope"] = max(worst["envelope"], agree(f"{name} envelope", envelope, row["env_peak"], 1e-9))
    periods = [(b[1] - a[1]) * STEEL["velocity"] / 2 * 1e3 for a, b in zip(echoes, echoes[1:])]
    print(f"interface to back wall {periods[0]:.6f} mm, back wall to back wall {periods[1]:.6f} mm")
    finish("delay_line_ascan", worst)
