"""The smallest WAV reading and writing that the Python programs need."""

import numpy as np


def read(path):
    """Returns rate, samples[channel][frame] in float64: PCM 24 bit or float 32."""
    data = open(path, "rb").read()
    if data[:4] != b"RIFF" or data[8:12] != b"WAVE":
        raise SystemExit(path + ": no RIFF/WAVE file")
    at, tag, channels, rate, bits = 12, 0, 0, 0, 0
    while at + 8 <= len(data):
        size = int.from_bytes(data[at + 4 : at + 8], "little")
        body = data[at + 8 : at + 8 + size]
        if data[at : at + 4] == b"fmt ":
            tag, channels = np.frombuffer(body[:4], "<u2")
            rate = int.from_bytes(body[4:8], "little")
            bits = int.from_bytes(body[14:16], "little")
            if tag == 0xFFFE:
                tag = int.from_bytes(body[24:26], "little")
        if data[at : at + 4] == b"data":
            channels = int(channels)
            if (tag, bits) == (3, 32):
                x = np.frombuffer(body, "<f4").astype(np.float64)
            elif (tag, bits) == (1, 24):
                b = np.frombuffer(body, np.uint8).reshape(-1, 3)
                x = np.zeros((len(b), 4), np.uint8)
                x[:, 1:] = b
                x = x.view("<i4").ravel() / 2.0**31
            else:
                raise SystemExit("%s: format %d of %d bits" % (path, tag, bits))
            return rate, x.reshape(-1, channels).T
        at += 8 + size + size % 2
    raise SystemExit(path + ": no data chunk")


def write(path, rate, y):
    """Writes one channel as PCM 24 bit."""
    v = np.clip(np.rint(y * 2**23), -(2**23), 2**23 - 1).astype("<i4")
    body = v.view(np.uint8).reshape(-1, 4)[:, :3].tobytes()
    head = b"RIFF" + (36 + len(body)).to_bytes(4, "little") + b"WAVEfmt " + (16).to_bytes(4, "little")
    for value, size in ((1, 2), (1, 2), (rate, 4), (3 * rate, 4), (3, 2), (24, 2)):
        head += value.to_bytes(size, "little")
    open(path, "wb").write(head + b"data" + len(body).to_bytes(4, "little") + body)


def beam(path):
    """Returns delays in seconds and amplitudes, one a channel."""
    table = np.atleast_2d(np.loadtxt(path))
    return table[:, 0], table[:, 1]
