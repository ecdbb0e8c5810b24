#!/usr/bin/env python3
"""A far source that goes round a rig and gives off steady tones, and what a
beam along a path makes of it: double precision, from the definition.

    follow.py make  SCENE.json TAKE.f64      the channels, one after the other
    follow.py check SCENE.json TRACK.f64 SKIP
                                             the largest level of track minus
                                             ideal, dB re the ideal, over all
                                             windows of 10 ms but SKIP at each end

The wave that passes the reference point at time t reaches microphone m at
t + tau_m(t) with tau_m = -(p_m - p_ref).u(t) / c. A beam along a path v(t) takes
from microphone m what it hears at t + tau_m of v(t), and the mean of that is
ideal; along the true path it is the steady tones themselves.

SCENE.json: rate, frames, speed, microphones [[x, y, z]], reference [x, y, z],
turn [azimuth at 0, radians a second], tones [[Hz, amplitude, phase]] and, to
check, knots [[s, x, y, z]], the unit vectors of the path in order of time.
"""
import json
import sys

import numpy as np


def signal(scene, t):
    """The tones at times t, as they pass the reference point."""
    return sum(a * np.sin(2 * np.pi * f * t + p) for f, a, p in scene["tones"])


def late(scene, m, u):
    """tau_m for directions u[i, 3]."""
    return -(u @ (np.array(scene["microphones"][m]) - np.array(scene["reference"]))) / scene["speed"]


def truth(scene, t):
    a = scene["turn"][0] + scene["turn"][1] * t
    return np.stack([np.cos(a), np.sin(a), np.zeros_like(a)], axis=-1)


def heard(scene, m, t):
    """What microphone m hears at times t: signal(s) with s + tau_m(s) = t."""
    s = t.copy()
    for _ in range(8):  # each one makes the error some thousand times smaller
        s = t - late(scene, m, truth(scene, s))
    return signal(scene, s)


def followed(scene, t):
    """The path at times t: on great circles between its knots, held at its ends."""
    k = np.array(scene["knots"])
    at, u = k[:, 0], k[:, 1:]
    if len(at) == 1:
        return np.repeat(u, len(t), axis=0)
    t = np.clip(t, at[0], at[-1])
    i = np.clip(np.searchsorted(at, t, side="right") - 1, 0, len(at) - 2)
    f = ((t - at[i]) / (at[i + 1] - at[i]))[:, None]
    a, b = u[i], u[i + 1]
    angle = np.arctan2(np.linalg.norm(np.cross(a, b), axis=1), np.sum(a * b, axis=1))[:, None]
    with np.errstate(invalid="ignore", divide="ignore"):
        v = (np.sin((1 - f) * angle) * a + np.sin(f * angle) * b) / np.sin(angle)
    return np.where(angle < 1e-12, a, v)


def main():
    scene = json.load(open(sys.argv[2]))
    rate, n = scene["rate"], scene["frames"]
    t = np.arange(n) / rate
    mics = range(len(scene["microphones"]))
    if sys.argv[1] == "make":
        np.concatenate([heard(scene, m, t) for m in mics]).tofile(sys.argv[3])
        return
    got = np.fromfile(sys.argv[3])
    assert len(got) == n, (len(got), n)
    v = followed(scene, t)
    ideal = np.mean([heard(scene, m, t + late(scene, m, v)) for m in mics], axis=0)
    size, skip = rate // 100, int(sys.argv[4])
    windows = [slice(k * size, (k + 1) * size) for k in range(skip, n // size - skip)]
    level = [10 * np.log10(np.sum((got[w] - ideal[w]) ** 2) / np.sum(ideal[w] ** 2)) for w in windows]
    lost = 10 * np.log10(np.mean(ideal**2) / np.mean(signal(scene, t) ** 2))
    print("%.2f %d %.4f" % (max(level), len(windows), lost))


if __name__ == "__main__":
    main()
