"""Runs kilter and its peers on the same tables in turn and prints medians, spread and ratios."""

import argparse
import json
import os
import pathlib
import resource
import statistics
import subprocess
import sys

import tables

HERE = pathlib.Path(__file__).parent
SOLVERS = ["newton-cg", "lbfgs"]


def run(command, limit, **options):
    """The last line of a command as JSON, and its peak memory in MB; None where it takes too long."""
    try:
        with subprocess.Popen(command, stdout=subprocess.PIPE, text=True, **options) as process:
            out, _ = process.communicate(timeout=limit)
            peak = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss / 1024
    except subprocess.TimeoutExpired:
        process.kill()
        return None, None
    if process.returncode != 0:
        return None, None
    return json.loads(out.strip().splitlines()[-1]), peak


def main():
    arguments = argparse.ArgumentParser(description=__doc__)
    arguments.add_argument("--folder", required=True)
    arguments.add_argument("--bench", required=True, help="the program of `cargo bench -p kilter-fit --bench fit`")
    arguments.add_argument("--kilter", help="the program kilter, for whole commands")
    arguments.add_argument("--runs", type=int, default=5)
    arguments.add_argument("--limit", type=int, default=120, help="seconds for one run of a peer")
    arguments.add_argument("--statsmodels-runs", type=int, default=1)
    arguments.add_argument("cases", nargs="*", default=list(tables.CASES))
    chosen = arguments.parse_args()
    folder = pathlib.Path(chosen.folder).resolve()
    folder.mkdir(parents=True, exist_ok=True)
    for case in chosen.cases:
        if not (folder / f"{case}.toml").exists():
            tables.write(folder, case)
        compare(chosen, folder, case)


def compare(chosen, folder, case):
    environment = os.environ | {"OMP_NUM_THREADS": str(os.cpu_count())}
    archive = str(folder / f"{case}.npz")
    ways = {"kilter": [chosen.bench, str(folder / f"{case}.raw")]}
    ways |= {solver: [sys.executable, str(HERE / "peer.py"), solver, archive] for solver in SOLVERS}
    ways["statsmodels"] = [sys.executable, str(HERE / "peer.py"), "statsmodels", archive]
    times = {way: [] for way in ways}
    reached = {}
    given_up = set()
    for turn in range(chosen.runs):
        for way, command in ways.items():
            if way in given_up or (way == "statsmodels" and turn >= chosen.statsmodels_runs):
                continue
            found, _ = run(command, chosen.limit, env=environment)
            if found is None:
                given_up.add(way)
                continue
            times[way].append(found["seconds"])
            reached[way] = found["log_likelihood"]
    rows, numbers, categories, levels = tables.CASES[case]
    print(f"\n{case}: {rows} rows, {numbers} numbers, levels {levels}, {categories} categories; in memory, errors included")
    ours = statistics.median(times["kilter"])
    for way in ways:
        if way in given_up or not times[way]:
            print(f"  {way:<12} did not finish in {chosen.limit} s")
            continue
        median, low, high = statistics.median(times[way]), min(times[way]), max(times[way])
        apart = abs(reached[way] / reached["kilter"] - 1)
        note = "" if apart < 1e-9 else f"  stopped early: log-likelihood off by {apart:.0e}"
        ratio = "" if way == "kilter" else f"  {median / ours:6.1f} times kilter's time"
        print(f"  {way:<12} {median:8.3f} s ({low:.3f} to {high:.3f}, {len(times[way])} runs){ratio}{note}", flush=True)
    if chosen.kilter:
        whole_command(chosen, folder, case)


def whole_command(chosen, folder, case):
    """The command from a Parquet file to a model file, baseline and all, with its peak memory."""
    seconds = []
    for _ in range(chosen.runs):
        program = [sys.executable, "-c", WATCHED, chosen.kilter, "fit", f"{case}.toml", "-o", f"{case}.model.json"]
        found, _ = run(program, 600, cwd=folder)
        seconds.append(found["seconds"])
    print(f"  whole command from Parquet: {statistics.median(seconds):.3f} s, peak memory {found['peak']:.0f} MB", flush=True)


WATCHED = """
import json, resource, subprocess, sys, time
started = time.perf_counter()
subprocess.run(sys.argv[1:], check=True, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
peak = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss / 1024
print(json.dumps({"seconds": time.perf_counter() - started, "peak": peak}))
"""

if __name__ == "__main__":
    main()
