"""Writes the tables beside it: the same 600 invented waits of Fernhollow in every type and codec that is read.

Run with pyarrow (26.0.1 wrote those that lie here): python3 make.py
"""

import json
from datetime import datetime, timedelta, timezone

import pyarrow as pa
import pyarrow.ipc as ipc
import pyarrow.parquet as pq

START = datetime(2026, 11, 28, 23, 0, tzinfo=timezone.utc)
STREAMS = ["catalogue.lookup", "index.search", "courier/city:north"]
ENDINGS = ["done", "done", "done", "failed", "gave_up", "waiting"]
STATUS = {"done": 200, "failed": 500, "gave_up": 499, "waiting": 102}

rows = []
for i in range(600):
    rows.append({
        "stream": STREAMS[i * 7 % 3],
        "milliseconds": 1 + i * i % 4999,
        "ending": ENDINGS[i * 5 % 6],
        "at": START + timedelta(seconds=300 * i, milliseconds=i % 1000),
        "attempt": 1 + i % 2,
        "id": i * 1000,
        "note": None if i % 3 else "x" * (i % 40),
    })


def column(name):
    return [row[name] for row in rows]


def micro(unit="us", zone="UTC"):
    times = pa.array(column("at"), pa.timestamp("us", tz="UTC")).cast(pa.timestamp(unit, tz="UTC"))
    return times if zone else times.cast(pa.timestamp(unit))


seconds = [row["milliseconds"] / 1000 for row in rows]

plain = pa.table({
    "note": column("note"),
    "stream": column("stream"),
    "elapsed": pa.array(seconds, pa.float64()),
    "ending": column("ending"),
    "at": micro(),
    "attempt": pa.array(column("attempt"), pa.int32()),
    "id": pa.array(column("id"), pa.int64()),
})

# Three groups of two hundred rows: 23:00 to 15:40, to 08:20, to 01:00.
for codec in ["none", "snappy", "gzip", "zstd", "lz4"]:
    pq.write_table(plain, f"waits-{codec}.parquet", row_group_size=200, compression=codec)

types = pa.table({
    "stream": pa.array(column("stream"), pa.string()).dictionary_encode(),
    "elapsed": pa.array([row["milliseconds"] * 1_000_000 for row in rows], pa.duration("ns")),
    "ending": pa.array(column("ending"), pa.large_string()),
    "at": micro("ns"),
    "attempt": pa.array(column("attempt"), pa.uint8()),
    "id": pa.array([str(row["id"]) for row in rows], pa.string_view()),
    "note": [[1, 2], None] * 300,
})
pq.write_table(types, "types.parquet", row_group_size=200, version="2.6")

mapped = pa.table({
    "duration_ms": pa.array(column("milliseconds"), pa.int64()),
    "ts": micro("ms", zone=None),
    "service": column("stream"),
    "status": pa.array([STATUS[row["ending"]] for row in rows], pa.int16()),
    "try": pa.array(column("attempt"), pa.decimal128(9, 2)),
    "key": pa.array(column("id"), pa.uint32()),
})
pq.write_table(mapped, "mapped.parquet", row_group_size=200, compression="snappy", data_page_version="2.0")

for name, table, codec in [("waits.arrow", plain, "lz4"), ("types.arrow", types, None)]:
    with ipc.new_file(name, table.schema, options=ipc.IpcWriteOptions(compression=codec)) as writer:
        writer.write_table(table, max_chunksize=200)
with ipc.new_stream("waits.arrows", plain.schema, options=ipc.IpcWriteOptions(compression="zstd")) as writer:
    writer.write_table(plain, max_chunksize=200)

# What cannot be waits: a time as an age, and no age at all.
pq.write_table(pa.table({"stream": ["a"], "elapsed": micro()[:1]}), "wrong-type.parquet")
pq.write_table(pa.table({"stream": ["a"], "elapse": [1.0]}), "no-age.parquet")
# Values that are no waits, one good among them.
pq.write_table(pa.table({
    "stream": ["a", "a", "a", None, "a", "a"],
    "elapsed": [1.5, float("nan"), -1.0, 1.0, None, float("inf")],
    "at": pa.array([1, 2, 3, 4, 5, 6], pa.timestamp("s", tz="UTC")),
}), "bad-rows.parquet")

with open("waits.ndjson", "w") as file:
    for row, age in zip(rows, seconds):
        kept = {key: row[key] for key in ["stream", "ending", "attempt"]}
        at = row["at"].isoformat().replace("+00:00", "Z")
        print(json.dumps(kept | {"elapsed": age, "at": at, "id": str(row["id"])}), file=file)
