#!/usr/bin/env python3
"""`outwait weigh` and `outwait audit` on ten million NDJSON lines, beside a columnar SQL library (DuckDB) on the same file.

    python benches/peers/weigh_10m.py [--lines 10000000] [--runs 3] [--outwait target/release/outwait] [--file PATH]

Writes the file once (about 0.9 GB) and keeps it. Both sides read the whole file in a process of their own; ours fits,
decides and prints an advice for each of the 100 streams, the other computes five quantiles of each. The least of the
runs counts: the rest is what else the machine was doing.
"""

import argparse
import os
import random
import resource
import subprocess
import sys
import tempfile
import time

STREAMS = 100
PATRONS = ["catalogue.lookup", "catalogue.search", "courier.slots", "lender.reply", "desk.queue"]

# Told the columns, it need not find out their types.
QUERY = """
SELECT stream, count(*){more},
       quantile_cont(elapsed, [0.05, 0.5, 0.9, 0.99, 0.999])
FROM read_json('{file}', format = 'newline_delimited',
               columns = {{'stream': 'VARCHAR', 'elapsed': 'DOUBLE', 'ending': 'VARCHAR', 'at': 'DOUBLE'}})
GROUP BY stream ORDER BY stream
"""

PEER = """
import duckdb, sys
db = duckdb.connect()
db.execute("SET threads = " + sys.argv[2])
rows = db.execute(sys.argv[1]).fetchall()
assert len(rows) == {streams}
"""


def write(path, lines):
    """Lognormal waits, cut at the 97% point of their stream; one in a hundred fails."""
    draw = random.Random(20251201)
    names = [f"{PATRONS[i % len(PATRONS)]}.{i // len(PATRONS)}" if i >= len(PATRONS) else PATRONS[i] for i in range(STREAMS)]
    medians = [0.002 * 10 ** (3 * i / STREAMS) for i in range(STREAMS)]
    day = 1764547200.0
    with open(path, "w", buffering=1 << 20) as out:
        for number in range(lines):
            i = int(STREAMS * draw.random())
            sigma = 0.5 + 0.01 * i
            z = draw.gauss(0.0, 1.0)
            ending = "done" if draw.random() < 0.99 else "failed"
            if z > 1.881:
                z, ending = 1.881, "gave_up"
            age = medians[i] * 2.718281828459045 ** (sigma * z)
            # A week, in order of time.
            at = day + 604_800.0 * number / lines
            out.write(f'{{"stream":"{names[i]}","elapsed":{age:.6f},"ending":"{ending}","at":{at:.2f}}}\n')


def timed(command):
    """Wall clock and CPU seconds of a process and its children."""
    before = resource.getrusage(resource.RUSAGE_CHILDREN)
    start = time.perf_counter()
    done = subprocess.run(command, stdout=subprocess.DEVNULL, stderr=subprocess.PIPE, text=True)
    wall = time.perf_counter() - start
    after = resource.getrusage(resource.RUSAGE_CHILDREN)
    if done.returncode != 0:
        sys.exit(f"{command[0]} failed: {done.stderr[-2000:]}")
    return wall, after.ru_utime - before.ru_utime + after.ru_stime - before.ru_stime


def main():
    parse = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parse.add_argument("--lines", type=int, default=10_000_000)
    parse.add_argument("--runs", type=int, default=3)
    parse.add_argument("--threads", type=int, default=os.cpu_count())
    parse.add_argument("--outwait", default="target/release/outwait")
    parse.add_argument("--file")
    args = parse.parse_args()
    path = args.file or os.path.join(tempfile.gettempdir(), f"outwait-peers-{args.lines}.ndjson")
    if not os.path.exists(path):
        print(f"writing {path}", flush=True)
        write(path + ".part", args.lines)
        os.rename(path + ".part", path)
    with open(path, "rb") as file:  # into the page cache, for both
        while file.read(1 << 24):
            pass
    def peer(more):
        query = QUERY.format(file=path.replace("'", "''"), more=more)
        return [sys.executable, "-c", PEER.format(streams=STREAMS), query, str(args.threads)]

    sides = {
        "outwait weigh, whole process": [args.outwait, "weigh", "--format", "json", path],
        # Reads the file twice: to advise, and to hold each wait against the advice.
        "outwait audit, whole process": [args.outwait, "audit", "--format", "json", path],
        "DuckDB, five quantiles a stream": peer(""),
        # The quantiles need two of the four fields; this reads them all, as we must.
        "DuckDB, and endings and times": peer(", count_if(ending = 'done'), min(\"at\"), max(\"at\")"),
    }
    found = {name: [] for name in sides}
    for _ in range(args.runs):
        for name, command in sides.items():
            found[name].append(timed(command))
    print(f"{args.lines} lines, {os.path.getsize(path) / 1e6:.0f} MB, {args.threads} threads, least of {args.runs} runs")
    for name, runs in found.items():
        print(f"{name:34} wall {min(w for w, _ in runs):6.2f} s   CPU {min(c for _, c in runs):6.2f} s")


if __name__ == "__main__":
    main()
