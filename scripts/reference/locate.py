#!/usr/bin/env python3
"""Directions over time by the method of alidade locate, as one writes it with
numpy: spectra of half-overlapped frames, their stationary floor by minimum
statistics, cross-spectra of all pairs averaged over windows, of all frames
alike and of those that rise above floor and reverberation, steered response
with phase transform over the same grid (directions and curvatures), the highest
point refined by maximum likelihood, its sound taken out, refined once more,
and the rest searched. One source, on a line of microphones along x; no groups
of lines, no tracks.

    locate.py TAKE.wav MICS.txt SPEED FROM_HZ TO_HZ WINDOW_S HOP_S

MICS.txt: x of each channel, metres. FROM_HZ to HOP_S are those that
alidade locate --json says it used. It prints a line a window: start, end,
azimuth in degrees, standard error, height of the peak, height of the rest, the
least agreement of a microphone; and last, all of them together: azimuth, standard error, number of windows.
"""

import copy
import os
import sys

import numpy as np
import scipy.fft

sys.path.insert(0, os.path.dirname(os.path.abspath(__file__)))
import wav24


def leaked(sums):
    """Lines that hold no more than four times the side lobes of stronger ones."""
    power = sums.auto.sum(axis=0)
    power = np.where(sums.weight > 0, power / np.maximum(sums.weight, 1e-300), 0)
    side = np.zeros(len(power))
    for d in range(3, min(161, len(power))):
        x = d - 0.5
        leak = (1 / (np.pi * x * (x * x - 1))) ** 2 * 10**0.142
        side[d:] = np.maximum(side[d:], power[:-d] * leak)
        side[:-d] = np.maximum(side[:-d], power[d:] * leak)
    return power < 4 * side


def smooth(x, half):
    """The mean over up to half entries to each side, along the last axis."""
    c = np.cumsum(np.concatenate([np.zeros(x.shape[:-1] + (1,)), x], axis=-1), axis=-1)
    n = x.shape[-1]
    low, high = np.maximum(np.arange(n) - half, 0), np.minimum(np.arange(n) + half + 1, n)
    return (c[..., high] - c[..., low]) / (high - low)


