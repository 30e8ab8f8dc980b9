"""Limits from masses and drops by numpy and scipy, to judge what the program says.

Reads one JSON list of specimens from standard input and prints one JSON list of
results. The masses are the texts of the scenario, not what the program took.
Shares no code with the program.
"""

import json
import sys

import numpy as np
from scipy import stats

# How each method computes and rounds; its own few lines, not the program's files.
METHODS = {
    "d4318-multipoint": ("line", np.rint),
    "d4318-one-point": ("one point", np.rint),
    "t89-t90": ("line", np.rint),
    "iso17892-cup": ("line", lambda v: np.floor(v + 0.5)),
}


def water(row):
    """Percent of dry mass; none where the masses cannot be soil's."""
    tare, wet, dry = float(row["tare"]), float(row["wet"]), float(row["dry"][-1])
    if not tare < dry <= wet:
        return None
    return float((np.float64(wet) - dry) / (np.float64(dry) - tare) * 100.0)


def counting(rows):
    """Drops of the last closure, and water, of the rows that a person has not set aside."""
    pairs = [(r["drops"][-1], water(r["slice"])) for r in rows if not r["slice"]["set_aside"]]
    pairs = [(n, w) for n, w in pairs if w is not None]
    return np.array([n for n, _ in pairs], dtype=float), np.array([w for _, w in pairs])


def line(drops, w):
    """Least squares on log10 N, with the standard error at 25 drops."""
    x = np.log10(drops) - np.log10(25.0)
    design = np.column_stack([np.ones_like(x), x])
    (at25, slope), *_ = np.linalg.lstsq(design, w, rcond=None)
    found = {"value": float(at25), "slope_per_decade": float(slope), "points": len(x)}
    freedom = len(x) - 2
    if freedom > 0:
        sd = np.sqrt(np.sum((w - design @ [at25, slope]) ** 2) / freedom)
        u = sd * np.sqrt(np.linalg.inv(design.T @ design)[0, 0])
        t = stats.t.ppf(0.975, freedom)
        found |= {"residual_sd": float(sd), "interval_95_classical": [float(at25 - t * u), float(at25 + t * u)]}
    return found


def liquid(specimen, how):
    drops, w = counting(specimen["liquid"])
    if how == "one point":
        return {"value": float(np.mean(w * (drops / 25.0) ** 0.121)), "points": len(w)} if len(w) else None
    return line(drops, w) if len(set(drops.tolist())) >= 2 else None


def judged(specimen):
    how, rounded = METHODS[specimen["method"]]
    mean = lambda rows: [w for w in (water(r) for r in rows if not r["set_aside"]) if w is not None]
    ll = liquid(specimen, how) if specimen["not_obtainable"] != "liquid" else None
    threads, natural = mean(specimen["plastic"]), mean(specimen["natural"])
    pl = {"value": float(np.mean(threads)), "points": len(threads)} if threads else None
    if specimen["not_obtainable"] == "plastic":
        pl = None
    for limit in (ll, pl):
        if limit:
            limit["rounded"] = float(rounded(limit["value"]))
    np_soil = specimen["not_obtainable"] is not None
    index = {"value": None, "rounded": None, "non_plastic": np_soil}
    if ll and pl:
        np_soil = np_soil or pl["rounded"] >= ll["rounded"]
        index["non_plastic"] = bool(np_soil)
        if not np_soil:
            index |= {"value": ll["value"] - pl["value"], "rounded": ll["rounded"] - pl["rounded"]}
    return {
        "specimen": specimen["id"],
        "liquid_limit": ll,
        "plastic_limit": pl,
        "plasticity_index": index,
        "natural_water_percent": float(np.mean(natural)) if natural else None,
        "waters": [water(r["slice"]) for r in specimen["liquid"]] + [water(r) for r in specimen["plastic"] + specimen["natural"]],
    }


if __name__ == "__main__":
    print(json.dumps([judged(s) for s in json.load(sys.stdin)]))
