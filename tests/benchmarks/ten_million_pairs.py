"""Ten million pairs end to end, beside a batched numerical nodal solve of a sample of the same pairs.

    python tests/benchmarks/ten_million_pairs.py [STAGES PARTS]

Prints, from one run on one machine: time and peak memory of `gainassay screen` as a process of its own, time of
the numeric screen alone (one and all processors), and the time that a plain batched nodal solve (numpy.linalg.solve)
takes for the same pairs and the same corners, measured on a sample. All data is made up here, from a fixed seed.
"""

from __future__ import annotations

import csv
import random
import resource
import subprocess
import sys
import tempfile
from pathlib import Path
from time import perf_counter

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
import oracle
from gainassay import service
from gainassay.screen import blocks
from gainassay.screen.corners import stage_side

ELEMENTS = {
    "inverting": ["r1", "r2"],
    "non_inverting": ["r1", "r2"],
    "difference": ["r1", "r2", "r3", "r4"],
    "inverting_t": ["r1", "r2", "r3", "r4"],
    "summing_3_in1": ["r1", "r2", "r3", "r_f"],
    "follower": ["r_source"],
    "transimpedance": ["r2"],
    "non_inverting_source": ["r_source", "r1", "r2"],
}
SAMPLE = 300


def write_job(folder: Path, stages: int, parts: int) -> Path:
    """A job with invented tables: every element has a tolerance, every part a limit."""
    rng = random.Random(7)
    columns = sorted({name for names in ELEMENTS.values() for name in names})
    with (folder / "stages.csv").open("w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file)
        writer.writerow(["stage", "topology", *columns, "r_load", "accuracy_ppm", "tol_pct"])
        for index in range(stages):
            topology = rng.choice(list(ELEMENTS))
            ohms = {name: f"{10 ** rng.uniform(3, 5.5):.4g}" for name in ELEMENTS[topology]}
            load, accuracy = rng.choice(["", "10000"]), rng.choice([500, 2000, 5000])
            writer.writerow(
                [f"stage-{index:05d}", topology, *(ohms.get(name, "") for name in columns), load, accuracy, 0.1]
            )
    with (folder / "parts.csv").open("w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file)
        writer.writerow(["part", "a_ol_min", "a_ol_typ", "r_id_min", "r_id_typ", "r_o_typ", "r_o_max"])
        for index in range(parts):
            a_ol, r_id, r_o = 10 ** rng.uniform(3.5, 6.5), 10 ** rng.uniform(5, 10), 10 ** rng.uniform(0.5, 3)
            numbers = [a_ol, 3 * a_ol, r_id, 3 * r_id, r_o / 2, r_o]
            writer.writerow([f"amp-{index:05d}", *(f"{number:.4g}" for number in numbers)])
    job = folder / "job.toml"
    job.write_text('[stages]\nfrom = "stages.csv"\n[parts]\nfrom = "parts.csv"\n', encoding="utf-8")
    return job


def nodal_seconds(prepared: service.Prepared, groups: tuple[blocks.Group, ...]) -> tuple[float, int]:
    """Seconds a pair, and matrices a pair, of a plain nodal solve at the nominal point and at every corner."""
    rng = np.random.default_rng(5)
    seconds = matrices = pairs = 0.0
    for one, stages in zip(groups, prepared.stages.groups, strict=True):
        side = stage_side(one.form, one.box)
        end = np.append(side.first[1:], side.corner_values.shape[1])
        count = max(1, SAMPLE * len(stages.names) // prepared.stages.used())
        for s, p in zip(
            rng.integers(len(stages.names), size=count), rng.integers(len(one.part_names), size=count), strict=True
        ):
            corners = side.corner_values[:, side.first[s] : end[s]].T
            departures = np.array(np.meshgrid([0.0, 1.0], [0.0, 1.0], [0.0, 1.0])).reshape(3, -1)
            ends = prepared.parts.worst[:, p, None] * departures
            values = np.repeat(corners, ends.shape[1], axis=0)
            slope, g_id, r_o = np.tile(ends, len(corners))
            values = np.vstack([one.box.values[:, s], values])
            slope, g_id, r_o = (
                np.insert(column, 0, prepared.parts.nominal[index, p])
                for index, column in enumerate((slope, g_id, r_o))
            )
            ohms = dict(zip(one.form.elements, values.T, strict=True))
            start = perf_counter()
            with np.errstate(divide="ignore"):
                oracle.gains(stages.topology, ohms, [(1.0 / slope, 1.0 / g_id, r_o)])
            seconds += perf_counter() - start
            matrices += len(slope)
            pairs += 1
    return seconds / pairs, round(matrices / pairs)


def main() -> None:
    """Measure and print."""
    stages, parts = (int(argument) for argument in sys.argv[1:3]) if len(sys.argv) > 2 else (2_000, 5_000)
    with tempfile.TemporaryDirectory() as folder:
        job = write_job(Path(folder), stages, parts)
        start = perf_counter()
        subprocess.run([sys.executable, "-m", "gainassay", "screen", str(job)], check=True, capture_output=True)
        whole = perf_counter() - start
        peak = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss / 2**20
        prepared = service.prepare(job)
        groups = service.groups_of(prepared)
        pairs = prepared.stages.used() * len(prepared.parts.names)
        alone = {}
        for workers in sorted({1, service.usable_cores()}):
            start = perf_counter()
            blocks.run(groups, service.rules_of(prepared.job), lambda place, screened: None, workers)
            alone[workers] = perf_counter() - start
        nodal, matrices = nodal_seconds(prepared, groups)
    print(f"pairs                                {pairs:,}")
    print(
        f"gainassay screen, end to end         {whole:.1f} s, {whole / pairs * 1e9:.0f} ns a pair, peak {peak:.2f} GiB"
    )
    for workers, seconds in alone.items():
        print(f"numeric screen alone, {workers} thread(s)    {seconds:.1f} s, {seconds / pairs * 1e9:.0f} ns a pair")
    print(
        f"batched nodal solve, {matrices} matrices a pair   {nodal * 1e9:.0f} ns a pair on a sample; "
        f"all pairs would take {nodal * pairs:.0f} s"
    )
    print(f"nodal solve / numeric screen, 1 thread   {nodal * pairs / alone[1]:.0f}")
    print(f"nodal solve / end to end                 {nodal * pairs / whole:.0f}")


if __name__ == "__main__":
    main()
