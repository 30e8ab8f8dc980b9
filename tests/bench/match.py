"""Which message tells of which placement or drop, and how long it took.

A mass belongs to the placement whose cell it lies in; each is used once. A drop
belongs to the latest line with its number that had left by then on its counter.
Whatever is told twice, or tells of nothing that was said, is counted; so is
everything said that nobody was told of.
"""

import bisect
import json

import lines
import machine

NEAR_UG = 2_000  # a reading lies within 0.9 mg of its cell


def read_record(path):
    with open(path, encoding="utf-8") as f:
        return [tuple(json.loads(line)) for line in f]


def _cell(ug):
    cell = round(ug / lines.CELL_UG)
    return cell if abs(ug - cell * lines.CELL_UG) <= NEAR_UG else None


def match(stamps, record, decode):
    """Delays in ms and the account of what is missing, doubled, unknown or too early."""
    placements = {p["cell"]: p for p in stamps["plateaus"]}
    fallen = {}
    for drop in stamps["drops"]:
        fallen.setdefault((drop["port"], drop["number"]), []).append(drop["sent"])
    told_cells, told_drops = set(), set()
    masses, drops = [], []
    account = {"doubled": 0, "unknown": 0, "early": 0}
    for ns, topic, payload in record:
        meaning = decode(topic, payload)
        if meaning is None:
            continue
        if meaning[0] == "mass":
            cell = _cell(meaning[1])
            if cell not in placements:
                account["unknown"] += 1
            elif cell in told_cells:
                account["doubled"] += 1
            else:
                told_cells.add(cell)
                delay = ns - placements[cell]["complete"]
                account["early"] += delay < 0
                masses.append(delay / 1e6)
        else:
            sent = fallen.get(meaning[1:], [])
            latest = bisect.bisect_right(sent, ns) - 1
            key = (*meaning[1:], latest)
            if latest < 0:
                account["unknown"] += 1
            elif key in told_drops:
                account["doubled"] += 1
            else:
                told_drops.add(key)
                drops.append((ns - sent[latest]) / 1e6)
    account["missing_masses"] = len(placements) - len(told_cells)
    account["missing_drops"] = len(stamps["drops"]) - len(told_drops)
    account["spoilt"] = stamps["spoilt"]
    return {"mass_ms": machine.percentiles(masses), "drop_ms": machine.percentiles(drops),
            "all_ms": machine.percentiles(masses + drops), **account}


def complete(result):
    """True when all that was said was told, once."""
    faults = ("doubled", "unknown", "early", "missing_masses", "missing_drops", "spoilt")
    return not any(result[f] for f in faults)
