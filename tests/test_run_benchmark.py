"""The benchmark of a run works, at a size that takes seconds."""

import json
import runpy
from pathlib import Path

BENCHMARK = Path(__file__).parent / "benchmarks" / "run.py"


def test_a_tiny_benchmark_of_a_run_gives_its_ratios():
    main = runpy.run_path(str(BENCHMARK))["main"]
    results = main(["--nodes", "20000", "--large", "40000", "--rounds", "1"])
    assert json.loads(json.dumps(results, allow_nan=False)) == results
    assert results["speed"]["ratio_per_core"] > 0
    assert results["memory"]["ratio"] < 1.3
    assert results["memory"]["runs"][0]["nodes"] == results["speed"]["nodes"]
