"""The postfilters of Zelinski (1988) and of McCowan and Bourlard (2003) in
double precision, pair by pair as published: a second opinion.

python3 postfilter.py SIGNALS OUT RATE KIND FLOOR_DB AVERAGE_S X,Y,Z;... DELAYS SPEED

SIGNALS is float32, channel after channel: the microphones and then one beam.
DELAYS are the arrivals at the microphones in seconds, separated by commas.
OUT gets the filtered beam as float64.
"""
import sys

import numpy as np

signals, out, rate, kind, floor, average, places, delays, speed = sys.argv[1:]
rate, floor, average, speed = int(rate), 10 ** (float(floor) / 20), float(average), float(speed)
at = np.array([[float(v) for v in p.split(",")] for p in places.split(";")])
tau = np.array([float(v) for v in delays.split(",")])
mics = len(at)
x = np.fromfile(signals, dtype="<f4").astype(float).reshape(mics + 1, -1)
frames = x.shape[1]

size = 4
while size < 0.02 * rate:
    size *= 2
hop = size // 4
window = np.sqrt(0.5 - 0.5 * np.cos(2 * np.pi * np.arange(size) / size))
hz = np.arange(size // 2 + 1) * rate / size
pad = 4 * size + int(np.ceil(np.max(np.abs(tau)) * rate))
x = np.pad(x, ((0, 0), (pad, pad)))
y = np.zeros(x.shape[1])
keep = np.exp(-hop / (average * rate))
phi = np.zeros((mics, mics, size // 2 + 1), complex)
for start in range(pad - (size - hop), pad + frames, hop):
    spectra = []
    for m in range(mics):
        whole = int(np.round(tau[m] * rate))
        part = x[m, start + whole : start + whole + size] * window
        spectra.append(np.fft.rfft(part) * np.exp(2j * np.pi * hz * (tau[m] - whole / rate)))
    spectra = np.array(spectra)
    phi = keep * phi + (1 - keep) * spectra[:, None, :] * np.conj(spectra[None, :, :])
    own = np.real(np.einsum("mmk->mk", phi))
    target = np.zeros(size // 2 + 1)
    for m in range(mics):
        for n in range(m + 1, mics):
            coherence = np.zeros(size // 2 + 1)
            if kind == "diffuse":
                distance = np.linalg.norm(at[m] - at[n])
                coherence = np.sinc(2 * hz * distance / speed) * np.cos(2 * np.pi * hz * (tau[m] - tau[n]))
                coherence = np.minimum(coherence, 0.99)
            target += (np.real(phi[m, n]) - 0.5 * coherence * (own[m] + own[n])) / (1 - coherence)
    target *= 2 / (mics * (mics - 1))
    power = own.mean(axis=0)
    gain = np.where(power > 0, np.clip(target / np.where(power > 0, power, 1), floor, 1), 1)
    beam = np.fft.rfft(x[mics, start : start + size] * window) * gain
    y[start : start + size] += 0.5 * window * np.fft.irfft(beam, size)
y[pad : pad + frames].tofile(out)
