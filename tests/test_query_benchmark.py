"""The benchmark of questions works, at a size that takes seconds."""

import json
import runpy
from pathlib import Path

BENCHMARK = Path(__file__).parent / "benchmarks" / "query.py"


def test_a_tiny_benchmark_of_questions_gives_its_ratios(monkeypatch):
    monkeypatch.setenv("SWEEP_MEMO", "off")
    main = runpy.run_path(str(BENCHMARK))["main"]
    results = main(["--nodes", "20000", "--rounds", "1"])
    assert json.loads(json.dumps(results, allow_nan=False)) == results
    assert results["axes"] == 5
    assert results["robust"]["ratio"] > 0
    assert results["robust"]["peak_memory_bytes"] > 0
    assert results["command"]["judge_ratio"] > 0
    assert results["in_process"]["remembered_robust_slices"] > 0