class Floor:
    """The stationary power of every line, by minimum statistics."""

    def __init__(self, bins, step):
        self.part = max(2, int(round(1.6 / step / 8)))
        self.minima = np.full((8, bins), np.inf)
        self.power, self.frames = np.zeros(bins), 0
        span = self.part * 8
        m = np.interp(span, [1, 2, 5, 8, 10, 15, 20, 30, 40, 60, 80, 120, 140, 160],
                      [0, 0.26, 0.48, 0.58, 0.61, 0.668, 0.705, 0.762, 0.8, 0.841, 0.865, 0.89, 0.9, 0.91])
        freedom = 2 * 1.8 / 0.2 / (1 + 1.6 / 36)
        self.bias = 1 + (span - 1) * 2 / ((freedom - 2 * m) / (1 - m))

    def update(self, power):
        alpha = min(0.8, 1 - 1 / (self.frames + 1))
        row = self.minima[self.frames // self.part % 8]
        if self.frames % self.part == 0:
            row[:] = np.inf
        self.frames += 1
        self.power = alpha * self.power + (1 - alpha) * power
        np.minimum(row, self.power, out=row)
        span = self.part * 8
        full = min(1, np.log(self.frames) / np.log(span))
        return self.minima.min(axis=0) * (1 + (self.bias - 1) * full)


class Sums:
    """Auto- and cross-spectra added up over frames z[m, frame, bin]."""

    def __init__(self, z, i, j, w):
        v = z * w
        self.cross = np.stack([np.sum(v[a] * np.conj(z[b]), axis=0) for a, b in zip(i, j)])
        self.auto = np.sum((v * np.conj(z)).real, axis=1)
        self.weight, self.square = w.sum(axis=0), (w**2).sum(axis=0)

    def plus(self, other):
        for name in ("cross", "auto", "weight", "square"):
            setattr(self, name, getattr(self, name) + getattr(other, name))
        return self


def added(sums):
    total = copy.copy(sums[0])
    for s in sums[1:]:
        total.plus(s)
    return total


class Finder:
    def __init__(self, mics, rate, speed, low, high, window, hop):
        self.rate, self.speed, self.mics = rate, speed, mics - mics.mean()
        extent, spacing = np.ptp(mics), np.diff(np.sort(mics)).min()
        self.size = 1 << int(round(np.log2(0.04 * rate)))
        while self.size < 8 * extent / speed * rate:
            self.size *= 2
        self.step = self.size // 2
        self.section = int(round(hop * rate / self.step))
        self.sections = int(round(window * rate / self.step / self.section))
        df = rate / self.size
        self.first = max(1, int(np.ceil(low / df - 1e-9)))
        self.last = min(self.size // 2, int(np.floor(high / df + 1e-9)) + 1)
        self.omega = 2 * np.pi * df * np.arange(self.first, self.last)
        self.i, self.j = np.triu_indices(len(mics), 1)
        self.window = 0.5 - 0.5 * np.cos(2 * np.pi * np.arange(self.size) / self.size)
        # The grid: cosines a fifth of the shortest wavelength over the length
        # apart, and curvatures.
        self.dk = 2 * speed / high / extent**2
        most = 1 / max(0.6 * extent, 0.1)
        near = most > 2 * self.dk and extent > 0.25 and len(mics) >= 4
        kappa = np.concatenate([[0], np.arange(self.dk, most, self.dk)[:31]]) if near else np.zeros(1)
        n = max(90, int(np.ceil(2 / (0.2 * speed / high / extent))))
        self.kappa, self.y = [a.ravel() for a in np.meshgrid(kappa, -1 + 2 * np.arange(n + 1) / n, indexing="ij")]
        self.near = near
        # Lags of the pairs of the grid, at twelve points a period of the top.
        places = min(64 // len(mics), len(mics)) or 1
        half = (len(mics) - 1) // 2
        if len(self.i) <= 64:
            chosen = np.arange(len(self.i))
        else:
            apart = sorted({1 + k * (half - 1) // max(1, places - 1) for k in range(places)})
            index = {(a, b): p for p, (a, b) in enumerate(zip(self.i, self.j))}
            chosen = np.array([index[min(m, (m + s) % len(mics)), max(m, (m + s) % len(mics))] for s in apart for m in range(len(mics))])
        self.chosen = chosen
        self.long = self.size
        while rate * self.long / self.size < 12 * high:
            self.long *= 2
        while self.long // 2 >= 2 * self.last and rate * self.long / 2 / self.size >= 12 * high:
            self.long //= 2
        tau = self.delays(self.y, self.kappa)
        fine = rate * self.long / self.size
        self.lag = np.rint((tau[self.i[chosen]] - tau[self.j[chosen]]) * fine).astype(int)
        self.radius = min(max(0.7 * speed / (0.5 * (low + high)) / extent, 0.12), 0.5)
        d = np.abs(self.mics[self.i] - self.mics[self.j])[:, None] * self.omega / speed
        self.gamma = np.sinc(d / np.pi)  # of diffuse sound

    def delays(self, y, kappa):
        """Arrival at each microphone against the centre, seconds: [m, ...]."""
        p = self.mics.reshape((-1,) + (1,) * np.ndim(y))
        d = np.sqrt(np.maximum(0, 1 - 2 * kappa * p * y + kappa**2 * p**2))
        return (kappa * p**2 - 2 * p * y) / ((1 + d) * self.speed)

    def search(self, x):
        z = np.zeros((len(self.chosen), self.long // 2 + 1), complex)
        z[:, self.first : self.last] = x[self.chosen]
        r = scipy.fft.irfft(z, self.long, axis=1) * (self.long / 2)
        return np.sum(np.take_along_axis(r, self.lag % self.long, axis=1), axis=0)

    def spectra(self, x):
        frames = np.lib.stride_tricks.sliding_window_view(x, self.size, axis=1)[:, :: self.step]
        z = scipy.fft.rfft(frames * self.window, axis=2)[:, :, self.first : self.last]
        return z / np.sqrt(0.375 * self.size)

    def look(self, sums, noise):
        """One window: place, information, heights of peak and rest, and how
        well each microphone agrees."""
        M = len(self.mics)
        scale = 1 / np.sqrt(np.maximum(smooth(sums.auto, 2), 1e-300))
        cross = sums.cross if noise is None else sums.cross - sums.weight * noise
        g = cross * scale[self.i] * scale[self.j]
        self.own = np.mean(sums.auto * scale**2, axis=0)
        self.level = smooth(self.own, 6)
        self.n = np.maximum(1, sums.weight**2 / np.maximum(sums.square, 1e-300) / 1.056)
        field = np.mean(self.gamma * g.real, axis=0) / np.maximum(np.mean(self.gamma**2, axis=0), 1e-9)
        rest = g - field * self.gamma
        coherence = np.clip(smooth(np.mean(np.abs(rest) ** 2, axis=0) - 1 / self.n, 4), 0, 1)
        coherence[leaked(sums)] = 0
        phat = coherence / np.maximum(np.abs(g), 1e-300)
        total = coherence.sum() * len(self.chosen)
        value = self.search(rest * phat) / total
        best = int(np.argmax(value))
        peak = value[best]
        y, kappa, w = self.refine(rest, self.y[best], self.kappa[best])
        amp, left = self.apportion(g, y, kappa)
        for _ in range(2):
            before = y
            y, kappa, w = self.refine(left + amp * np.conj(self.turn(y, kappa)), y, kappa)
            amp, left = self.apportion(g, y, kappa)
            if abs(y - before) < 1e-3:
                break
        value = self.search(left * phat) / total
        rest = value[np.abs(self.y - y) >= self.radius].max()
        whole = left + amp * np.conj(self.turn(y, kappa))
        _, bend = self.climb(whole, y, kappa, w)
        # The part of each microphone's coherence that is in phase.
        part = np.sum(amp * coherence * (whole * self.turn(y, kappa)).real / np.maximum(np.abs(whole), 1e-300), axis=1)
        fit = (np.bincount(self.i, part, M) + np.bincount(self.j, part, M)) / ((M - 1) * max(np.sum(amp * coherence), 1e-300))
        return y, kappa, bend, peak, rest, fit

    def refine(self, x, y, kappa):
        M, pairs = len(self.mics), len(self.i)
        for _ in range(3):
            begin = y
            part = np.mean((x * self.turn(y, kappa)).real, axis=0)
            c = np.clip(smooth(part, 6) / self.level, 0, 0.9995)
            c[c <= 1 / np.sqrt(2 * pairs * self.n * 13)] = 0
            w = 2 * self.n * 0.5 * 1.056 * 0.9474 * c / ((1 - c) * (1 - c + M * c))
            for _ in range(6):
                slope, bend = self.climb(x, y, kappa, w)
                step = np.linalg.solve(bend, slope)
                step *= min(1, self.radius / 3 / max(abs(step[0]), 1e-12))
                y = float(np.clip(y + step[0], -1, 1))
                if self.near:
                    kappa = float(np.clip(kappa + step[1], -self.dk, 1 / max(0.6 * np.ptp(self.mics), 0.1)))
                if abs(step[0]) < 2e-5:
                    break
            if abs(y - begin) < 2e-4:
                break
        return y, kappa, w

    def apportion(self, g, y, kappa):
        """The source's part of every line, and what is left without it and
        without diffuse sound: least squares, none negative."""
        turn = self.turn(y, kappa)
        part, across = np.mean((g * turn).real, axis=0), np.mean(self.gamma * turn.real, axis=0)
        a, b, d = smooth(across, 8), smooth(np.mean(self.gamma * g.real, axis=0), 8), smooth(np.mean(self.gamma**2, axis=0), 8)
        f = np.clip((b - a * smooth(part, 8)) / np.maximum(d - a**2, 1e-9), 0, 1)
        amp = np.clip(part - across * f, 0, self.own)
        return amp, g - f * self.gamma - amp * np.conj(turn)

    def turn(self, y, kappa):
        tau = self.delays(y, kappa)
        return np.exp(1j * self.omega * (tau[self.i] - tau[self.j])[:, None])

    def climb(self, x, y, kappa, w):
        h = 1e-4
        jac = [(self.delays(y + h, kappa) - self.delays(y - h, kappa)) / (2 * h)]
        if self.near:
            jac.append((self.delays(y, kappa + h) - self.delays(y, kappa - h)) / (2 * h))
        jac = np.array([j[self.i] - j[self.j] for j in jac])
        z = x * self.turn(y, kappa)
        slope = jac @ (-(z.imag @ (w * self.omega)))
        bend = (jac * (z.real @ (w * self.omega**2))) @ jac.T
        return slope, bend

    def run(self, x):
        windows, kept = [], []
        span, step = self.section * self.step, self.step / self.rate
        floor = Floor(len(self.omega), step)
        late = before = np.zeros(len(self.omega))
        decay = 10 ** (-6 * step / 0.5)
        noise, mean = None, None
        for s in range(((x.shape[1] - self.size) // self.step + 1) // self.section):
            z = self.spectra(x[:, s * span : s * span + (self.section - 1) * self.step + self.size])
            power = np.mean(np.abs(z) ** 2, axis=0)
            weights, quiet = np.zeros_like(power), np.zeros(len(power), bool)
            for t, p in enumerate(smooth(power, 3)):
                low = floor.update(power[t])
                late = decay * np.maximum(late, before)
                before = p
                weights[t] = np.clip(1 - (late + 2 * low) / np.maximum(p, 1e-300), 0, 1)
                quiet[t] = np.mean(10 * np.log10((p + 1e-30) / (low + 1e-30))) < 1.5
            plain = Sums(z, self.i, self.j, np.ones_like(power))
            onset = Sums(z, self.i, self.j, weights)
            if quiet.any():
                own = Sums(z[:, quiet], self.i, self.j, np.ones_like(power[quiet]))
                if noise is not None:
                    for name in ("cross", "auto", "weight", "square"):
                        setattr(noise, name, 0.8 * getattr(noise, name))
                    noise.plus(own)
                else:
                    noise = own
                mean = noise.cross / noise.weight
            kept.append((plain, onset, power.sum(axis=0)))
            if len(kept) < self.sections:
                continue
            kept = kept[-self.sections :]
            above = 10 * np.log10((sum(k[2] for k in kept) / (self.sections * self.section) + 1e-30) / (low + 1e-30))
            active = above.mean() > 3 or np.mean(above > 7) > 0.15
            sums = added([k[1 if active else 0] for k in kept])
            start = ((s - self.sections + 1) * span + self.step / 2) / self.rate
            windows.append((start, start + self.sections * span / self.rate) + self.look(sums, mean if active else None))
        return windows


def main():
    if len(sys.argv) != 8:
        raise SystemExit(__doc__)
    rate, x = wav24.read(sys.argv[1])
    finder = Finder(np.loadtxt(sys.argv[2]), rate, *map(float, sys.argv[3:]))
    info, seen, n = 0, 0, 0
    for start, end, y, kappa, bend, peak, rest, fit in finder.run(x):
        error = np.sqrt(np.linalg.inv(bend)[0, 0])
        print("%.6f %.6f %.4f %.4f %.4f %.4f %.3f" % (start, end, np.degrees(np.arccos(y)), np.degrees(error / np.sqrt(max(1 - y * y, 1e-6))), peak, rest, fit.min()))
        p = np.array([y, kappa])[: len(bend)]
        info, seen, n = info + bend, seen + bend @ p, n + 1
    y = np.linalg.solve(info, seen)[0]
    # Windows overlap: each stretch of sound stands in as many as a window has
    # sections.
    error = np.sqrt(finder.sections * np.linalg.inv(info)[0, 0])
    print("%.5f %.5f %d" % (np.degrees(np.arccos(y)), np.degrees(error / np.sqrt(1 - y * y)), n))


main()
