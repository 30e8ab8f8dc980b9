"""What a process tree used and how busy the machine was, from /proc."""

import math
import os
import re

TICK = os.sysconf("SC_CLK_TCK")


def percentiles(values):
    """Nearest-rank percentiles; None when there is nothing to rank."""
    ranked = sorted(values)
    if not ranked:
        return None

    def at(percent):
        return round(ranked[max(0, math.ceil(percent / 100 * len(ranked)) - 1)], 3)

    return {"n": len(ranked), "p50": at(50), "p95": at(95), "p99": at(99), "max": round(ranked[-1], 3)}


def _stat(pid):
    """Fields of /proc/PID/stat after the name, which may hold anything."""
    with open(f"/proc/{pid}/stat", encoding="ascii", errors="replace") as f:
        return f.read().rpartition(")")[2].split()


def family(root):
    """The process and all its living descendants."""
    parents = {}
    for entry in filter(str.isdigit, os.listdir("/proc")):
        try:
            parents[int(entry)] = int(_stat(entry)[1])
        except (OSError, IndexError):
            continue
    found, grown = {root}, True
    while grown:
        more = {pid for pid, parent in parents.items() if parent in found} - found
        found |= more
        grown = bool(more)
    return found


def used(root):
    """CPU seconds (ended children included), resident and peak memory in MiB, waits for something to do."""
    total = {"cpu_s": 0.0, "rss_mib": 0.0, "rss_peak_mib": 0.0, "waits": 0}
    for pid in family(root):
        try:
            stat = _stat(pid)
            with open(f"/proc/{pid}/status", encoding="ascii", errors="replace") as f:
                status = f.read()
            waits = 0
            for task in os.listdir(f"/proc/{pid}/task"):
                with open(f"/proc/{pid}/task/{task}/status", encoding="ascii", errors="replace") as f:
                    waits += int(re.search(r"^voluntary_ctxt_switches:\s+(\d+)", f.read(), re.M)[1])
        except (OSError, TypeError):
            continue  # it ended meanwhile
        total["cpu_s"] += sum(int(stat[i]) for i in (11, 12, 13, 14)) / TICK
        for key, name in (("rss_mib", "VmRSS"), ("rss_peak_mib", "VmHWM")):
            held = re.search(rf"^{name}:\s+(\d+) kB", status, re.M)
            total[key] += int(held[1]) / 1024 if held else 0
        total["waits"] += waits
    return total


class Neighbours:
    """How much of the machine others took while we measured."""

    def __init__(self):
        self._before = self._read()
        self._load = os.getloadavg()[0]

    @staticmethod
    def _read():
        with open("/proc/stat", encoding="ascii") as f:
            ticks = [int(n) for n in f.readline().split()[1:9]]
        return {"all": sum(ticks), "idle": ticks[3] + ticks[4], "steal": ticks[7]}

    def since(self, ours_cpu_s):
        now = self._read()
        span = max(1, now["all"] - self._before["all"])
        busy = span - (now["idle"] - self._before["idle"])
        percent = lambda ticks: round(100 * ticks / span, 1)
        return {
            "load": round(self._load, 2),
            "busy_percent": percent(busy),
            "stolen_percent": percent(now["steal"] - self._before["steal"]),
            "others_percent": percent(max(0, busy - ours_cpu_s * TICK)),
        }
