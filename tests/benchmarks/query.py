"""What answers cost beside reading the atlas with zarr alone; prints JSON.

``python tests/benchmarks/query.py`` takes some minutes, most of them for sweeping 2e8 nodes first;
``--atlas FOLDER`` asks one that is there. Ratios are taken within one run on one machine, of the
medians of rounds in which the things compared take turns.

- ``robust``: time over that of reading ``log_radius`` once, tile by tile, with zarr alone; and the
  peak memory of a fresh process that asks it.
- ``command``: whole processes, ``sweep judge`` and ``sweep point`` over a bare ``import xarray,
  zarr``.
- ``in_process``: judge, point and a remembered robust over one slice read of the same array with
  zarr alone (two axes in full, the others at one node).
"""

import argparse
import json
import os
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import zarr

import sweep
from sweep.compute.memory import peak_memory_bytes
from sweep.query.atlas import Atlas
from sweep.query.memo import Memo

CHECKOUT = Path(__file__).resolve().parents[2]
TEXT = """
title = "Query benchmark"
[plant]
kind = "oscillator"
natural_frequency = "40 Hz"
[controller]
kind = "pd"
[delay]
update = "1 sample"
[axes.sample_period]
start = "1 ms"
stop = "20 ms"
count = {periods}
spacing = "log"
include = ["2 ms"]
[axes.kp]
start = -1
stop = 1
count = {kp}
include = [-0.5]
[axes.kd]
start = "0 ms"
stop = "6 ms"
count = {kd}
include = ["2 ms"]
[axes.damping]
values = [0.005, 0.01, 0.02, 0.03, 0.05]
[axes.bus]
sets = "delay.bus"
start = "0 samples"
stop = "0.5 samples"
step = "0.1 samples"
[designs.quick]
sample_period = "2 ms"
kp = -0.5
kd = "2 ms"
[cases.normal]
over.damping = [0.005, 0.05]
over.bus = ["0 samples", "0.5 samples"]
require.max_decay_time = "200 ms"
"""


def make_atlas(nodes: int, folder: Path) -> Path:
    """Sweep an atlas of about ``nodes`` nodes over five axes."""
    side = (nodes / 30) ** (1 / 3)
    counts = {"periods": round(side), "kp": round(1.2 * side), "kd": round(side / 1.2)}
    path = folder / "benchmark.toml"
    path.write_text(TEXT.format(**{name: max(2, count) for name, count in counts.items()}))
    return Path(sweep.run(sweep.load_config(path), folder).atlas)


def seconds(work: Callable[[], object]) -> float:
    """How long one call takes."""
    start = time.perf_counter()
    work()
    return time.perf_counter() - start


def take_turns(works: dict[str, Callable[[], object]], rounds: int) -> dict[str, float]:
    """The median time of each, from rounds in which each runs once."""
    times: dict[str, list[float]] = {name: [] for name in works}
    for _ in range(rounds):
        for name, work in works.items():
            times[name].append(seconds(work))
    return {name: statistics.median(found) for name, found in times.items()}


def open_with_zarr(atlas: Atlas, measure: str = "log_radius") -> zarr.Array:
    """A measure as plain zarr opens it, with the fastest of its pipelines."""
    fused = "zarr.core.codec_pipeline.FusedCodecPipeline"
    has_fused = hasattr(zarr.core.codec_pipeline, "FusedCodecPipeline")
    with zarr.config.set({"codec_pipeline.path": fused} if has_fused else {}):
        return zarr.open_array(str(atlas.stored.path / measure), mode="r")


def measure_robust(atlas: Atlas, rounds: int) -> dict:
    """robust over the tolerance axes, nothing remembered, beside reading with zarr alone."""
    array = open_with_zarr(atlas)

    def read() -> None:
        for tile in atlas.stored.tiling:
            array[tile.block]

    def ask() -> None:
        os.environ["SWEEP_MEMO"] = "off"
        sweep.open_atlas(atlas.stored.path).robust(case_of(atlas))
        del os.environ["SWEEP_MEMO"]

    times = take_turns({"read": read, "robust": ask}, rounds)
    return {
        "read_seconds": times["read"],
        "robust_seconds": times["robust"],
        "ratio": times["robust"] / times["read"],
        "peak_memory_bytes": peak_of_a_fresh_process(atlas),
    }


