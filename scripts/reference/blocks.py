#!/usr/bin/env python3
"""Delay-and-sum in blocks, as one writes it in an afternoon with numpy and
scipy: read a block, transform all channels, multiply, add, transform back.

    blocks.py TAKE.wav BEAM.txt OUT.wav SIZE HOP
"""

import os
import sys

import numpy as np
import scipy.fft

sys.path.insert(0, os.path.dirname(os.path.abspath(__file__)))
import wav24


def main():
    if len(sys.argv) != 6:
        raise SystemExit(__doc__)
    rate, x = wav24.read(sys.argv[1])
    tau, amp = wav24.beam(sys.argv[2])
    size, hop = int(sys.argv[4]), int(sys.argv[5])
    frames = x.shape[1]
    taps = min(128, (size - hop + 1 - int(np.ptp(np.floor(-tau * rate)))) // 2 * 2)
    delay = -tau * rate
    first = int(np.floor(delay).min()) - taps // 2 + 1
    h = np.zeros((len(tau), size))
    for m, d in enumerate(delay):
        whole = int(np.floor(d))
        u = np.arange(taps) - (taps // 2 - 1) - (d - whole)
        at = whole - taps // 2 + 1 - first
        h[m, at : at + taps] = amp[m] * np.sinc(u) * np.i0(13 * np.sqrt(np.maximum(0, 1 - (u / (taps / 2)) ** 2))) / np.i0(13)
    w = scipy.fft.rfft(h)
    before = size - hop + first
    padded = np.pad(x, ((0, 0), (before, size)))
    y = np.zeros(frames + hop)
    for at in range(0, frames, hop):
        z = scipy.fft.rfft(padded[:, at : at + size], axis=1)
        block = scipy.fft.irfft(np.sum(z * w, axis=0), size)
        y[at : at + hop] = block[size - hop :]
    wav24.write(sys.argv[3], rate, y[:frames])


main()
