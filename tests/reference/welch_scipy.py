"""Makes welch_scipy.csv: power spectra of reproducible samples by SciPy's `signal.welch`.

Run with NumPy and SciPy installed; the samples come from a 64-bit linear congruential generator
(Knuth's MMIX constants) that the test repeats exactly.
"""
import numpy as np
import scipy
from scipy import signal

COUNT, LENGTH = 4096, 256
state, values = 1, []
for _ in range(2 * COUNT):
    state = (state * 6364136223846793005 + 1442695040888963407) % 2**64
    values.append((state >> 40) / 2**24 - 0.5)
x = np.array(values[0::2]) + 1j * np.array(values[1::2])
n = np.arange(COUNT)
x = x + 0.3 * np.exp(2j * np.pi * 0.1234 * n) + (0.05 - 0.02j)

print(f"# Power per bin, rising frequency. scipy.signal.welch {scipy.__version__}, {COUNT} samples,")
print(f"# transforms of {LENGTH}, periodic windows, no detrending, density times the bin width.")
print("window,overlap_percent,bin,power")
for ours, theirs in (("hann", "hann"), ("blackman_harris", "blackmanharris")):
    for overlap in (50, 75):
        _, density = signal.welch(x, 1.0, theirs, LENGTH, LENGTH * overlap // 100, detrend=False,
                                  return_onesided=False, scaling="density")
        for k, power in enumerate(np.fft.fftshift(density) / LENGTH):
            print(f"{ours},{overlap},{k},{power:.12e}")
