"""Computes the trail of a study's records again, with nothing but Python's own library.

Written from the documentation of codec.rs and trail.rs alone. Usage: verify_trail.py records.sqlite
Prints the head hash; on a mismatch it says where, and ends with 1.
"""

import hashlib
import sqlite3
import struct
import sys

OF_ACT = ("plan_version roster_event capture account filing reading_event hold_event accounted cut removal "
          "raw_removal").split()
OF_FILING = "reading hold sighting gone".split()
SALTED = "roster_event reading hold hold_event".split()
TERMS = {"reading": "instrument measure condition unit operator".split(), "capture": ["instrument"]}
SUBJECTS = "roster_event accounted removal".split()


def sha(data):
    return hashlib.sha256(data).digest()


def value(v):
    if v is None:
        return b"n0:"
    kind, data = {
        int: lambda: (b"i", b"%d" % v),
        float: lambda: (b"r", struct.pack(">d", v).hex().encode()),
        str: lambda: (b"t", v.encode()),
        bytes: lambda: (b"b", v),
    }[type(v)]()
    return kind + b"%d:" % len(data) + data


db = sqlite3.connect(f"file:{sys.argv[1]}?mode=ro", uri=True)
db.row_factory = sqlite3.Row
terms = {0: "", **dict(db.execute("SELECT id, text FROM term").fetchall())}
subjects = dict(db.execute("SELECT id, code FROM subject").fetchall())
sessions = {s["id"]: (subjects[s["subject"]], s["day"], terms[s["label"]]) for s in db.execute("SELECT * FROM session")}


def form(table, row):
    out = value(table)
    for column in row.keys():
        v = row[column]
        if table in SALTED and column in ("salt", "digest", "removed"):
            continue
        if column in TERMS.get(table, ()):
            v = terms[v]
        if column == "subject" and table in SUBJECTS:
            v = subjects[v]
        if column == "session" and table == "reading":
            out += b"".join(value(part) for part in sessions[v])
        else:
            out += value(v)
    return out


def digests(tables, column, number):
    for table in tables:
        for row in db.execute(f"SELECT * FROM {table} WHERE {column} = ? ORDER BY id", (number,)):
            removed = table in SALTED and row["removed"] is not None
            salt = row["salt"] if table in SALTED else b""
            yield row["digest"] if removed else sha((salt or b"") + form(table, row))


def left(act):
    for table in SALTED:
        for row in db.execute(f"SELECT * FROM {table} WHERE removed = ? ORDER BY id", (act,)):
            yield sha(row["digest"] + form(table, row))


wrong, previous = [], bytes(32)
for act in db.execute("SELECT * FROM trail ORDER BY number"):
    fields = [act[name] for name in act.keys() if name != "hash"]
    if act["previous"] != previous or sha(b"".join(value(v) for v in fields)) != act["hash"]:
        wrong.append(f"act {act['number']}: chain")
    if sha(b"".join(digests(OF_ACT, "act", act["number"]))) != act["digest"]:
        wrong.append(f"act {act['number']}: rows")
    previous = act["hash"]
for filing in db.execute("SELECT * FROM filing"):
    if sha(b"".join(sha(b"".join(digests([table], "filing", filing["id"]))) for table in OF_FILING)) != filing["digest"]:
        wrong.append(f"filing {filing['id']}")
for removal in db.execute("SELECT * FROM removal"):
    if sha(b"".join(left(removal["act"]))) != removal["digest"]:
        wrong.append(f"removal {removal['id']}")
print(previous.hex())
print("\n".join(wrong), file=sys.stderr)
sys.exit(1 if wrong else 0)
