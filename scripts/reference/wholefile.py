#!/usr/bin/env python3
"""Delay-and-sum by one transform of the whole file, in double precision: the
accuracy witness of every method, and the slowest speed reference.

    wholefile.py TAKE.wav BEAM.txt OUT.wav       writes the beam
    wholefile.py TAKE.wav BEAM.txt --check Y.wav prints the error of Y, dB

BEAM.txt holds a line a channel: the delay in seconds by which the wave arrives
later than at the reference point, and the amplitude. The error is the power of
the difference over that of the beam; the edges, where the take is cut off, are
left out.
"""

import os
import sys

import numpy as np

sys.path.insert(0, os.path.dirname(os.path.abspath(__file__)))
import wav24

EDGE = 4096  # frames at both ends


def beam(rate, x, tau, amp):
    n = 1 << (x.shape[1] + 2 * EDGE - 1).bit_length()
    f = np.fft.rfftfreq(n, 1 / rate)
    total = np.zeros(len(f), complex)
    for m in range(x.shape[0]):
        total += amp[m] * np.fft.rfft(x[m], n) * np.exp(2j * np.pi * f * tau[m])
    return np.fft.irfft(total, n)[: x.shape[1]]


def main():
    if len(sys.argv) < 4:
        raise SystemExit(__doc__)
    rate, x = wav24.read(sys.argv[1])
    y = beam(rate, x, *wav24.beam(sys.argv[2]))
    if sys.argv[3] != "--check":
        wav24.write(sys.argv[3], rate, y)
        return
    _, got = wav24.read(sys.argv[4])
    if got.shape != (1, len(y)):
        raise SystemExit("%s: %d channels, %d frames, want 1 and %d" % ((sys.argv[4],) + got.shape + (len(y),)))
    inner = slice(EDGE, len(y) - EDGE)
    print("%.2f" % (10 * np.log10(np.sum((got[0] - y)[inner] ** 2) / np.sum(y[inner] ** 2))))


main()
