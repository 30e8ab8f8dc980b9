"""Plays balances and cup counters into pseudo-terminals and notes when each line left.

A folder gets one symbolic link for each port (pan-00, …, cup-00, …). All bytes
are made before the first is written. On "go" (a line on standard input) they
are written at their time; the stamp of a line is CLOCK_MONOTONIC just before
the write. One JSON object says at the end how it went, how late the feeder
itself was, and which lines a full port refused.
"""

import argparse
import array
import bisect
import heapq
import json
import os
import sys
import termios
import time
import tty

import lines
import machine


class Port:
    """The instrument's end of a pseudo-terminal."""

    def __init__(self, folder, voice):
        self.voice = voice
        self.master, self.slave = os.openpty()
        # Kept open here, so that a program that leaves does not hang up the port.
        tty.setraw(self.slave, termios.TCSANOW)
        os.set_blocking(self.master, False)
        self.link = os.path.join(folder, voice.name)
        if os.path.lexists(self.link):
            os.unlink(self.link)
        os.symlink(os.ttyname(self.slave), self.link)
        self.blob = bytes(voice.blob)
        self.next = 0
        self.torn = b""
        self.lost = []  # (first, after the last) of lines that found no room
        self._until = array.array("Q")
        self._stamp = array.array("Q")

    def write_until(self, until):
        """Writes the lines before `until`; what finds no room is lost, as on a wire."""
        at = self.voice.offsets
        start = at[self.next]
        data = self.torn + self.blob[start : at[until]] if self.torn else self.blob[start : at[until]]
        self._stamp.append(time.monotonic_ns())
        self._until.append(until)
        try:
            written = os.write(self.master, data)
        except BlockingIOError:
            written = 0
        if written == len(data):
            self.torn, self.next = b"", until
            return
        reached = start - len(self.torn) + written
        if reached < start:
            self.torn, first_lost = self.torn[written:], self.next
        else:
            line = bisect.bisect_right(at, reached) - 1
            # A line that began is finished before the next is written.
            self.torn = self.blob[reached : at[line + 1]] if reached > at[line] else b""
            first_lost = line + 1 if self.torn else line
        if first_lost < until:
            self.lost.append((first_lost, until))
        self.next = until

    def finish_torn(self):
        deadline = time.monotonic() + 2
        while self.torn and time.monotonic() < deadline:
            try:
                self.torn = self.torn[os.write(self.master, self.torn) :]
            except BlockingIOError:
                time.sleep(0.005)

    def sent_at(self, index):
        """When a line left, ns; None if it was lost or not written."""
        if any(first <= index < after for first, after in self.lost):
            return None
        write = bisect.bisect_right(self._until, index)
        return self._stamp[write] if write < len(self._stamp) else None

    def lost_lines(self):
        return sum(after - first for first, after in self.lost)


def play(ports, tick_s):
    """Writes everything; gives start, end (both monotonic seconds) and the lateness of each write, ms."""
    late = array.array("d")
    start = time.monotonic() + 0.02
    speaking = [p for p in ports if p.voice.count]
    if tick_s:
        _by_tick(speaking, start, tick_s, late)
    else:
        _line_by_line(speaking, start, late)
    for p in ports:
        p.finish_torn()
    return start, time.monotonic(), late


def _line_by_line(ports, start, late):
    """Each line at its own time."""
    coming = [(p.voice.due(0), i) for i, p in enumerate(ports)]
    heapq.heapify(coming)
    while coming:
        due, i = coming[0]
        now = time.monotonic() - start
        if due > now:
            time.sleep(due - now)
            continue
        port = ports[i]
        late.append((now - due) * 1e3)
        port.write_until(port.voice.due_by(now))
        if port.next < port.voice.count:
            heapq.heapreplace(coming, (port.voice.due(port.next), i))
        else:
            heapq.heappop(coming)


def _by_tick(ports, start, tick_s, late):
    """At each tick all that is due, one write a port: rates that no line-by-line writer reaches.

    A line waits for its tick by design; late is what a tick itself was.
    """
    tick = 0
    while ports:
        due = tick * tick_s
        while (now := time.monotonic() - start) < due:
            time.sleep(due - now)
        late.append((now - due) * 1e3)
        for port in ports:
            until = port.voice.due_by(now)
            if until > port.next:
                port.write_until(until)
        ports = [p for p in ports if p.next < p.voice.count]
        tick = max(tick + 1, int(now / tick_s))  # ticks that were missed are not made up for


def stamps(ports):
    """When each placement's mass could first be taken, and when each drop fell."""
    plateaus, drops, spoilt = [], [], 0
    for port in ports:
        for cell, first, complete in port.voice.plateaus:
            # With a reading lost on the way another line may complete the mass.
            if any(a <= complete and first < b for a, b in port.lost):
                spoilt += 1
                continue
            sent = port.sent_at(complete)
            plateaus.append({"port": port.voice.name, "cell": cell, "first": port.sent_at(first), "complete": sent})
        for index, number in enumerate(port.voice.drops):
            sent = port.sent_at(index)
            if sent is None:
                spoilt += 1
            else:
                drops.append({"port": port.voice.name, "number": number, "sent": sent})
    return {"plateaus": plateaus, "drops": drops, "spoilt": spoilt}


def arguments():
    a = argparse.ArgumentParser(description=__doc__)
    a.add_argument("--dir", required=True)
    a.add_argument("--stamps", required=True)
    a.add_argument("--balances", type=int, default=2)
    a.add_argument("--rate", type=float, default=10, help="lines a second of each balance")
    a.add_argument("--counters", type=int, default=1)
    a.add_argument("--drop-rate", type=float, default=2)
    a.add_argument("--drop-run", type=int, default=lines.RUN_OF_DROPS)
    a.add_argument("--seconds", type=float, default=20)
    a.add_argument("--cycle", type=lines.Cycle.parse, default=lines.BUSY)
    a.add_argument("--tick-ms", type=float, default=0)
    a.add_argument("--silent", action="store_true", help="open the ports and say nothing")
    return a.parse_args()


def main():
    a = arguments()
    os.makedirs(a.dir, exist_ok=True)
    voices = lines.balances(a.balances, a.rate, a.seconds, a.cycle) + lines.counters(a.counters, a.drop_rate, a.seconds, a.drop_run)
    if a.silent:
        voices = [lines.Voice(v.name, v.rate, v.phase) for v in voices]
    ports = [Port(a.dir, v) for v in voices]
    print("ready", flush=True)
    if not sys.stdin.readline():
        return
    before = time.process_time()
    start, end, late = play(ports, a.tick_ms / 1000)
    spent = time.process_time() - before
    with open(a.stamps, "w", encoding="utf-8") as out:
        json.dump(stamps(ports), out)
    said, lost = sum(p.voice.count for p in ports), sum(p.lost_lines() for p in ports)
    summary = {"sent": said - lost, "refused": lost, "seconds": round(end - start, 3), "end_ns": int(end * 1e9)}
    summary |= {"late_ms": machine.percentiles(late), "cpu_s": round(spent, 3)}
    print(json.dumps(summary), flush=True)
    sys.stdin.read()  # the ports stay open until the caller has seen enough


if __name__ == "__main__":
    main()
