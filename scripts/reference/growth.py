#!/usr/bin/env python3
"""What steering costs as takes grow: CPU time and peak memory of the program
against channels, length and angles, and against workers of a batch.

    growth.py DIR       DIR holds the program, alidade; takes are made there

Takes of noise up to a minute; longer ones are sparse files of silence. Read the
last column, the time of a channel and sample against that of the first row that
is marked: it says how the cost grows, whatever the machine.
"""

import os
import resource
import subprocess
import sys
import time

import numpy as np


def header(f, rate, channels, frames):
    size = 3 * channels * frames
    big = size + 36 >= 1 << 32
    f.write(b"RF64" if big else b"RIFF")
    f.write((0xFFFFFFFF if big else 36 + size).to_bytes(4, "little") + b"WAVE")
    if big:
        f.write(b"ds64" + (28).to_bytes(4, "little") + (72 + size).to_bytes(8, "little") + size.to_bytes(8, "little") + frames.to_bytes(8, "little") + bytes(4))
    f.write(b"fmt " + (16).to_bytes(4, "little"))
    for v, n in ((1, 2), (channels, 2), (rate, 4), (3 * rate * channels, 4), (3 * channels, 2), (24, 2)):
        f.write(v.to_bytes(n, "little"))
    f.write(b"data" + (0xFFFFFFFF if big else size).to_bytes(4, "little"))


def take(path, channels, seconds, rate=48000):
    x = np.rint(0.1 * np.random.default_rng(channels).standard_normal((rate, channels)).clip(-4, 4) * 2**23).astype("<i4")
    second = x.view(np.uint8).reshape(-1, 4)[:, :3].tobytes()
    with open(path, "wb") as f:
        header(f, rate, channels, rate * seconds)
        for _ in range(seconds if seconds <= 60 else 1):
            f.write(second)
        f.truncate(f.tell() if seconds <= 60 else f.tell() + (seconds - 1) * len(second))


def run(*args, env=None):
    """CPU seconds, wall seconds and peak memory in MiB of one run."""
    begun = time.monotonic()
    p = subprocess.Popen(args, stdout=subprocess.DEVNULL, stderr=subprocess.PIPE, env={**os.environ, **(env or {})})
    err = p.stderr.read()
    _, status, use = os.wait4(p.pid, 0)
    if status != 0:
        raise SystemExit(f"{' '.join(args)}: {err.decode()}")
    return use.ru_utime + use.ru_stime, time.monotonic() - begun, use.ru_maxrss / 1024


def rig(path, channels):
    with open(path, "w") as f:
        f.write(f"rig: line\nline: {{count: {channels}, spacing_mm: 20}}\n")


def table(title, rows, unit):
    print(f"\n{title}")
    print(f"{unit:>10} {'CPU s':>9} {'peak MiB':>9} {'of the marked':>14}")
    first = None
    for marked, label, cpu, amount, peak in rows:
        each = cpu / amount
        if marked and first is None:
            first = each
        print(f"{label:>10} {cpu:9.3f} {peak:9.0f} {each / first if first else float('nan'):13.2f}{'*' if marked else ' '}", flush=True)


def main():
    if len(sys.argv) != 2:
        raise SystemExit(__doc__)
    d = sys.argv[1]
    program = os.path.join(d, "alidade")
    path, rigs, out = d + "/grow.wav", d + "/grow.yaml", d + "/out.wav"
    track = ["--out", out, "--overwrite", "--quiet", "--no-measure", "--reports", "none", "--no-verify"]

    def steered(channels, seconds):
        take(path, channels, seconds)
        rig(rigs, channels)
        best = min((run(program, "steer", path, "--rig", rigs, "--toward", "60", *track) for _ in range(3 if seconds <= 60 else 1)))
        os.remove(path)
        return best

    def channels():
        for n in (2, 4, 8, 16, 32, 64, 128, 256):
            cpu, _, peak = steered(n, 30)
            yield 4 <= n <= 128, str(n), cpu, n * 30, peak

    def lengths():
        for s in (1, 10, 60, 600, 3600):
            cpu, _, peak = steered(16, s)
            yield s >= 10, str(s), cpu, s, peak

    def angles():
        take(path, 8, 10)
        rig(rigs, 8)
        for n in (1, 10, 100, 1000):
            step = 180 / max(1, n - 1)
            to = "180" if n > 1 else "0"
            cpu, _, peak = run(program, "scan", path, "--rig", rigs, "--from", "0", "--to", to, "--step", f"{step:.9g}", "--json")
            yield n >= 10, str(n), cpu, n, peak

    def workers():
        rig(rigs, 16)
        os.makedirs(d + "/takes", exist_ok=True)
        for k in range(8):
            take(f"{d}/takes/t{k}.wav", 16, 20)
        for n in (1, 2):
            folder = f"{d}/out{n}"
            job = f"{d}/job{n}.yaml"
            with open(job, "w") as f:
                f.write(f'rig: grow.yaml\ntakes: ["takes/*.wav"]\nsteer: {{toward: "60", no_measure: true}}\noutputs: {{folder: {folder}, reports: [json]}}\n')
            cpu, wall, peak = run(program, "batch", job, "--workers", str(n), "--quiet", env={"GOMAXPROCS": str(n)})
            yield True, f"{n}", wall, 1, peak

    table("30 s, against channels, a channel-second", channels(), "channels")
    table("16 channels, against length, a second", lengths(), "seconds")
    table("scan of 10 s of 8 channels, an angle", angles(), "angles")
    table("batch of 8 takes: wall-clock of all, an idle machine only", workers(), "workers")
    print(f"\npeak of this script's own children: {resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss / 1024:.0f} MiB (at most 200)")


main()
