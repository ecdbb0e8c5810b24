#!/usr/bin/env python3
"""Delay-and-sum by np.convolve with a windowed sinc of 64 taps a channel.

    fir.py TAKE.wav BEAM.txt OUT.wav
"""

import os
import sys

import numpy as np

sys.path.insert(0, os.path.dirname(os.path.abspath(__file__)))
import wav24

TAPS = 64


def main():
    if len(sys.argv) != 4:
        raise SystemExit(__doc__)
    rate, x = wav24.read(sys.argv[1])
    tau, amp = wav24.beam(sys.argv[2])
    frames = x.shape[1]
    y = np.zeros(frames)
    for m in range(x.shape[0]):
        d = -tau[m] * rate
        whole = int(np.floor(d))
        u = np.arange(TAPS) - (TAPS // 2 - 1) - (d - whole)
        h = amp[m] * np.sinc(u) * np.i0(13 * np.sqrt(np.maximum(0, 1 - (u / (TAPS / 2)) ** 2))) / np.i0(13)
        full = np.convolve(x[m], h)
        start = whole - TAPS // 2 + 1  # delay of tap 0
        for_frame = np.arange(frames) - start
        inside = (for_frame >= 0) & (for_frame < len(full))
        y[inside] += full[for_frame[inside]]
    wav24.write(sys.argv[3], rate, y)


main()
