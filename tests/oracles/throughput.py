"""Records of 4096 samples a second: the simulator with the core against NumPy and SciPy, on one core.

The same scene for both: six back-wall echoes of 10 mm of steel, 5 MHz, 60 %, 50 MS/s, 12 bits, 30 dB,
echo spectra kept, new noise and a shift by a part of a sample in every shot. NumPy measures as a
textbook would: envelope by scipy.signal.hilbert, its six highest peaks, correlation with the pulse by
FFT, a parabola through three values, a line through six arrivals.

    cargo build --release -p halfpulse-sim --example throughput
    python throughput.py ../../target/release/examples/throughput

Ends with status 1 if the ratio is below 3. Both count the time for which they had a core.
"""
import os

for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ[name] = "1"
import re
import subprocess
import sys
import time

import numpy as np
from scipy.fft import irfft, rfft, rfftfreq
from scipy.signal import find_peaks, gausspulse, hilbert

RATE, COUNT, LENGTH, CENTRE = 50e6, 4096, 8192, 5e6
PERIOD, ECHOES, DECAY = 0.02 / 5920, 6, 0.77
random = np.random.default_rng(1)
frequency = rfftfreq(LENGTH, 1 / RATE)
around = (np.arange(LENGTH) - LENGTH // 2) / RATE
pulse = np.roll(gausspulse(around, fc=CENTRE, bw=0.6, bwr=-6), -(LENGTH // 2))
reference = rfft(pulse)
train = sum(-(DECAY**n) * np.exp(-2j * np.pi * frequency * (n + 1) * PERIOD) for n in range(ECHOES))
spectrum = 1024 * reference * train
noise = 1024 * 10 ** (-30 / 20)


def shot(number):
    shift = (number % 97) * 2e-10
    signal = irfft(spectrum * np.exp(-2j * np.pi * frequency * shift), LENGTH)[:COUNT]
    signal += noise * random.standard_normal(COUNT)
    return np.clip(np.rint(signal), -2048, 2047).astype(np.int16)


def measure(codes):
    x = codes.astype(float)
    envelope = np.abs(hilbert(x))
    peaks, _ = find_peaks(envelope, height=5 * noise, distance=60)
    peaks = np.sort(peaks[np.argsort(envelope[peaks])[-ECHOES:]])
    correlation = -irfft(rfft(x, LENGTH) * np.conj(reference), LENGTH)
    times = []
    for peak in peaks:
        low = max(peak - 6, 1)
        at = low + int(np.argmax(correlation[low : peak + 7]))
        left, middle, right = correlation[at - 1 : at + 2]
        times.append((at + 0.5 * (left - right) / (left - 2 * middle + right)) / RATE)
    return 5920 / 2 * np.polyfit(np.arange(len(times)), times, 1)[0]


measured, start, shots = [], time.process_time(), 0
while time.process_time() - start < 2:
    measured.append(measure(shot(shots)))
    shots += 1
theirs = shots / (time.process_time() - start)
print(f"NumPy and SciPy: {theirs:.0f} records a second; {1e3 * np.median(measured):.4f} mm")
told = subprocess.run([sys.argv[1], "same scene"], capture_output=True, text=True, check=True).stdout
ours = float(re.search(r"(\d+) records a second", told).group(1))
print(f"simulator and core: {ours:.0f} records a second, {ours / theirs:.1f} times as many")
sys.exit(int(ours < 3 * theirs or abs(np.median(measured) - 0.01) > 1e-5))
