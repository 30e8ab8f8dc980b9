"""Writes the corpus that replays are measured on: the same million lines every time.

Table `heard` (no, at_ns, port, line) holds the lines without their ends, table
`plateau` (port, cell) the placements in the order their masses are complete.
`--tsv` also writes at_ns, port and line as text, for a program that reads that.
"""

import argparse
import heapq
import itertools
import os
import sqlite3

import lines

BALANCES = 8
RATE = 10.0
EPOCH_NS = 1_700_000_000 * 10**9


def voices(total):
    """Eight calm balances and a counter; together exactly `total` lines."""
    cycles = int(total * 0.98) // (BALANCES * lines.CALM.lines)
    if cycles == 0:
        raise SystemExit(f"corpus: {total} lines are too few; ask for {2 * BALANCES * lines.CALM.lines} at least")
    seconds = cycles * lines.CALM.lines / RATE
    pans = lines.balances(BALANCES, RATE, seconds, lines.CALM, seed=20)
    drops = total - sum(p.count for p in pans)
    cup = lines.Voice("cup-00", drops / seconds, 0.01)
    # Runs of 15 to 35 drops, so that limits have a slope to find.
    numbers = (n for run in itertools.cycle(range(15, 36)) for n in range(1, run + 1))
    for number in itertools.islice(numbers, drops):
        cup.say(b"DROP %d\r\n" % number)
    return [*pans, cup]


def in_order(voice):
    for i in range(voice.count):
        yield voice.due(i), voice.name, voice.line(i).rstrip(b"\r\n")


def write(path, total, tsv=None):
    said = voices(total)
    for suffix in ("", "-wal", "-shm"):
        if os.path.exists(path + suffix):
            os.unlink(path + suffix)
    db = sqlite3.connect(path)
    db.executescript("""
        PRAGMA journal_mode=OFF;
        CREATE TABLE heard(no INTEGER PRIMARY KEY, at_ns INTEGER, port TEXT, line BLOB);
        CREATE TABLE plateau(no INTEGER PRIMARY KEY, port TEXT, cell INTEGER);""")
    rows = ((EPOCH_NS + int(due * 1e9), port, line) for due, port, line in heapq.merge(*map(in_order, said)))
    if tsv:
        rows = list(rows)
        with open(tsv, "w", encoding="ascii") as out:
            out.writelines(f"{at}\t{port}\t{line.decode('ascii')}\n" for at, port, line in rows)
    db.executemany("INSERT INTO heard(at_ns, port, line) VALUES(?, ?, ?)", rows)
    complete = sorted((v.due(at), v.name, cell) for v in said for cell, _, at in v.plateaus)
    db.executemany("INSERT INTO plateau(port, cell) VALUES(?, ?)", [c[1:] for c in complete])
    db.commit()
    db.close()
    return sum(v.count for v in said), len(complete)


def main():
    a = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    a.add_argument("out")
    a.add_argument("--lines", type=int, default=1_000_000)
    a.add_argument("--tsv")
    a = a.parse_args()
    os.makedirs(os.path.dirname(a.out) or ".", exist_ok=True)
    count, plateaus = write(a.out, a.lines, a.tsv)
    print(f"{count} lines, {plateaus} placements")


if __name__ == "__main__":
    main()
