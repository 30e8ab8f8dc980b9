"""The rules of scripted.py over whole arrays, for replaying a corpus at once."""

import sqlite3

import numpy as np

import scripted

UNITS = 10_000  # the lines print tenths of a milligram
# As floats, which numpy multiplies much faster and which are exact here.
PLACES = np.array([10**8, 10**7, 10**6, 10**5, 10**4, 0, 10**3, 10**2, 10, 1], np.float64)


def masses_of(text):
    """Masses in printed units and steadiness of fixed-width lines (n, 16 bytes)."""
    figures = text[:, 1:11]
    digits = np.where(figures < 48, 0, figures - 48)  # spaces and the point are below
    mass = (digits.astype(np.float64) @ PLACES).astype(np.int64)
    return np.where(text[:, 0] == ord("-"), -mass, mass), text[:, 15] == ord("S")


def _over_run(fold, values):
    """`fold` over each READINGS values in a row."""
    n = scripted.READINGS
    out = values[: len(values) - n + 1].copy()
    for shift in range(1, n):
        fold(out, values[shift : len(values) - n + 1 + shift], out=out)
    return out


def taken(mass, steady):
    """Indices of the readings at which a mass is taken, in order."""
    n = scripted.READINGS
    if len(mass) < n:
        return []
    span = _over_run(np.maximum, mass) - _over_run(np.minimum, mass)
    ready = _over_run(np.logical_and, steady) & (span <= round(scripted.SPAN_G * UNITS)) & (mass[n - 1 :] >= round(scripted.LOAD_FROM_G * UNITS))
    ready = np.flatnonzero(ready) + n - 1
    found, at, change = [], 0, round(scripted.CHANGE_FROM_G * UNITS)
    while (k := np.searchsorted(ready, at)) < len(ready):
        index = int(ready[k])
        found.append(index)
        at, block = index + 1, 512
        while at < len(mass):  # until the load has changed
            away = np.abs(mass[at : at + block] - mass[index]) > change
            if away.any():
                at += int(away.argmax())
                break
            at += block
    return found


def replay(path):
    """As scripted.replay: number of lines, masses (port, g) in order, number of limits."""
    db = sqlite3.connect(f"file:{path}?mode=ro", uri=True)
    ports, raw = [], []
    for port, line in db.execute("SELECT port, line FROM heard ORDER BY no"):
        ports.append(port)
        raw.append(line)
    if not raw:
        return 0, [], 0
    text = np.array(raw, "S16").view("u1").reshape(len(raw), 16)
    names = sorted(set(ports))
    which = np.fromiter(map({name: i for i, name in enumerate(names)}.__getitem__, ports), np.int32, len(ports))
    is_drop = text[:, 0] == ord("D")
    at_drop = np.flatnonzero(is_drop)
    numbers = np.array([0] + [int(raw[i][5:]) for i in at_drop], np.int64)
    drops = numbers[np.searchsorted(at_drop, np.arange(len(raw)), "right")]
    events = []
    for p in range(len(names)):
        lines = np.flatnonzero((which == p) & ~is_drop)
        mass, steady = masses_of(text[lines])
        events += [(int(lines[i]), p, int(mass[i])) for i in taken(mass, steady)]
    events.sort()
    trials = [scripted.Trials() for _ in names]
    masses, limits = [], 0
    for line, p, mass in events:
        masses.append((names[p], mass / UNITS))
        limits += trials[p].add(mass / UNITS, int(drops[line])) is not None
    return len(raw), masses, limits
