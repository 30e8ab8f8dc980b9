"""Replays of the corpus: by whom, how fast, and whether the masses are the right ones.

A replay command is a line in which {corpus} is the database of corpus.py,
{tsv} the same lines as text, {out} a file for the masses taken, one
'port<TAB>micrograms' a line in their order. If it writes to {out}, the masses
are compared with the placements, one by one and port by port. The seconds are
those of the whole process.
"""

import os
import shlex
import sqlite3
import subprocess
import sys
import time

import corpus as making
import lines
import machine
import match
import sitting

_SCRIPT = f"{shlex.quote(sys.executable)} {shlex.quote(os.path.join(sitting.HERE, 'scripted.py'))}"
SCRIPTED = _SCRIPT + " --replay {corpus} --out {out}"
SCRIPTED_ARRAYS = _SCRIPT + " --replay {corpus} --out {out} --vectorised"


class Trouble(Exception):
    """A replay that did not work."""


def corpus(count):
    """Path of the corpus of so many lines; made if it is not there."""
    path = os.path.join(sitting.WORK, f"corpus-{count}.sqlite")
    os.makedirs(sitting.WORK, exist_ok=True)
    if not os.path.exists(path):
        making.write(path + ".new", count, path + ".tsv")
        os.rename(path + ".new", path)
    return path


def expected(path):
    """Cells of each port in their order, and the number of lines."""
    db = sqlite3.connect(f"file:{path}?mode=ro", uri=True)
    ports = {}
    for port, cell in db.execute("SELECT port, cell FROM plateau ORDER BY no"):
        ports.setdefault(port, []).append(cell)
    count = db.execute("SELECT max(no) FROM heard").fetchone()[0]
    db.close()
    return ports, count


def compare(path, out):
    """Placements whose mass is not at its place in the replay's masses, plus masses too many."""
    want, _ = expected(path)
    got = {}
    with open(out, encoding="utf-8") as f:
        for row in f:
            port, _, ug = row.rstrip("\n").partition("\t")
            if not ug.lstrip("-").isdigit():
                raise Trouble(f"'{row.strip()[:60]}' in the replay's masses is not 'port<TAB>micrograms'")
            got.setdefault(port, []).append(int(ug))
    wrong = 0
    for port in want.keys() | got.keys():
        cells, masses = want.get(port, []), got.get(port, [])
        near = sum(abs(ug - cell * lines.CELL_UG) <= match.NEAR_UG for cell, ug in zip(cells, masses))
        wrong += max(len(cells), len(masses)) - near
    return wrong


def once(command, path):
    """One replay: seconds, CPU, lines a second, and the masses that are wrong."""
    with sitting.place() as here:
        out = here.file("masses")
        words = [w.format(corpus=path, tsv=path + ".tsv", out=out) for w in shlex.split(command)]
        neighbours, before, begun = machine.Neighbours(), os.times(), time.perf_counter()
        try:
            done = subprocess.run(words, capture_output=True, text=True, check=False)
        except OSError as error:
            raise Trouble(f"{words[0]} cannot be started: {error}; look at --replay-cmd") from error
        seconds, after = time.perf_counter() - begun, os.times()
        if done.returncode:
            raise Trouble(f"`{' '.join(words)}` ended with {done.returncode}: {done.stderr[-500:]}")
        ports, count = expected(path)
        cpu = after.children_user + after.children_system - before.children_user - before.children_system
        checked = "{out}" in command
        return {"lines": count, "placements": sum(map(len, ports.values())), "seconds": round(seconds, 3), "cpu_s": round(cpu, 3),
                "lines_per_s": round(count / seconds), "wrong_masses": compare(path, out) if checked else None,
                "said": done.stdout.strip()[-500:], "neighbours": neighbours.since(cpu)}
