"""Results for people: a line for each as it comes, one table at the end."""


def _four(p):
    return f"{p['p50']:.1f} / {p['p95']:.1f} / {p['p99']:.1f} / {p['max']:.1f} (n={p['n']})" if p else "none"


def _lacks(r):
    faults = ("missing_masses", "missing_drops", "doubled", "unknown", "early", "spoilt", "refused")
    found = [f"{r[f]} {f.replace('_', ' ')}" for f in faults if r[f]]
    if r["stored"] < r["sent"]:
        found.append(f"{r['sent'] - r['stored']} lines not stored")
    return ", ".join(found) or "complete"


def _noise(r):
    return f"others {r['neighbours']['others_percent']} % of the machine"


def line(r):
    """One result in one line."""
    head = f"{r['what']:9}{r['who']:16}"
    if r["what"] == "latency":
        return (f"{head}K={r['balances']} R={r['rate']:g}: mass {_four(r['mass_ms'])} ms; drop {_four(r['drop_ms'])} ms; {_lacks(r)}; "
                f"CPU {r['cpu_s_per_1000']} s/1000; {r['rss_peak_mib']} MiB; feeder late {_four(r['feeder_late_ms'])} ms; {_noise(r)}")
    if r["what"] == "load":
        return (f"{head}{r['lines_per_s']} lines/s: {r['verdict']}; {_four(r['all_ms'])} ms; stored after {r['drain_s']} s; "
                f"CPU {r['cpu_s_per_1000']} s/1000; feeder late {_four(r['feeder_late_ms'])} ms; {_noise(r)}")
    if r["what"] == "capacity":
        return f"{head}K={r['balances']}: {r['sustained_lines_per_s']} lines/s hold; beyond: {r['limit']}"
    if r["what"] == "cold":
        return f"{head}first drop after {_four(r['first_drop_ms'])} ms; {r['without_drop']} runs without one"
    if r["what"] == "idle":
        return f"{head}K={r['balances']}: {r['cpu_percent']} % of a core, {r['waits_per_s']} wake-ups/s, {r['rss_mib']} MiB; {_noise(r)}"
    if r["what"] == "commit":
        return f"{head}{r['rows']} rows: {_four(r['commit_ms'])} ms; {_noise(r)}"
    wrong = "masses not checked" if r["wrong_masses"] is None else f"{r['wrong_masses']} of {r['placements']} masses wrong"
    return f"{head}{r['lines']} lines in {r['seconds']} s, {r['lines_per_s']} lines/s, CPU {r['cpu_s']} s; {wrong}; {_noise(r)}"


def figures(r):
    """What of a result goes into the table: (row, value, unit, whether more is better)."""
    if r["what"] == "latency":
        at = f"K={r['balances']} R={r['rate']:g}"
        for what in ("mass", "drop"):
            for rank in ("p50", "p99"):
                if r[f"{what}_ms"]:
                    yield f"{what} {rank}, {at}", r[f"{what}_ms"][rank], "ms", False
        yield f"CPU per 1000 lines, {at}", 1000 * r["cpu_s_per_1000"], "ms", False
        yield f"peak memory, {at}", r["rss_peak_mib"], "MiB", False
    elif r["what"] == "capacity":
        yield f"sustained, K={r['balances']}", r["sustained_lines_per_s"], "lines/s", True
    elif r["what"] == "cold" and r["first_drop_ms"]:
        yield "first drop after a cold start, p50", r["first_drop_ms"]["p50"], "ms", False
        yield "first drop after a cold start, max", r["first_drop_ms"]["max"], "ms", False
    elif r["what"] == "idle":
        yield f"idle CPU, K={r['balances']}", r["cpu_percent"], "% core", False
        yield f"idle wake-ups, K={r['balances']}", r["waits_per_s"], "1/s", False
        yield f"idle memory, K={r['balances']}", r["rss_mib"], "MiB", False
    elif r["what"] == "commit":
        yield f"bare commit of {r['rows']} rows, p50", r["commit_ms"]["p50"], "ms", False
    elif r["what"] == "replay":
        yield f"replay of {r['lines']} lines", r["seconds"], "s", False


def _median(values):
    ranked = sorted(values)
    return ranked[(len(ranked) - 1) // 2]


def whole(results):
    """One table: a row a figure, a column a contender, how many times better the first is than each other.

    A figure measured several times is given by its median.
    """
    rows, columns = {}, []
    for r in results:
        for row, value, unit, more in figures(r):
            if r["who"] not in columns:
                columns.append(r["who"])
            rows.setdefault((row, unit, more), {}).setdefault(r["who"], []).append(value)
    columns.sort(key=lambda c: (c != "tarecup", c == "sqlite"))
    others = [c for c in columns[1:] if c != "sqlite"]
    out = [["figure", "unit", *columns, *(f"{columns[0]} better than {o}" for o in others)]]
    for (row, unit, more), values in rows.items():
        cells = {who: _median(v) for who, v in values.items()}
        ratios = []
        for other in others:
            a, b = cells.get(columns[0]), cells.get(other)
            known = a and b
            ratios.append(f"{(a / b if more else b / a):.2f} x" if known else "-")
        out.append([row, unit, *(f"{cells[c]:g}" if c in cells else "-" for c in columns), *ratios])
    widths = [max(len(r[i]) for r in out) for i in range(len(out[0]))]
    return "\n".join("  ".join(cell.ljust(w) for cell, w in zip(r, widths)).rstrip() for r in out)