def case_of(atlas: Atlas) -> str:
    """The first case of an atlas."""
    return atlas.stored.cases[0].name


def design_of(atlas: Atlas) -> str:
    """The first design of an atlas."""
    return atlas.stored.designs[0].name


def peak_of_a_fresh_process(atlas: Atlas) -> int:
    """Peak memory of a process that asks robust of the whole atlas once."""
    command = [sys.executable, str(Path(__file__).resolve()), "--once", str(atlas.stored.path)]
    environment = {**os.environ, "PYTHONPATH": str(CHECKOUT), "SWEEP_MEMO": "off"}
    output = subprocess.check_output(command, text=True, cwd=CHECKOUT, env=environment)
    return int(json.loads(output)["peak_memory_bytes"])


def ask_once(folder: str) -> dict:
    """Ask robust in this process and tell its peak memory."""
    atlas = sweep.open_atlas(folder)
    atlas.robust(case_of(atlas))
    return {"peak_memory_bytes": peak_memory_bytes()}


def run_process(command: list[str], environment: dict[str, str]) -> None:
    """A whole process; that a requirement is not met (exit code 1) is an answer as well."""
    done = subprocess.run(command, env=environment, capture_output=True, text=True)
    if done.returncode not in (0, 1) or done.stderr:
        raise RuntimeError(f"{command} ended with {done.returncode}: {done.stderr}")


def measure_commands(atlas: Atlas, rounds: int) -> dict:
    """Whole processes over a bare import."""
    environment = {**os.environ, "PYTHONPATH": str(CHECKOUT)}
    judged = ["--design", design_of(atlas), "--case", case_of(atlas)]

    def process(*arguments: str) -> Callable[[], object]:
        command = [sys.executable, *arguments]
        # 1: a requirement is not met, which is an answer
        return lambda: (
            subprocess.run(command, env=environment, capture_output=True).check_returncode
        )

    folder = str(atlas.stored.path)
    works = {
        "import": process("-c", "import xarray, zarr"),
        "judge": process("-m", "sweep", "judge", folder, *judged),
        "point": process("-m", "sweep", "point", folder, "--design", design_of(atlas)),
    }
    times = take_turns(works, rounds)
    return {
        "import_seconds": times["import"],
        "judge_seconds": times["judge"],
        "point_seconds": times["point"],
        "judge_ratio": times["judge"] / times["import"],
        "point_ratio": times["point"] / times["import"],
    }


def measure_in_process(atlas: Atlas, rounds: int) -> dict:
    """Answers over one slice read."""
    array = open_with_zarr(atlas)
    middle = tuple(n // 2 for n in array.shape)
    design, case = design_of(atlas), case_of(atlas)
    with tempfile.TemporaryDirectory() as folder:
        atlas.memo = Memo(Path(folder))
        atlas.robust(case)
        works = {
            "slice": lambda: array[(slice(None), slice(None), *middle[2:])],
            "judge": lambda: atlas.judge(design, case=case),
            "point": lambda: atlas.point(design=design),
            "remembered_robust": lambda: atlas.robust(case),
        }
        times = take_turns(works, rounds)
    one = times["slice"]
    found = {f"{name}_seconds": value for name, value in times.items()}
    return found | {
        f"{name}_slices": value / one for name, value in times.items() if name != "slice"
    }


def main(arguments: list[str]) -> dict:
    """Measure what the arguments ask for."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--nodes", type=float, default=2e8)
    parser.add_argument("--rounds", type=int, default=5)
    parser.add_argument("--atlas", metavar="FOLDER", help="ask this one instead of sweeping one")
    parser.add_argument("--once", metavar="FOLDER", help="only ask robust of the atlas FOLDER")
    options = parser.parse_args(arguments)
    if options.once:
        return ask_once(options.once)
    with tempfile.TemporaryDirectory() as folder:
        path = Path(options.atlas or make_atlas(int(options.nodes), Path(folder)))
        atlas = sweep.open_atlas(path)
        return {
            "python": sys.version.split()[0],
            "nodes": atlas.grid.size,
            "axes": len(atlas.grid.axes),
            "robust": measure_robust(atlas, options.rounds),
            "command": measure_commands(atlas, options.rounds),
            "in_process": measure_in_process(atlas, options.rounds),
        }


if __name__ == "__main__":
    print(json.dumps(main(sys.argv[1:]), indent=2))
