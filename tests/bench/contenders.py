"""The programs that are measured: how each is started, what its messages mean, how many lines it has stored."""

import json
import os
import re
import shlex
import sqlite3
import sys

HERE = os.path.dirname(os.path.abspath(__file__))
TREE = os.path.dirname(os.path.dirname(HERE))


def _query(path, sql, values=()):
    """One row, or None while there is nothing to ask yet."""
    try:
        db = sqlite3.connect(f"file:{path}?mode=ro", uri=True, timeout=2)
        try:
            return db.execute(sql, values).fetchone()
        finally:
            db.close()
    except sqlite3.OperationalError:
        return None


class Scripted:
    """scripted.py, storing every `group_ms`."""

    def __init__(self, group_ms=50):
        self.group_ms = group_ms
        self.name = "scripted" if group_ms == 50 else f"scripted-{group_ms:g}ms"
        self.topics = ["scripted/#"]

    def missing(self):
        return None

    def prepare(self, place):
        return [sys.executable, os.path.join(HERE, "scripted.py"), "--ports", place.ports, "--db", self._db(place),
                "--mqtt", place.mqtt, "--group-ms", str(self.group_ms)]

    @staticmethod
    def _db(place):
        return os.path.join(place.folder, "scripted.sqlite")

    def stored(self, place, so_far):
        row = _query(self._db(place), "SELECT max(no) FROM heard")
        return (row[0] or 0, None) if row else so_far

    @staticmethod
    def decode(topic, payload):
        _, port, what = topic.split("/")
        if what == "mass":
            return "mass", round(json.loads(payload)["mass_g"] * 1e6)
        if what == "drop":
            return "drop", port, json.loads(payload)["drops"]
        return None


class Tarecup:
    """The service under test."""

    name = "tarecup"
    STATION = "bench"
    ROOT = f"tarecup/v1/{STATION}"

    def __init__(self, program, more=""):
        self.program, self.more = os.path.abspath(program), shlex.split(more)
        self.topics = [f"{self.ROOT}/fact", f"{self.ROOT}/live/#"]

    def missing(self):
        if os.access(self.program, os.X_OK):
            return None
        return f"{self.program} is not there; build it with `cargo build --release`, or name it with --tarecup"

    def prepare(self, place):
        """Writes the settings beforehand: a laboratory does not write them at each start either."""
        config = os.path.join(place.folder, "tarecup.toml")
        with open(config, "w", encoding="utf-8") as out:
            out.write(settings(sorted(os.listdir(place.ports)), place.ports, place.mqtt))
        return [self.program, "run", "--config", config, "--state", self._state(place), *self.more]

    @staticmethod
    def _state(place):
        return os.path.join(place.folder, "state")

    def stored(self, place, so_far):
        """Counts lines only, and only those that came since the last count."""
        count, last = so_far[0], so_far[1] or 0
        ledger = os.path.join(self._state(place), "ledger.sqlite")
        sql = "SELECT count(*) FILTER (WHERE kind IN ('line', 'reject')), max(no) FROM input WHERE no > ?"
        row = _query(ledger, sql, (last,))
        return (count + row[0], row[1] or last) if row else so_far

    @staticmethod
    def decode(topic, payload):
        parts = topic.split("/")
        told = json.loads(payload)
        if parts[-1] == "fact":
            return ("mass", told["fact"]["mass_ug"]) if told["kind"] == "weighed" else None
        if parts[-2] == "live" and "drops" in told:
            return "drop", parts[-1], told["drops"]
        return None


def settings(names, folder, mqtt):
    """The same rule for taking a mass as scripted.py has; a bench for each balance."""
    kinds = {"pan": "balance", "cup": "counter"}
    out = [f'[lab]\nname = "Measurement"\nstation = "{Tarecup.STATION}"\n\n[mqtt]\nurl = "mqtt://{mqtt}"\n']
    benches = [n.replace("pan", "bench") for n in names if n.startswith("pan")] or ["bench-00"]
    out += [f'\n[[bench]]\nname = "{bench}"\n' for bench in benches]
    for name in names:
        kind = kinds[name.split("-")[0]]
        bench = name.replace("pan", "bench") if kind == "balance" else benches[0]
        profile = "signed-steady" if kind == "balance" else "running-total"
        out.append(f'\n[[instrument]]\nname = "{name}"\nkind = "{kind}"\nbench = "{bench}"\n'
                   f'port = {json.dumps(os.path.join(folder, name))}\nprofile = "{profile}"\n')
        if kind == "balance":
            out.append("steady_readings = 8\nsteady_span_g = 0.002\nload_from_g = 0.5\nchange_from_g = 0.05\n")
    return "".join(out)


def named(names, a):
    """Contenders by name: tarecup, scripted, scripted-20ms and the like."""
    found = []
    for name in names.split(","):
        group = re.fullmatch(r"scripted(?:-(\d+)ms)?", name)
        if name == "tarecup":
            found.append(Tarecup(a.tarecup, a.tarecup_args))
        elif group:
            found.append(Scripted(int(group[1] or 50)))
        else:
            sys.exit(f"run: nobody is called '{name}'; say tarecup, scripted or, with another grouping, scripted-20ms")
    for contender in found:
        if why := contender.missing():
            sys.exit(f"run: {why}")
    return found
