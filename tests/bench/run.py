"""Measures tarecup beside the program an engineer would script, in one sitting.

  latency   line written → message received; CPU, memory, nothing missing
  capacity  the highest rate at which nothing is lost and all is stored within a second
  cold      start of the process → first published drop
  idle      CPU and wake-ups while the instruments are silent
  commit    what one commit costs here without any program (SQLite, WAL, FULL)
  replay    a corpus of a million lines through the rules
  all       all of these, the contenders taking turns, and one table

Figures of one sitting compare; those of two sittings or machines do not.
Every result is also a JSON line in tests/.work/bench/.
"""

import argparse
import importlib.util
import json
import os
import sqlite3
import sys
import time

HERE = os.path.dirname(os.path.abspath(__file__))
VENV = os.path.join(os.path.dirname(HERE), ".venv", "bin", "python")
NEEDED = {"numpy": "numpy", "paho": "paho-mqtt", "serial": "pyserial", "serial_asyncio": "pyserial-asyncio"}


def need_modules():
    """Goes on in tests/.venv if this Python lacks something; says what to do if that lacks it too."""
    lacking = [package for module, package in NEEDED.items() if importlib.util.find_spec(module) is None]
    if not lacking:
        return
    if os.access(VENV, os.X_OK) and os.environ.get("TARECUP_BENCH_VENV") != "tried":
        os.environ["TARECUP_BENCH_VENV"] = "tried"
        os.execv(VENV, [VENV, *sys.argv])
    sys.exit(f"run: Python lacks {', '.join(lacking)}. Make tests/.venv with tests/setup-python, then\n"
             f"  tests/.venv/bin/python -m pip install -r tests/bench/requirements.txt")


need_modules()

import contenders as who  # noqa: E402
import machine  # noqa: E402
import match  # noqa: E402
import replaying  # noqa: E402
import sitting  # noqa: E402
import table  # noqa: E402

# A feeder that is later than this did not make the load it says it made.
FEEDER_LATE_MS = 100


class Log:
    """Results as JSON lines, and in mind for the table."""

    def __init__(self):
        os.makedirs(sitting.WORK, exist_ok=True)
        self.path = os.path.join(sitting.WORK, time.strftime("%Y%m%d-%H%M%S") + ".jsonl")
        self.results = []

    def add(self, what, name, result):
        result = {"what": what, "who": name, "at": time.strftime("%Y-%m-%dT%H:%M:%S%z"), **result}
        self.results.append(result)
        with open(self.path, "a", encoding="utf-8") as out:
            out.write(json.dumps(result) + "\n")
        print(table.line(result), flush=True)
        return result


def numbers(text, kind=float):
    return [kind(n) for n in text.split(",")]


def feed_words(balances, rate, seconds, cycle, tick_ms=0):
    return ["--balances", balances, "--rate", rate, "--seconds", seconds, "--cycle", cycle, "--tick-ms", tick_ms]


def latency(a, log):
    for balances in numbers(a.k, int):
        for rate in numbers(a.r):
            for it in a.contenders:
                result = sitting.traffic(it, feed_words(balances, rate, a.seconds, "2,1,3,10,2"), a.settle, a.keep)
                result["complete"] = match.complete(result) and result["stored"] >= result["sent"]
                log.add("latency", it.name, {"balances": balances, "rate": rate, **result})


def verdict(result):
    """'pass', 'fail: why', or 'unknown: why' when the load itself was not made."""
    if result["refused"]:
        return f"fail: {result['refused']} lines found no room in a port"
    if (result["feeder_late_ms"] or {"p99": 0})["p99"] > FEEDER_LATE_MS:
        return "unknown: the feeder could not make that load"
    if result["drain_s"] is None or result["stored"] < result["sent"]:
        return f"fail: {result['sent'] - result['stored']} lines not stored"
    if result["drain_s"] > 1:
        return f"fail: stored {result['drain_s']} s after the last line"
    if not match.complete(result):
        return f"fail: {result['missing_masses']} masses and {result['missing_drops']} drops missing, {result['doubled']} doubled"
    if result["all_ms"] is None or result["all_ms"]["p99"] > 1000:
        return "fail: messages later than a second"
    return "pass"


def capacity(a, log):
    for it in a.contenders:
        log.add("capacity", it.name, {"balances": a.balances, **search(a, log, it)})


def search(a, log, it):
    """Doubles the rate until it fails, halves the gap, then asks that a longer run holds too."""

    def holds(total, seconds):
        feed = feed_words(a.balances, total / a.balances, max(seconds, 220 * a.balances / total), "20,5,35,130,10", tick_ms=2)
        result = sitting.traffic(it, feed, a.settle, a.keep)
        result["verdict"] = verdict(result)
        log.add("load", it.name, {"lines_per_s": round(total), **result})
        return result["verdict"]

    low, high, total, limit = 0, None, a.start, "not reached"
    while total <= a.most:
        said = holds(total, a.step_seconds)
        if said != "pass":
            high, limit = total, said
            break
        low, total = total, total * 2
    for _ in range(a.bisect if high else 0):
        middle = (low + high) / 2
        said = holds(middle, a.step_seconds)
        if said == "pass":
            low = middle
        else:
            high, limit = middle, said
    # A rate counts only when a longer run holds it.
    while low and holds(low, a.confirm_seconds) != "pass":
        low = low * 0.9 if low > a.start / 8 else 0
    return {"sustained_lines_per_s": round(low), "failed_at": high and round(high), "limit": limit}


