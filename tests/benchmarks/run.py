"""What a run costs beside the kernel, and whether its memory grows with the atlas; prints JSON.

``python tests/benchmarks/run.py`` takes some minutes. Ratios are taken within one run on one
machine; absolute figures say more about the machine than about the program.

- ``ratio_per_core``: speed of a whole run (compute, compress, write) per worker, over that of the
  kernel alone in one thread on the same tiles.
- ``kernel_ratio_per_core``: the same for bare kernel calls in as many threads, with nothing stored:
  what the machine's cores leave each other, and so the most that a run can reach.
- ``processor_ratio``: processor time of the kernel alone over that of the whole run; what other
  programs do at the same time hardly touches it.
- ``memory``: peak memory of a small and a large run, each in a fresh process.
"""

import argparse
import json
import os
import shutil
import subprocess
import sys
import tempfile
import time
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

from sweep.compute.run import run_sweep
from sweep.compute.survey import survey_sweep
from sweep.config import Config, parse_config
from sweep.measures.registry import compile_kernels, compute_block

CHECKOUT = Path(__file__).resolve().parents[2]
TEXT = """
title = "Benchmark of {nodes} nodes"
[plant]
kind = "oscillator"
[controller]
kind = "pd"
[delay]
update = "1 sample"
[axes.sample_period]
start = "1 ms"
stop = "20 ms"
count = {periods}
spacing = "log"
[axes.kp]
start = -0.9
stop = 3.0
count = {kp}
[axes.kd]
start = "-2 ms"
stop = "4 ms"
count = {kd}
[axes.natural_frequency]
values = ["44 Hz", "47 Hz", "50 Hz"]
[axes.damping]
values = [0.005, 0.01, 0.02, 0.05]
"""


def sized_config(nodes: int) -> Config:
    """A config of about ``nodes`` nodes, in the proportions of a night's sweep."""
    side = (nodes / 12 / 4) ** (1 / 3)
    counts = {
        "periods": max(2, round(side)),
        "kp": max(2, round(4 * side)),
        "kd": max(2, round(side)),
    }
    return parse_config(TEXT.format(nodes=nodes, **counts), folder=Path(), source="benchmark")


def kernel_seconds(config: Config, threads: int) -> tuple[float, float]:
    """Time and processor time of the kernel alone over a run's tiles, in a loop or threads."""
    with tempfile.TemporaryDirectory() as nowhere:
        survey = survey_sweep(config, Path(nowhere))

    def compute(task):
        parameters = config.grid.parameters(task.tile.block)
        compute_block(config.structure, parameters, task.tile.shape, task.measures)

    tasks = list(survey.tasks())
    start, processor = time.perf_counter(), time.process_time()
    if threads == 1:
        for task in tasks:
            compute(task)
    else:
        with ThreadPoolExecutor(threads) as pool:
            list(pool.map(compute, tasks))
    return time.perf_counter() - start, time.process_time() - processor


def measure_speed(nodes: int, workers: int, rounds: int) -> dict:
    """Whole run against kernel alone: the best of some rounds, each of all three in turn."""
    config = sized_config(nodes)
    compile_kernels(config.structure)
    alone, threads, runs = [], [], []
    for _ in range(rounds):
        alone.append(kernel_seconds(config, 1))
        threads.append(kernel_seconds(config, workers))
        with tempfile.TemporaryDirectory() as folder:
            processor = time.process_time()
            report = run_sweep(config, folder, workers=workers)
            runs.append((report.seconds, time.process_time() - processor))
    (alone_s, alone_cpu_s), (threads_s, _), (run_s, run_cpu_s) = map(_best, (alone, threads, runs))
    return {
        "nodes": config.grid.size,
        "tiles": report.tiles,
        "workers": workers,
        "rounds": rounds,
        "kernel_seconds": alone_s,
        "kernel_seconds_in_threads": threads_s,
        "run_seconds": run_s,
        "bytes_per_node": report.bytes_written / config.grid.size,
        "slow_nodes": report.slow_nodes,
        "kernel_ratio_per_core": alone_s / threads_s / workers,
        "ratio_per_core": alone_s / run_s / workers,
        "processor_ratio": alone_cpu_s / run_cpu_s,
    }


def _best(times: list[tuple[float, float]]) -> tuple[float, float]:
    return min(wall for wall, _ in times), min(processor for _, processor in times)


def run_once(nodes: int, workers: int, folder: str) -> dict:
    """One run, for the memory that this process needs."""
    report = run_sweep(sized_config(nodes), folder, workers=workers).to_json()
    keys = ("nodes", "tiles", "seconds", "start_seconds", "bytes_written", "peak_memory_bytes")
    return {key: report[key] for key in keys}


def measure_memory(sizes: list[int], workers: int) -> dict:
    """Peak memory of runs of the given sizes, each in a fresh process."""
    runs = []
    environment = {**os.environ, "PYTHONPATH": str(CHECKOUT)}
    for nodes in sizes:
        folder = tempfile.mkdtemp()
        command = [
            sys.executable,
            str(Path(__file__).resolve()),
            "--once",
            folder,
            "--nodes",
            str(nodes),
        ]
        try:
            output = subprocess.check_output(
                [*command, "--workers", str(workers)], text=True, cwd=CHECKOUT, env=environment
            )
        finally:
            shutil.rmtree(folder)
        runs.append(json.loads(output))
    peaks = [run["peak_memory_bytes"] for run in runs]
    return {"runs": runs, "ratio": max(peaks) / min(peaks), "most_bytes": max(peaks)}


def main(arguments: list[str]) -> dict:
    """Measure what the arguments ask for."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--nodes", type=float, default=2e7)
    parser.add_argument("--large", type=float, default=4e8, help="nodes of the large run; 0: none")
    parser.add_argument("--workers", type=int, default=2)
    parser.add_argument("--rounds", type=int, default=3, help="of which the best counts")
    parser.add_argument("--once", metavar="FOLDER", help="only one run into FOLDER")
    options = parser.parse_args(arguments)
    nodes, large = int(options.nodes), int(options.large)
    if options.once:
        return run_once(nodes, options.workers, options.once)
    speed = measure_speed(nodes, options.workers, options.rounds)
    results = {"python": sys.version.split()[0], "speed": speed}
    if large:
        results["memory"] = measure_memory([nodes, large], options.workers)
    return results


if __name__ == "__main__":
    print(json.dumps(main(sys.argv[1:]), indent=2))
