"""The program to compare with: what an engineer would script for one laboratory.

Reads every port of a folder with pyserial-asyncio; logs every line to SQLite
(WAL, synchronous=FULL) in groups; takes a mass when eight lines marked steady
agree within 2 mg; publishes masses, drops and limits with QoS 1 after their
group is on disk; computes a liquid limit from each three trials (tare, wet and
dry mass of one container, and the drops counted before them) on one balance.

`--replay DB` sends the lines of a corpus through the same rules instead;
`--vectorised` does it with numpy arrays, as one would for a batch.
"""

import argparse
import asyncio
import json
import math
import os
import signal
import socket
import sqlite3
import sys
import time
from collections import deque

import numpy as np

READINGS = 8
SPAN_G = 0.002
LOAD_FROM_G = 0.5
CHANGE_FROM_G = 0.05

TABLES = """
PRAGMA journal_mode=WAL;
PRAGMA synchronous=FULL;
CREATE TABLE IF NOT EXISTS heard(no INTEGER PRIMARY KEY, at_ns INTEGER, port TEXT, line BLOB);
CREATE TABLE IF NOT EXISTS mass(no INTEGER PRIMARY KEY, at_ns INTEGER, port TEXT, mass_g REAL, drops INTEGER);
CREATE TABLE IF NOT EXISTS liquid_limit(no INTEGER PRIMARY KEY, at_ns INTEGER, port TEXT, percent REAL, slope REAL);
"""
PUT_HEARD = "INSERT INTO heard(at_ns, port, line) VALUES(?, ?, ?)"
PUT_MASS = "INSERT INTO mass(at_ns, port, mass_g, drops) VALUES(?, ?, ?, ?)"
PUT_LIMIT = "INSERT INTO liquid_limit(at_ns, port, percent, slope) VALUES(?, ?, ?, ?)"


def liquid_limit(trials):
    """Water content at 25 drops on the least-squares line over log10(drops), and its slope."""
    drops = np.log10([t[0] for t in trials])
    if np.ptp(drops) == 0:
        return None
    slope, intercept = np.polyfit(drops, [t[1] for t in trials], 1)
    return float(intercept + slope * math.log10(25)), float(slope)


class Trials:
    """Three masses make a trial, three trials a limit."""

    def __init__(self):
        self.masses, self.trials, self.drops = [], [], 0

    def add(self, mass, drops):
        if not self.masses:
            self.drops = drops
        self.masses.append(mass)
        if len(self.masses) < 3:
            return None
        (tare, wet, dry), self.masses = self.masses, []
        if dry > tare and self.drops > 0:
            self.trials.append((self.drops, 100 * (wet - dry) / (dry - tare)))
        if len(self.trials) < 3:
            return None
        trials, self.trials = self.trials, []
        return liquid_limit(trials)


class Balance:
    """Takes one mass of each placement."""

    def __init__(self):
        self.run, self.taken, self.trials = deque(maxlen=READINGS), None, Trials()

    def hear(self, mass, steady):
        if self.taken is not None and abs(mass - self.taken) > CHANGE_FROM_G:
            self.taken = None
        run = self.run
        if not steady:
            run.clear()
            return None
        run.append(mass)
        if self.taken is not None or len(run) < READINGS or mass < LOAD_FROM_G or max(run) - min(run) > SPAN_G:
            return None
        self.taken = mass
        return mass


class Laboratory:
    """Lines in, what happened out: ('drop', n), ('mass', g, limit or None), or nothing."""

    def __init__(self):
        self.balances, self.drops = {}, 0

    def hear(self, port, line):
        if len(line) == 16 and line[11:15] == b" g  ":
            try:
                mass = float(line[1:11])
            except ValueError:
                return None
            if line[0] == 45:
                mass = -mass
            balance = self.balances.get(port)
            if balance is None:
                balance = self.balances[port] = Balance()
            taken = balance.hear(mass, line[15] == 83)
            return None if taken is None else ("mass", taken, balance.trials.add(taken, self.drops))
        if line.startswith(b"DROP "):
            try:
                self.drops = int(line[5:])
            except ValueError:
                return None
            return "drop", self.drops
        return None


