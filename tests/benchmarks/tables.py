"""How long tables take to be read and checked, as ratios to what pyarrow takes to read the same files.

    python tests/benchmarks/tables.py [ROWS]
    python tests/benchmarks/tables.py --large [GB]

The goals, for a million parts of 15 columns: from Parquet in the order of pyarrow's own read and one second; from CSV
within three times pyarrow's own read; from a database as its driver allows. Beside each time by the clock stands the
processors' (`cpu`), which others' work lengthens less. Peak memory is that of a process that does
nothing else. `--large` measures CSV files of some 2 GB instead, a long one and a wide one.
"""

from __future__ import annotations

import sqlite3
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from functools import partial
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.csv as pacsv
import pyarrow.parquet as pq

from gainassay.job import Source
from gainassay.tables import parts

COLUMNS = 15
CELLS = 1_500_000
"""Of the block that a large file repeats."""

TITLES = ("MB", "own s", "ours s", "ratio", "more s", "own cpu", "ours cpu", "ratio", "peak GiB")


def table(rows: int, width: int = COLUMNS) -> pa.Table:
    """Parts with a fifth of their figures blank, and columns that nothing reads."""
    rng = np.random.default_rng(2031)

    def figures(low: float, high: float) -> pa.Array:
        values = np.exp(rng.uniform(np.log(low), np.log(high), rows))
        return pa.array([float(f"{value:.4g}") for value in values], mask=rng.random(rows) < 0.2)

    columns = {
        "part": pa.array([f"amp-{number:07d}" for number in rng.permutation(rows)]),
        "a_ol_db_min": figures(80, 100),
        "a_ol_db_typ": figures(100, 130),
        "r_id_min": figures(1e5, 1e6),
        "r_id_typ": figures(1e6, 1e9),
        "r_o_typ": figures(1, 10),
        "r_o_max": figures(10, 100),
    }
    others = {f"other_{place}": figures(1, 100) for place in range(width - len(columns))}
    return pa.table({**columns, **others})


def as_text(cells: pa.ChunkedArray) -> pa.ChunkedArray:
    """Numbers as text."""
    return cells.cast(pa.string())


def seconds(work: Callable[[], object], times: int = 3) -> tuple[float, float]:
    """By the clock, and of all threads' work together; the best of some times."""
    found = []
    for _ in range(times):
        started = time.perf_counter(), time.process_time()
        work()
        found.append((time.perf_counter() - started[0], time.process_time() - started[1]))
    return min(clock for clock, _ in found), min(work for _, work in found)


def peak(path: Path, table: str) -> float:
    """Peak memory [GiB] of a process that loads a table and nothing else."""
    code = (
        "from gainassay.job import Source; from gainassay.tables import parts; "
        f"parts.load(Source('parts', {str(path)!r}, table={table!r}), {{}}); "
        # Unlike getrusage, this leaves out the process that started it.
        "print(*[line.split()[1] for line in open('/proc/self/status') if line.startswith('VmHWM')])"
    )
    done = subprocess.run([sys.executable, "-c", code], check=True, capture_output=True, text=True)
    return int(done.stdout) / 2**20


def print_titles() -> None:
    print(f"{'':18}", *(f"{title:>9}" for title in TITLES))


def print_line(name: str, path: Path, own: tuple[float, float], ours: tuple[float, float], peak: float) -> None:
    clock, work = ours[0] / own[0], ours[1] / own[1]
    figures = (path.stat().st_size / 1e6, own[0], ours[0], clock, ours[0] - own[0], own[1], ours[1], work, peak)
    print(f"{name:18}", *(f"{figure:9.2f}" for figure in figures), flush=True)


def write_large(path: Path, size: int, width: int) -> int:
    """A CSV file of at least so many bytes, whose rows have names of their own and repeat each other's figures."""
    rows = CELLS // width
    block, count = table(rows, width), 0
    with path.open("wb") as file, pacsv.CSVWriter(file, block.schema) as writer:
        while file.tell() < size:
            names = pa.array([f"amp-{(number * 7919) % rows:06d}-{count:06d}" for number in range(rows)])
            writer.write_table(block.set_column(0, "part", names))
            count += 1
    return count * rows


def large(gigabytes: float) -> None:
    """Print what CSV files of that size take, a long one and a wide one."""
    print_titles()
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder, "parts.csv")
        for width in (COLUMNS, 20 * COLUMNS):
            rows = write_large(path, int(gigabytes * 1e9), width)
            own, ours = partial(pacsv.read_csv, path), partial(parts.load, Source("parts", str(path)), {})
            print_line(f"{rows:,} x {width}", path, seconds(own, times=1), seconds(ours, times=1), peak(path, ""))


def main() -> None:
    if sys.argv[1:2] == ["--large"]:
        large(float(sys.argv[2]) if len(sys.argv) > 2 else 2.0)
        return
    rows = int(sys.argv[1]) if len(sys.argv) > 1 else 1_000_000
    with tempfile.TemporaryDirectory() as folder:
        home = Path(folder)
        numbers = table(rows)
        text = pa.table({name: as_text(numbers[name]) for name in numbers.column_names})
        clutter = text.set_column(
            3, "r_id_min", pa.array([f"{n % 977 / 1000} Mohm" if n % 977 else "4k7" for n in range(rows)])
        )
        pq.write_table(numbers, home / "numbers.parquet")
        pq.write_table(text, home / "text.parquet")
        pacsv.write_csv(numbers, home / "numbers.csv", pacsv.WriteOptions(quoting_style="needed"))
        pacsv.write_csv(clutter, home / "units.csv", pacsv.WriteOptions(quoting_style="needed"))
        with sqlite3.connect(home / "numbers.sqlite") as connection:
            marks = ", ".join("?" * numbers.num_columns)
            connection.execute(f"create table parts ({', '.join(numbers.column_names)})")
            columns = [column.to_pylist() for column in numbers.columns]
            connection.executemany(f"insert into parts values ({marks})", zip(*columns, strict=True))

        def driver() -> None:
            with sqlite3.connect(home / "numbers.sqlite") as connection:
                for _ in connection.execute("select * from parts"):
                    pass

        def load(name: str, table: str) -> Callable[[], object]:
            return lambda: parts.load(Source("parts", str(home / name), table=table), {})

        print(f"{rows:,} rows x {numbers.num_columns} columns")
        print_titles()
        for name, own, said in (
            ("numbers.parquet", lambda: pq.read_table(home / "numbers.parquet"), ""),
            ("text.parquet", lambda: pq.read_table(home / "text.parquet"), ""),
            ("numbers.csv", lambda: pacsv.read_csv(home / "numbers.csv"), ""),
            ("units.csv", lambda: pacsv.read_csv(home / "units.csv"), ""),
            ("numbers.sqlite", driver, "parts"),
        ):
            print_line(name, home / name, seconds(own), seconds(load(name, said)), peak(home / name, said))


if __name__ == "__main__":
    main()
