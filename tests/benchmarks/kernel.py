"""The kernel against batched LAPACK on the same nodes, one thread each; prints JSON.

``python tests/benchmarks/kernel.py`` takes about a minute. LAPACK is given the closed-loop matrices
ready made; the kernel's time contains sampling the plants, realising the controllers, the error
bound, the dominant argument and the slow path of the nodes that need it. The gains are those of
configs/overnight.toml. Both are timed in turn, and the ratio is taken pair by pair.
"""

import os

for _variable in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_variable, "1")

import json
import statistics
import sys
import time
from dataclasses import replace
from pathlib import Path

import numpy as np

from sweep.config import load_config
from sweep.loop.state_space import closed_loop_change
from sweep.measures.radius import compute_radius
from sweep.measures.registry import compile_kernels

CHECKOUT = Path(__file__).resolve().parents[2]
DELAYS = (1.0, 4.3)


def gain_planes(delay_samples: float, planes: int):
    """The overnight config's gains at some of its sample periods and dampings, one total delay."""
    config = load_config(CHECKOUT / "configs" / "overnight.toml")
    axes = {axis.name: axis.coordinates for axis in config.grid.axes}
    structure = replace(config.structure, delay_parts=(("update", "samples"),))
    swept = {
        "sample_period": axes["sample_period"][np.linspace(20, 140, planes).astype(int)],
        "plant.damping": axes["damping"][:planes],
        "controller.kp": axes["kp"],
        "controller.kd": axes["kd"],
    }
    shape = tuple(len(values) for values in swept.values())
    parameters = {
        path: values.reshape([-1 if k == position else 1 for k in range(len(swept))])
        for position, (path, values) in enumerate(swept.items())
    }
    fixed = {parameter.path: parameter.value for parameter in config.grid.fixed}
    fixed["delay.update"] = delay_samples
    for path, value in fixed.items():
        parameters.setdefault(path, np.full([1] * len(swept), value))
    return structure, parameters, shape


def stack_matrices(structure, parameters, shape, count: int):
    """Closed-loop matrices of evenly spread nodes whose state has the common size."""
    chosen = np.linspace(0, np.prod(shape) - 1, count).astype(int)
    matrices = []
    for flat in chosen:
        index = np.unravel_index(flat, shape)
        values = {
            path: float(np.broadcast_to(array, shape)[index]) for path, array in parameters.items()
        }
        change = closed_loop_change(structure, values)
        matrices.append(change + np.eye(len(change)))
    size = max(len(matrix) for matrix in matrices)
    return np.stack([matrix for matrix in matrices if len(matrix) == size])


def timed(function, *arguments) -> float:
    """Processor time of this thread, which other programs on the machine hardly touch."""
    start = time.thread_time()
    function(*arguments)
    return time.thread_time() - start


def compare(delay_samples: float, *, planes: int, matrices: int, rounds: int) -> dict:
    structure, parameters, shape = gain_planes(delay_samples, planes)
    stack = stack_matrices(structure, parameters, shape, matrices)
    block = compute_radius(structure, parameters, shape)
    nodes = block.slow.size
    pairs = [
        (
            nodes / timed(compute_radius, structure, parameters, shape),
            len(stack) / timed(np.linalg.eigvals, stack),
        )
        for _ in range(rounds)
    ]
    ratios = sorted(kernel / lapack for kernel, lapack in pairs)
    return {
        "delay_samples": delay_samples,
        "nodes": nodes,
        "matrix_size": stack.shape[-1],
        "kernel_nodes_per_second": round(statistics.median(kernel for kernel, _ in pairs)),
        "lapack_nodes_per_second": round(statistics.median(lapack for _, lapack in pairs)),
        "ratio": round(statistics.median(ratios), 1),
        "ratio_min_max": [round(ratios[0], 1), round(ratios[-1], 1)],
        "slow_share": float(block.slow.mean()),
        "undecided_share": float(block.undecided.mean()),
        "bound_median": float(np.median(block.bound)),
        "bound_largest": float(block.bound.max()),
    }


def run_benchmark(*, planes: int = 4, matrices: int = 20_000, rounds: int = 9) -> dict:
    structure, _, _ = gain_planes(DELAYS[0], 1)
    start = time.perf_counter()
    compile_kernels(structure)
    compilation = time.perf_counter() - start
    sizes = {"planes": planes, "matrices": matrices, "rounds": rounds}
    return {
        "python": sys.version.split()[0],
        "numpy": np.__version__,
        "compile_or_load_seconds": round(compilation, 2),
        "loops": [compare(delay, **sizes) for delay in DELAYS],
    }


if __name__ == "__main__":
    print(json.dumps(run_benchmark(), indent=2))