class Service:
    """Gathers what is heard and, at every turn, stores it and then tells of it."""

    def __init__(self, db, broker, topic):
        import paho.mqtt.client as mqtt

        self.lab, self.topic = Laboratory(), topic
        self.db = sqlite3.connect(db, isolation_level=None)
        self.db.executescript(TABLES)
        self.client = mqtt.Client(mqtt.CallbackAPIVersion.VERSION2)
        self.client.on_socket_open = lambda _c, _d, s: s.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        self.client.max_inflight_messages_set(1000)
        host, port = broker.rsplit(":", 1)
        self.client.connect(host, int(port))
        self.client.loop_start()
        self.heard, self.masses, self.limits, self.messages = [], [], [], []

    def hear(self, port, line):
        at = time.time_ns()
        self.heard.append((at, port, line))
        event = self.lab.hear(port, line)
        if event is None:
            return
        if event[0] == "drop":
            self.messages.append((f"{self.topic}/{port}/drop", {"at_ns": at, "drops": event[1]}))
            return
        _, mass, limit = event
        self.masses.append((at, port, mass, self.lab.drops))
        self.messages.append((f"{self.topic}/{port}/mass", {"at_ns": at, "mass_g": mass}))
        if limit:
            self.limits.append((at, port, *limit))
            self.messages.append((f"{self.topic}/{port}/liquid-limit", {"at_ns": at, "percent": limit[0], "slope": limit[1]}))

    def store_and_tell(self):
        if not self.heard:
            return
        db = self.db
        db.execute("BEGIN")
        db.executemany(PUT_HEARD, self.heard)
        if self.masses:
            db.executemany(PUT_MASS, self.masses)
        if self.limits:
            db.executemany(PUT_LIMIT, self.limits)
        db.execute("COMMIT")
        self.heard, self.masses, self.limits = [], [], []
        messages, self.messages = self.messages, []
        for topic, payload in messages:
            self.client.publish(topic, json.dumps(payload), qos=1)


class PortReader(asyncio.Protocol):
    """Cuts the bytes of one port into lines."""

    def __init__(self, service, name):
        self.hear, self.name, self.rest = service.hear, name, b""

    def data_received(self, data):
        *whole, self.rest = (self.rest + data).split(b"\n")
        for line in whole:
            self.hear(self.name, line.rstrip(b"\r"))


async def serve(a):
    import serial_asyncio

    service, loop, over = Service(a.db, a.mqtt, a.topic), asyncio.get_running_loop(), asyncio.Event()
    for s in (signal.SIGTERM, signal.SIGINT):
        loop.add_signal_handler(s, over.set)
    for name in sorted(os.listdir(a.ports)):
        path = os.path.join(a.ports, name)
        await serial_asyncio.create_serial_connection(loop, lambda name=name: PortReader(service, name), path, baudrate=9600)

    async def turns():
        while True:
            await asyncio.sleep(a.group_ms / 1000)
            service.store_and_tell()

    turning = asyncio.create_task(turns())
    over_first = asyncio.create_task(over.wait())
    # A turn that fails ends the service: going on without a record would be a lie.
    await asyncio.wait({turning, over_first}, return_when=asyncio.FIRST_COMPLETED)
    if turning.done():
        turning.result()
    turning.cancel()
    service.store_and_tell()
    service.client.loop_stop()
    service.client.disconnect()


def replay(path):
    """Masses (port, g) and limits of a corpus, one line after the other."""
    lab, masses, limits, count = Laboratory(), [], 0, 0
    db = sqlite3.connect(f"file:{path}?mode=ro", uri=True)
    hear = lab.hear
    for port, line in db.execute("SELECT port, line FROM heard ORDER BY no"):
        count += 1
        event = hear(port, line)
        if event and event[0] == "mass":
            masses.append((port, event[1]))
            limits += event[2] is not None
    return count, masses, limits


def main():
    a = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    a.add_argument("--ports")
    a.add_argument("--db")
    a.add_argument("--mqtt")
    a.add_argument("--topic", default="scripted")
    a.add_argument("--group-ms", type=float, default=50)
    a.add_argument("--replay", metavar="DB")
    a.add_argument("--vectorised", action="store_true")
    a.add_argument("--out", help="masses of a replay, one 'port<TAB>micrograms' a line")
    a = a.parse_args()
    if not a.replay:
        if not (a.ports and a.db and a.mqtt):
            sys.exit("scripted: --ports, --db and --mqtt are needed, or --replay")
        asyncio.run(serve(a))
        return
    begun = time.perf_counter()
    if a.vectorised:
        import scripted_arrays

        count, masses, limits = scripted_arrays.replay(a.replay)
    else:
        count, masses, limits = replay(a.replay)
    if a.out:
        with open(a.out, "w", encoding="ascii") as out:
            out.writelines(f"{port}\t{round(mass * 1e6)}\n" for port, mass in masses)
    print(json.dumps({"lines": count, "masses": len(masses), "limits": limits, "seconds": round(time.perf_counter() - begun, 3)}))


if __name__ == "__main__":
    main()
