"""The benchmark of the kernel works, at a size that takes seconds."""

import json
import runpy
from pathlib import Path

BENCHMARK = Path(__file__).parent / "benchmarks" / "kernel.py"


def test_a_tiny_benchmark_of_the_kernel_gives_its_ratios():
    run_benchmark = runpy.run_path(str(BENCHMARK))["run_benchmark"]
    results = run_benchmark(planes=1, matrices=500, rounds=1)
    assert json.loads(json.dumps(results, allow_nan=False)) == results
    assert [loop["matrix_size"] for loop in results["loops"]] == [4, 8]
    assert all(loop["ratio"] > 1 and loop["bound_largest"] <= 1e-10 for loop in results["loops"])
