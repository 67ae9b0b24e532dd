"""Throughput of the engine against the same pathway hand-written in C, interleaved in one run, single thread.

Usage: python tests/benchmarks/throughput.py [--patients 200000] [--rounds 5]. Needs a C compiler. Prints JSON: medians of
paths per CPU-second, ratios to both C programs round by round, the means of all (to be seen to agree), and variance of
incremental net benefit times CPU time, where carrying thresholds over pays. The engine's time includes sampling the
population, moments and occupancy; the C programs' excludes sampling.
"""

from __future__ import annotations

import argparse
import json
import math
import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

from microsim.engine.run import Wants, simulate
from microsim.study.bind import bind
from microsim.study.bound import BoundStudy
from microsim.study.load import load_study

sys.path.insert(0, str(Path(__file__).parent))
from pathway import write_pathway

HERE = Path(__file__).parent
THRESHOLD = 20_000.0
FLAGS = {
    "floor": ["-O3", "-march=native", "-ffp-contract=off"],
    "floor_simd": [
        "-O3",
        "-march=native",
        "-mprefer-vector-width=512",
        "-fno-math-errno",
        "-fno-trapping-math",
        "-fno-signed-zeros",
    ],
}


def compile_c(folder: Path) -> dict[str, Path]:
    """Build both C programs; returns their paths."""
    programs = {}
    for name, flags in FLAGS.items():
        programs[name] = folder / name
        command = ["cc", *flags, "-o", str(programs[name]), str(HERE / f"{name}.c"), "-lm", "-lpthread"]
        subprocess.run(command, check=True)
    return programs


def run_c(program: Path, *, patients: int, seed: int) -> dict[str, object]:
    """One run of a C program, with the net benefit increment of its means."""
    out = subprocess.run([str(program), str(patients), str(seed), "1"], check=True, capture_output=True, text=True)
    result: dict[str, object] = json.loads(out.stdout)
    return result


def increment(qaly: list[float], cost: list[float]) -> float:
    return THRESHOLD * (qaly[1] - qaly[0]) - (cost[1] - cost[0])


def run_engine(study: BoundStudy, *, patients: int, seed: int) -> dict[str, float]:
    """One run of the engine: CPU seconds, means, and the variance of one patient's incremental net benefit."""
    begin = time.process_time()
    record = simulate(study, patients=patients, seed=seed, threads=1, wants=Wants(tallies=False))
    seconds = time.process_time() - begin
    m, names = record.moments, record.layout.outcomes
    at = {name: names.index(name) for name in ("qaly_disc", "cost_disc", "ly", "entries:Hospital")}
    weights = np.array([1.0, -THRESHOLD, -1.0, THRESHOLD])
    return {
        "cpu_seconds": seconds,
        "paths_per_cpu_s": 2 * patients / seconds,
        "inb": increment(list(m.mean[:, at["qaly_disc"]]), list(m.mean[:, at["cost_disc"]])),
        "inb_variance": float(weights @ m.money @ weights),
        **{f"{name}_{arm}": float(m.mean[i, j]) for name, j in at.items() for i, arm in enumerate("AB")},
        **{
            f"{name}_se_{arm}": math.sqrt(m.covariance[j, i, i] / patients)
            for name, j in at.items()
            for i, arm in enumerate("AB")
        },
    }


def redrawn_variance(program: Path, *, patients: int, repeats: int) -> float:
    """Variance of incremental net benefit per patient when thresholds are redrawn, from repeated runs of the C program."""
    values = []
    for seed in range(1000, 1000 + repeats):
        arms = run_c(program, patients=patients, seed=seed)["strategies"]
        assert isinstance(arms, list)
        values.append(increment([a["qaly"] for a in arms], [a["cost"] for a in arms]))
    return statistics.variance(values) * patients


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--patients", type=int, default=200_000)
    parser.add_argument("--rounds", type=int, default=5)
    options = parser.parse_args()
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        programs = compile_c(folder)
        study = bind(load_study(write_pathway(folder / "study")))
        run_engine(study, patients=2000, seed=1)  # compiles or reads the cache
        rounds = []
        for seed in range(1, options.rounds + 1):
            c = {name: run_c(path, patients=options.patients, seed=seed) for name, path in programs.items()}
            rounds.append((run_engine(study, patients=options.patients, seed=seed), c))
        redrawn = redrawn_variance(programs["floor"], patients=2000, repeats=300)
    ours = [r for r, _ in rounds]
    speed = statistics.median(r["paths_per_cpu_s"] for r in ours)
    ratios = {n: [r["paths_per_cpu_s"] / c[n]["paths_per_cpu_s"] for r, c in rounds] for n in programs}
    variance = statistics.mean(r["inb_variance"] for r in ours)
    c_speed = {n: statistics.median(c[n]["paths_per_cpu_s"] for _, c in rounds) for n in programs}
    last, last_c = rounds[-1]
    report = {
        "patients": options.patients,
        "rounds": options.rounds,
        "paths_per_cpu_s": {"engine": round(speed), **{n: round(v) for n, v in c_speed.items()}},
        "ratio_to_floor": round(statistics.median(ratios["floor"]), 3),
        "ratio_to_floor_simd": round(statistics.median(ratios["floor_simd"]), 3),
        "ratio_to_floor_range": [round(min(ratios["floor"]), 3), round(max(ratios["floor"]), 3)],
        "inb_variance_per_patient": {"engine": round(variance), "floor": round(redrawn)},
        "variance_times_cpu_gain": round(redrawn / c_speed["floor"] / (variance / speed), 2),
        "means_of_last_round": {"engine": last, **{n: last_c[n]["strategies"] for n in programs}},
    }
    print(json.dumps(report, indent=2))


if __name__ == "__main__":
    main()
