#!/usr/bin/env python3
"""A second verifier of a ledger, for an auditor to read. It shares no code with the program.

    tests/audit.py LEDGER.sqlite [SEQ:HASH ...]

1. The chain: every input and every fact is hashed again (SHA-256) and must lead to the stored
   hash of the next fact. SEQ:HASH is a head known from elsewhere (MQTT, a printed report).
2. The masses and drops: each is looked up in the bytes of the line it came from.
3. The results: water contents, liquid limit, plastic limit and index of the latest revision
   of each specimen are computed again from those masses and drops.

Exit code 0: all as it was written. 1: the first bad fact is named. Signatures are not checked here.
"""
import hashlib, json, math, re, sqlite3, sys
from collections import defaultdict
from fractions import Fraction

class Bad(Exception):
    pass

def number(n):
    return n.to_bytes(8, "big", signed=True)

def run(b):
    b = b.encode("utf-8", "surrogateescape") if isinstance(b, str) else bytes(b)
    return len(b).to_bytes(4, "big") + b

def maybe(b):
    return b"\0" if b is None else b"\1" + run(b)

def chain(db, heads):
    """Hashes everything again; gives the facts as JSON."""
    (ledger,) = db.execute("SELECT id FROM ledger").fetchone()
    try:
        last = hashlib.sha256(b"tarecup ledger 1\n" + bytes.fromhex(ledger)).digest()
    except ValueError:
        raise Bad("fact 1: the ledger's id is not one")
    inputs = db.execute(
        "SELECT i.no, i.at_utc_us, i.mono_us, i.boot, i.kind, n.name, i.reason, i.bytes FROM input i"
        " LEFT JOIN instrument n ON n.id = i.instrument ORDER BY i.no")
    facts, seq, covered = [], 0, 0
    row = db.execute("SELECT seq, at_utc_us, mono_us, boot, kind, who, through, inputs_to, body, inputs_digest, hash"
                     " FROM fact ORDER BY seq")
    for f in row:
        seq += 1
        if f[0] != seq:
            raise Bad(f"fact {seq}: it is missing; the next one is {f[0]}")
        digest = hashlib.sha256(b"tarecup inputs 1\n")
        while covered < f[7]:
            i = inputs.fetchone()
            covered += 1
            if i is None or i[0] != covered:
                raise Bad(f"fact {seq}: input {covered} before it is missing")
            digest.update(b"".join(map(number, i[:4])) + run(i[4]) + maybe(i[5]) + maybe(i[6]) + run(i[7]))
        if digest.digest() != f[9]:
            raise Bad(f"fact {seq}: the inputs before it are not as they were digested")
        columns = b"".join(map(number, f[:4])) + run(f[4]) + maybe(f[5]) + number(f[6]) + number(f[7])
        want = hashlib.sha256(b"tarecup fact 1\n" + last + columns + run(f[8]) + f[9]).digest()
        if want != f[10]:
            raise Bad(f"fact {seq}: its hash does not follow from what is stored and the fact before it")
        last, fact = want, json.loads(f[8])
        if (fact["seq"], fact["kind"], fact.get("who")) != (seq, f[4], f[5]):
            raise Bad(f"fact {seq}: its JSON and its columns differ")
        if heads.pop(seq, last.hex()) != last.hex():
            raise Bad(f"fact {seq}: its hash is not the one published for it")
        facts.append(fact)
    for left in heads:
        raise Bad(f"fact {seq + 1}: the ledger ends before fact {left}, which has been published")
    rest = inputs.fetchall()
    for n, i in enumerate(rest, covered + 1):
        if i[0] != n:
            raise Bad(f"fact {seq + 1}: input {n} is missing")
    return facts, covered + len(rest)

UNITS = {"kg": 10**9, "g": 10**6, "mg": 10**3, "ug": 1}

def printed_masses(line):
    """Every number of a line in every unit it could mean, in whole micrograms."""
    text = line.decode("latin-1")
    for sign, digits in re.findall(r"([+-]?)\s*(\d+(?:[.,]\d+)?)", text):
        value = Fraction(digits.replace(",", ".")) * (-1 if sign == "-" else 1)
        for unit in UNITS.values():
            yield value * unit

