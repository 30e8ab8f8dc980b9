"""One measurement: broker, subscriber, feeder and a contender, from start to clean-up."""

import contextlib
import getpass
import json
import os
import shutil
import signal
import socket
import subprocess
import sys
import tempfile
import time

import machine
import match

HERE = os.path.dirname(os.path.abspath(__file__))
WORK = os.path.join(os.path.dirname(HERE), ".work", "bench")


class Trouble(Exception):
    """A measurement that could not be made."""


def mosquitto():
    """The broker's program; it is often outside a user's PATH."""
    return shutil.which("mosquitto", path=os.environ.get("PATH", "") + ":/usr/sbin:/usr/local/sbin")


class Place:
    """A folder of its own for one measurement, gone afterwards."""

    def __init__(self):
        os.makedirs(WORK, exist_ok=True)
        self.folder = tempfile.mkdtemp(prefix="sitting-", dir=WORK)
        self.ports = os.path.join(self.folder, "ports")
        self.mqtt = ""

    def file(self, name):
        return os.path.join(self.folder, name)

    def text(self, name):
        try:
            with open(self.file(name), encoding="utf-8", errors="replace") as f:
                return f.read().strip()
        except OSError:
            return ""


def _free_port():
    with socket.socket() as s:
        s.bind(("127.0.0.1", 0))
        return s.getsockname()[1]


def _end(process, group=False, patience=15):
    """Ends a process that we started, and with `group` what it started."""
    send = (lambda s: os.killpg(process.pid, s)) if group else process.send_signal
    for s, wait in ((signal.SIGTERM, patience), (signal.SIGKILL, None)):
        if process.poll() is not None:
            return
        with contextlib.suppress(ProcessLookupError):
            send(s)
        with contextlib.suppress(subprocess.TimeoutExpired):
            process.wait(wait)


@contextlib.contextmanager
def broker(place):
    """mosquitto on a free loopback port, keeping nothing and holding nothing back."""
    port = _free_port()
    with open(place.file("broker.conf"), "w", encoding="utf-8") as out:
        out.write(f"listener {port} 127.0.0.1\nallow_anonymous true\npersistence false\nuser {getpass.getuser()}\n"
                  "set_tcp_nodelay true\nmax_queued_messages 0\nmax_inflight_messages 0\nlog_type error\n")
    with open(place.file("broker.log"), "w", encoding="utf-8") as log:
        process = subprocess.Popen([mosquitto(), "-c", place.file("broker.conf")], stdout=log, stderr=log)
    try:
        deadline = time.monotonic() + 10
        while True:
            with contextlib.suppress(OSError), socket.create_connection(("127.0.0.1", port), 1):
                break
            if process.poll() is not None or time.monotonic() > deadline:
                raise Trouble(f"mosquitto did not come up: {place.text('broker.log')}")
            time.sleep(0.05)
        place.mqtt = f"127.0.0.1:{port}"
        yield process
    finally:
        _end(process)


class Helper:
    """A child that says 'ready' when it is, and one JSON object at its end."""

    def __init__(self, script, *words):
        self.what = script
        self.process = subprocess.Popen([sys.executable, os.path.join(HERE, script), *map(str, words)],
                                        stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True)

    def wait_ready(self):
        if self.process.stdout.readline().strip() != "ready":
            raise Trouble(f"{self.what} did not get ready; its own message is above")

    def go(self):
        self.process.stdin.write("go\n")
        self.process.stdin.flush()

    def result(self):
        line = self.process.stdout.readline()
        if not line:
            raise Trouble(f"{self.what} ended early; its own message is above")
        return json.loads(line)


@contextlib.contextmanager
def helper(script, *words):
    child = Helper(script, *words)
    try:
        child.wait_ready()
        yield child
    finally:
        _end(child.process)
        child.process.stdin.close()
        child.process.stdout.close()


class Started:
    """A contender that runs."""

    def __init__(self, contender, place):
        words = contender.prepare(place)
        with open(place.file("program.log"), "w", encoding="utf-8") as log:
            self.began_ns = time.monotonic_ns()
            self.process = subprocess.Popen(words, stdout=log, stderr=log, start_new_session=True)
        self._place, self._name = place, contender.name

    def check(self):
        if self.process.poll() is not None:
            told = self._place.text("program.log")[-2000:]
            raise Trouble(f"{self._name} ended with {self.process.returncode}: {told or 'it said nothing'}")

    def used(self):
        return machine.used(self.process.pid)


@contextlib.contextmanager
def program(contender, place):
    started = Started(contender, place)
    try:
        yield started
    finally:
        _end(started.process, group=True)