def cold(a, log):
    times = {it.name: [] for it in a.contenders}
    for _ in range(a.repeat):
        for it in a.contenders:
            times[it.name].append(sitting.cold_start(it, a.patience))
    for name, ms in times.items():
        seen = [m for m in ms if m is not None]
        log.add("cold", name, {"first_drop_ms": machine.percentiles(seen), "runs": ms, "without_drop": len(ms) - len(seen)})


def idle(a, log):
    for it in a.contenders:
        log.add("idle", it.name, sitting.idle(it, a.balances, a.idle_seconds))


def commit(a, log):
    """Bare commits of as many rows as a small and a large group hold."""
    for rows in (1, 20, 1000):
        with sitting.place() as here:
            db = sqlite3.connect(here.file("bare.sqlite"), isolation_level=None)
            db.executescript("PRAGMA journal_mode=WAL; PRAGMA synchronous=FULL;"
                             "CREATE TABLE heard(no INTEGER PRIMARY KEY, at_ns INTEGER, port TEXT, line BLOB);")
            neighbours, spent, until = machine.Neighbours(), [], time.monotonic() + a.commit_seconds
            group = [(time.time_ns(), "pan-00", b"+   23.4571 g  S")] * rows
            while time.monotonic() < until:
                begun = time.perf_counter()
                db.execute("BEGIN")
                db.executemany("INSERT INTO heard(at_ns, port, line) VALUES(?, ?, ?)", group)
                db.execute("COMMIT")
                spent.append((time.perf_counter() - begun) * 1e3)
                time.sleep(0.005)  # like a service that waits for lines, not a bulk load
            db.close()
            log.add("commit", "sqlite", {"rows": rows, "commit_ms": machine.percentiles(spent), "neighbours": neighbours.since(0)})


def replay(a, log):
    corpus = replaying.corpus(a.lines)
    commands = [("scripted", replaying.SCRIPTED), ("scripted-arrays", replaying.SCRIPTED_ARRAYS)]
    if a.replay_cmd:
        commands.insert(0, ("tarecup", a.replay_cmd))
    for _ in range(a.replay_repeat):
        for name, command in commands:
            log.add("replay", name, replaying.once(command, corpus))


def everything(a, log):
    commit(a, log)
    for part in (cold, latency, idle, replay, capacity):
        part(a, log)
    commit(a, log)


def arguments():
    a = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    a.add_argument("what", choices=["latency", "capacity", "cold", "idle", "commit", "replay", "all"])
    a.add_argument("--contenders", dest="names", default="tarecup,scripted", help="also scripted-20ms: another grouping")
    a.add_argument("--tarecup", default=os.path.join(who.TREE, "target", "release", "tarecup"))
    a.add_argument("--tarecup-args", default="", help="more words for `tarecup run`")
    a.add_argument("--settle", type=float, default=2, help="seconds from the start of a program to the first line")
    a.add_argument("--keep", action="store_true", help="leave the folders of the measurements")
    g = a.add_argument_group("latency")
    g.add_argument("--k", default="2,8,32", help="balances")
    g.add_argument("--r", default="10,50", help="lines a second of each")
    g.add_argument("--seconds", type=float, default=40)
    g = a.add_argument_group("capacity, idle")
    g.add_argument("--balances", type=int, default=8)
    g.add_argument("--start", type=float, default=1000, help="lines a second of all")
    g.add_argument("--most", type=float, default=400_000)
    g.add_argument("--bisect", type=int, default=3)
    g.add_argument("--step-seconds", type=float, default=12)
    g.add_argument("--confirm-seconds", type=float, default=40)
    g.add_argument("--idle-seconds", type=float, default=120)
    g = a.add_argument_group("cold, commit, replay")
    g.add_argument("--repeat", type=int, default=10)
    g.add_argument("--patience", type=float, default=3, help="seconds given to a cold start")
    g.add_argument("--commit-seconds", type=float, default=5)
    g.add_argument("--lines", type=int, default=1_000_000)
    g.add_argument("--replay-repeat", type=int, default=3)
    g.add_argument("--replay-cmd", help="tarecup's replay; {corpus}, {tsv} and {out} are filled in (see replaying.py)")
    return a.parse_args()


def main():
    a = arguments()
    if sitting.mosquitto() is None:
        sys.exit("run: mosquitto is not installed; install the broker (package mosquitto) and try again")
    # What needs no program of ours must not ask for it.
    a.contenders = who.named(a.names, a) if a.what not in ("commit", "replay") else []
    parts = {"latency": latency, "capacity": capacity, "cold": cold, "idle": idle, "commit": commit, "replay": replay, "all": everything}
    log = Log()
    try:
        parts[a.what](a, log)
    except (sitting.Trouble, replaying.Trouble, ValueError) as trouble:
        sys.exit(f"run: {trouble}")
    except KeyboardInterrupt:
        print("run: interrupted; what was measured so far:", file=sys.stderr)
    print()
    print(table.whole(log.results))
    print(f"\nJSON lines: {os.path.relpath(log.path)}")
    if any(r.get("complete") is False for r in log.results):
        sys.exit("run: a latency measurement lost, doubled or invented something; see the JSON lines")


if __name__ == "__main__":
    main()