def lines(db, facts):
    """Each mass and each count that an instrument gave stands in the line it names."""
    masses, counts = {}, {}
    line = lambda no: db.execute("SELECT bytes FROM input WHERE no = ?", (no,)).fetchone()
    for f in facts:
        body = f["fact"]
        if f["kind"] == "weighed" and body.get("taken"):
            taken = body["taken"]
            found = line(taken["input"])
            if found is None or taken["mass"] not in printed_masses(found[0]):
                raise Bad(f"fact {f['seq']}: its mass does not stand in line {taken['input']}, which it names")
            if taken["mass"] != body["mass_ug"]:
                raise Bad(f"fact {f['seq']}: its mass is not the one its balance gave")
            masses[f["seq"]] = taken["mass"]
        if f["kind"] == "counted" and body.get("run") and body["run"]["ended_by"] == "end_line":
            found = line(body["run"]["last_input"])[0]
            final = [int(n) for n in re.findall(rb"\d+", found)]
            if final and body["run"]["drops"] not in final:
                raise Bad(f"fact {f['seq']}: its drops do not stand in its last line")
        if f["kind"] == "counted":
            counts[f["seq"]] = body["drops"]
    return masses, counts

def close(a, b):
    return (a is None) == (b is None) and (a is None or abs(a - b) <= 1e-9 * max(1.0, abs(b)))

def results(facts, methods):
    """Water contents and limits of the latest revision of each specimen, computed again."""
    known = defaultdict(set)  # masses that somebody or something gave, by container
    latest = {}
    for f in facts:
        body = f["fact"]
        if f["kind"] == "limits_computed":
            latest[body["specimen"]] = f
        for mass in re.findall(r'"(?:mass_ug|mass|gross)": ?(-?\d+)', json.dumps(body)):
            known["all"].add(int(mass))
    for specimen, f in sorted(latest.items()):
        r, method = f["fact"]["limits"], methods.get(f["fact"]["limits"]["method"], {})
        bad = lambda what, want, got: Bad(f"fact {f['seq']}: {what} of {specimen} is {want} from its masses, stored as {got}")
        liquid, threads = [], []
        for t in r["trials"]:
            for key in ("tare_g", "wet_g", "dry_g"):
                if t[key] is not None and round(t[key] * 1e6) not in known["all"]:
                    raise Bad(f"fact {f['seq']}: {key} {t[key]} of {specimen} was given by nobody")
            if None in (t["tare_g"], t["wet_g"], t["dry_g"]) or not t["used"]:
                continue
            water = 100 * (t["wet_g"] - t["dry_g"]) / (t["dry_g"] - t["tare_g"])
            if not close(water, t["water_percent"]):
                raise bad(f"the water content of {t['kind']} {t['no']}", water, t["water_percent"])
            if t["kind"] == "liquid" and t["drops"]:
                liquid.append((math.log10(t["drops"]), water))
            if t["kind"] == "thread":
                threads.append(water)
        how = (r["liquid_limit"] or {}).get("how")
        if how == "flow line":
            n, sx, sy = len(liquid), sum(x for x, _ in liquid), sum(y for _, y in liquid)
            mx, my = sx / n, sy / n
            slope = sum((x - mx) * (y - my) for x, y in liquid) / sum((x - mx) ** 2 for x, _ in liquid)
            ll = my + slope * (math.log10(25) - mx)
        elif how == "one point":
            exponent = method["liquid"]["exponent"]
            ll = sum(w * (10**x / 25) ** exponent for x, w in liquid) / len(liquid)
        else:
            ll = None
        if how in ("flow line", "one point") and not close(ll, r["liquid_limit"]["value"]):
            raise bad("the liquid limit", ll, r["liquid_limit"]["value"])
        pl = sum(threads) / len(threads) if threads and r["plastic_limit"] else None
        if r["plastic_limit"] and not close(pl, r["plastic_limit"]["value"]):
            raise bad("the plastic limit", pl, r["plastic_limit"]["value"])
        index = r["plasticity_index"]["value"]
        if index is not None and ll is not None and not close(ll - pl, index):
            raise bad("the plasticity index", ll - pl, index)
    return latest

def main(path, *heads):
    db = sqlite3.connect(f"file:{path}?mode=ro", uri=True)
    db.text_factory = lambda b: b.decode("utf-8", "surrogateescape")
    heads = {int(seq): digest for seq, digest in (h.split(":") for h in heads)}
    try:
        facts, inputs = chain(db, heads)
        masses, counts = lines(db, facts)
        methods = {}
        for f in facts:
            if f["kind"] == "settings_taken":
                (text,) = db.execute("SELECT bytes FROM input WHERE no = ?", (f["fact"]["input"],)).fetchone()
                methods.update(json.loads(text)["methods"])
        specimens = results(facts, methods)
    except Bad as bad:
        print(f"NOT as it was written: {bad}")
        return 1
    except (sqlite3.DatabaseError, ValueError, KeyError, TypeError) as e:
        print(f"NOT as it was written: it cannot be read: {e!r}")
        return 1
    print(f"{len(facts)} facts, {inputs} inputs: as written; {len(masses)} masses and {len(counts)} counts found in "
          f"their lines; {len(specimens)} specimens computed again")
    return 0

if __name__ == "__main__":
    sys.exit(main(*sys.argv[1:]) if len(sys.argv) > 1 else __doc__)
