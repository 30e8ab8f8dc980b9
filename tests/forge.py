#!/usr/bin/env python3
"""Rewrites a ledger as somebody could who owns the machine: changes a mass in its line and in its
fact, then makes the whole chain anew so that it holds. For tests of what can still be noticed.

    tests/forge.py LEDGER.sqlite mass     the first mass that is weighed becomes another one
    tests/forge.py LEDGER.sqlite fact     a fact is put at the end that nothing leads to
"""
import hashlib, json, sqlite3, sys
from audit import maybe, number, run

def chain_anew(db):
    (ledger,) = db.execute("SELECT id FROM ledger").fetchone()
    last, covered = hashlib.sha256(b"tarecup ledger 1\n" + bytes.fromhex(ledger)).digest(), 0
    facts = db.execute("SELECT seq, at_utc_us, mono_us, boot, kind, who, through, inputs_to, body FROM fact ORDER BY seq").fetchall()
    for f in facts:
        digest = hashlib.sha256(b"tarecup inputs 1\n")
        rows = db.execute("SELECT i.no, i.at_utc_us, i.mono_us, i.boot, i.kind, n.name, i.reason, i.bytes FROM input i LEFT JOIN"
                          " instrument n ON n.id = i.instrument WHERE i.no > ? AND i.no <= ? ORDER BY i.no", (covered, f[7]))
        for i in rows:
            digest.update(b"".join(map(number, i[:4])) + run(i[4]) + maybe(i[5]) + maybe(i[6]) + run(i[7]))
        covered, inputs = f[7], digest.digest()
        columns = b"".join(map(number, f[:4])) + run(f[4]) + maybe(f[5]) + number(f[6]) + number(f[7])
        last = hashlib.sha256(b"tarecup fact 1\n" + last + columns + run(f[8]) + inputs).digest()
        db.execute("UPDATE fact SET inputs_digest = ?, hash = ? WHERE seq = ?", (inputs, last, f[0]))

def other_mass(db):
    seq, body = db.execute("SELECT seq, body FROM fact WHERE kind = 'weighed' ORDER BY seq LIMIT 1").fetchone()
    fact = json.loads(body)
    old = fact["fact"]["mass_ug"]
    grams = "%.2f" % (old / 1e6)
    new = grams[:-1] + str((int(grams[-1]) + 1) % 10)
    text = bytes(body).decode().replace(str(old), str(round(float(new) * 1e6)))
    db.execute("UPDATE fact SET body = ? WHERE seq = ?", (text.encode(), seq))
    no = fact["fact"]["taken"]["input"]
    (line,) = db.execute("SELECT bytes FROM input WHERE no = ?", (no,)).fetchone()
    db.execute("UPDATE input SET bytes = ? WHERE no = ?", (bytes(line).replace(grams.encode(), new.encode()), no))

def fact_of_nothing(db):
    seq, at, mono, boot, through, to = db.execute(
        "SELECT seq, at_utc_us, mono_us, boot, through, inputs_to FROM fact ORDER BY seq DESC LIMIT 1").fetchone()
    (body,) = db.execute("SELECT body FROM fact WHERE seq = ?", (seq,)).fetchone()
    body = json.dumps({**json.loads(body), "seq": seq + 1, "kind": "lines_kept", "fact": {"lines": 7}}).encode()
    who = json.loads(body).get("who")
    db.execute("INSERT INTO fact VALUES (?,?,?,?,?,?,?,?,?,?,?)",
               (seq + 1, at, mono, boot, "lines_kept", who, through, to, body, bytes(32), bytes(32)))

db = sqlite3.connect(sys.argv[1])
for (trigger,) in db.execute("SELECT name FROM sqlite_schema WHERE type = 'trigger'").fetchall():
    db.execute(f"DROP TRIGGER {trigger}")
{"mass": other_mass, "fact": fact_of_nothing}[sys.argv[2]](db)
chain_anew(db)
db.commit()