@contextlib.contextmanager
def place(keep=False):
    here = Place()
    try:
        yield here
    finally:
        if not keep:
            shutil.rmtree(here.folder, ignore_errors=True)


def _ear(contender, here):
    topics = [word for topic in contender.topics for word in ("--topic", topic)]
    return helper("hear.py", "--mqtt", here.mqtt, "--record", here.file("record"), *topics)


def _feeder(here, *words):
    return helper("feed.py", "--dir", here.ports, "--stamps", here.file("stamps"), *words)


def _drain(contender, here, base, sent, end_ns):
    """Seconds from the last line sent until all lines are stored (None: never), and how many were."""
    count, moved = base, time.monotonic()
    while True:
        before = count[0]
        count = contender.stored(here, count)
        now = time.monotonic()
        if count[0] - base[0] >= sent:
            return now - end_ns / 1e9, count[0] - base[0]
        moved = now if count[0] != before else moved
        if now - moved > 5 or now - end_ns / 1e9 > 60:
            return None, count[0] - base[0]
        time.sleep(0.02)


def traffic(contender, feed, settle_s, keep=False):
    """Feeds lines and tells how the contender took them."""
    with place(keep) as here, broker(here) as mosq, _ear(contender, here) as ear, _feeder(here, *feed) as feeder:
        with program(contender, here) as it:
            time.sleep(settle_s)
            it.check()
            base = contender.stored(here, (0, None))
            before, broker_before, neighbours = it.used(), machine.used(mosq.pid), machine.Neighbours()
            feeder.go()
            fed = feeder.result()
            drain, stored = _drain(contender, here, base, fed["sent"], fed["end_ns"])
            time.sleep(0.5)  # the last messages are on their way
            it.check()
            after, broker_after = it.used(), machine.used(mosq.pid)
            ear.process.send_signal(signal.SIGTERM)
            heard = ear.result()
            with open(here.file("stamps"), encoding="utf-8") as f:
                told = match.match(json.load(f), match.read_record(here.file("record")), contender.decode)
        cpu, broker_cpu = after["cpu_s"] - before["cpu_s"], broker_after["cpu_s"] - broker_before["cpu_s"]
        return {
            "sent": fed["sent"], "refused": fed["refused"], "stored": stored, "seconds": fed["seconds"],
            "drain_s": None if drain is None else round(drain, 3), "messages": heard["messages"], **told,
            "cpu_s": round(cpu, 2), "cpu_s_per_1000": round(1000 * cpu / max(1, fed["sent"]), 4),
            "rss_mib": round(after["rss_mib"], 1), "rss_peak_mib": round(after["rss_peak_mib"], 1),
            "feeder_late_ms": fed["late_ms"], "feeder_cpu_s": fed["cpu_s"], "broker_cpu_s": round(broker_cpu, 2),
            "neighbours": neighbours.since(cpu + broker_cpu + fed["cpu_s"]),
        }


def cold_start(contender, patience_s):
    """ms from the start of the process to the first published drop; the ports talk already."""
    feed = ["--balances", 1, "--rate", 200, "--drop-rate", 200, "--drop-run", 10**6, "--seconds", patience_s + 5]
    with place() as here, broker(here), _ear(contender, here) as ear, _feeder(here, *feed) as feeder:
        feeder.go()
        time.sleep(0.3)
        with program(contender, here) as it:
            time.sleep(patience_s)
            it.check()
        ear.process.send_signal(signal.SIGTERM)
        ear.result()
        for ns, topic, payload in match.read_record(here.file("record")):
            meaning = contender.decode(topic, payload)
            if meaning and meaning[0] == "drop":
                return round((ns - it.began_ns) / 1e6, 1)
    return None


def idle(contender, balances, seconds):
    """What the contender uses while nothing is said."""
    with place() as here, broker(here), _feeder(here, "--balances", balances, "--silent"):
        with program(contender, here) as it:
            time.sleep(5)
            it.check()
            before, neighbours = it.used(), machine.Neighbours()
            time.sleep(seconds)
            it.check()
            after = it.used()
    cpu = after["cpu_s"] - before["cpu_s"]
    return {"balances": balances, "seconds": seconds, "cpu_percent": round(100 * cpu / seconds, 3),
            "waits_per_s": round((after["waits"] - before["waits"]) / seconds, 1), "rss_mib": round(after["rss_mib"], 1),
            "start_cpu_s": round(before["cpu_s"], 2), "neighbours": neighbours.since(cpu)}
