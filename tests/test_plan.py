"""The plan says what a run would do, and does nothing."""

import json

import pytest
import stand_in

from sweep.compute import plan as planning
from sweep.compute.plan import checked_workers, plan_sweep
from sweep.compute.run import run_sweep
from sweep.compute.survey import Survey, pending_nodes, survey_sweep
from sweep.errors import QuestionError, ResourceError
from sweep.grid import Tiling


def planned(config, shelf, **options):
    return plan_sweep(config, shelf, compute=stand_in.compute, **options)


def test_a_plan_writes_nothing(tmp_path):
    plan = planned(stand_in.small(), tmp_path / "shelf")
    assert list(tmp_path.iterdir()) == []
    assert plan.atlas.parent == tmp_path / "shelf"


def test_a_plan_counts_nodes_and_tiles_before_and_after_a_run(tmp_path):
    config = stand_in.small()
    before = planned(config, tmp_path, tile_shape=stand_in.SMALL_TILE)
    run_sweep(config, tmp_path, tile_shape=stand_in.SMALL_TILE, compute=stand_in.compute)
    after = plan_sweep(config, tmp_path, compute=stand_in.must_not_run)
    assert (before.nodes, before.tiles) == (after.nodes, after.tiles) == (10062, 18)
    assert (before.tiles_done, before.nodes_computed) == (0, 10062)
    assert (after.tiles_done, after.nodes_computed) == (18, 0)
    assert (before.complete, after.complete) == (False, True)
    assert (after.seconds, after.bytes_needed, after.tile_shape) == (0.0, 0, stand_in.SMALL_TILE)
    assert before.atlas == after.atlas


def test_time_and_disk_are_estimated_from_measured_tiles(tmp_path):
    kernel = stand_in.Recording(sleep_s=0.01)
    config = stand_in.flat(64, 64)
    plan = plan_sweep(config, tmp_path, tile_shape=(8, 8), workers=1, compute=kernel)
    assert len(kernel.calls) > 1
    assert 0.01 < plan.tile_seconds < 0.1
    assert plan.seconds == pytest.approx(64 * plan.tile_seconds)
    report = run_sweep(config, tmp_path, tile_shape=(8, 8), compute=stand_in.compute)
    assert report.bytes_written <= plan.bytes_needed <= 1.3 * report.bytes_written


def test_a_slow_tile_is_measured_alone(tmp_path, monkeypatch):
    monkeypatch.setattr(planning, "PROBE_S", 0.02)
    kernel = stand_in.Recording(sleep_s=0.03)
    plan_sweep(stand_in.flat(64, 64), tmp_path, tile_shape=(8, 8), compute=kernel)
    assert len(kernel.calls) == 1


def test_without_measuring_the_disk_space_is_the_most_it_can_be(tmp_path):
    config = stand_in.flat(64, 64)
    plan = plan_sweep(
        config, tmp_path, tile_shape=(8, 8), measure_time=False, compute=stand_in.must_not_run
    )
    assert (plan.seconds, plan.tile_seconds, plan.start_seconds) == (None, None, None)
    assert plan.bytes_needed > 64 * 64 * 2 * 4


def test_the_plans_document_has_the_promised_keys_and_is_clean_json(tmp_path):
    document = planned(stand_in.small(), tmp_path).to_json()
    promised = {"atlas", "atlas_id", "physics_id", "nodes", "tiles", "tiles_done", "nodes_computed"}
    promised |= {"nodes_adopted", "seconds", "start_seconds"}
    assert promised <= set(document)
    assert json.loads(json.dumps(document, allow_nan=False)) == document
    assert [axis["role"] for axis in document["axes"]] == [
        "design", "design", "design", "tolerance", "tolerance",
    ]  # fmt: skip
    assert document["axes"][3]["nominal"] == "A"
    assert document["nodes_adopted"] == 0


def test_designs_between_nodes_are_among_the_notes(tmp_path):
    config = stand_in.small()
    assert config.notes
    assert set(config.notes) <= set(planned(config, tmp_path).notes)


def test_an_atlas_keeps_its_tile_shape_and_the_plan_says_so(tmp_path):
    run_sweep(stand_in.flat(), tmp_path, tile_shape=(16, 8), compute=stand_in.compute)
    plan = planned(stand_in.flat(), tmp_path, tile_shape=(4, 4))
    assert plan.tile_shape == (16, 8)
    assert any("keeps the tile shape 16x8" in note for note in plan.notes)


def test_a_plan_that_the_disk_will_not_hold_says_so_and_the_run_refuses(tmp_path, monkeypatch):
    monkeypatch.setattr(planning, "bytes_free", lambda _folder: 1000)
    assert not planned(stand_in.small(), tmp_path).fits
    with pytest.raises(ResourceError, match="GB are free") as caught:
        run_sweep(stand_in.small(), tmp_path / "shelf", compute=stand_in.compute)
    assert "another disk" in caught.value.remedy
    assert list(tmp_path.iterdir()) == []


def test_a_disk_that_holds_it_only_compressed_is_enough(tmp_path, monkeypatch):
    config = stand_in.flat(64, 64)
    needed = planned(config, tmp_path, tile_shape=(64, 64)).bytes_needed
    most = plan_sweep(config, tmp_path, tile_shape=(64, 64), measure_time=False).bytes_needed
    assert needed < most
    monkeypatch.setattr(planning, "bytes_free", lambda _folder: needed)
    report = run_sweep(config, tmp_path, tile_shape=(64, 64), compute=stand_in.compute)
    assert report.complete


@pytest.mark.parametrize("workers", [0, -2])
def test_less_than_one_worker_is_refused(workers):
    with pytest.raises(QuestionError, match="at least 1 is needed"):
        checked_workers(workers)


def test_nodes_of_pending_tiles_are_counted_without_making_tiles():
    tiling = Tiling((13, 43, 3), (5, 16, 2))
    pending = survey_of(tiling)
    expected = sum(tile.size for n, tile in enumerate(tiling) if n % 3)
    assert pending_nodes(tiling, pending) == expected


def survey_of(tiling):
    import numpy as np

    return np.array([n for n in range(len(tiling)) if n % 3])


def test_the_work_of_a_hundred_thousand_tiles_is_made_one_by_one(tmp_path):
    config = stand_in.flat(1000, 1000)
    survey = survey_sweep(config, tmp_path, (3, 3))
    assert isinstance(survey, Survey)
    assert len(survey.tiling) == 111_556
    assert survey.pending.nbytes == 8 * len(survey.tiling)
    tasks = survey.tasks()
    assert next(tasks).tile.index == (0, 0)
    assert next(tasks).tile.index == (0, 1)
    assert survey.pending_nodes == 1_000_000


def test_a_tile_shape_that_makes_very_many_tiles_is_noted_and_allowed(tmp_path):
    grid = stand_in.flat(400, 300)
    many = survey_sweep(grid, tmp_path, (1, 1))
    assert "120,000 tiles" in many.notes[0]
    usual = survey_sweep(grid, tmp_path)
    shape = "x".join(map(str, usual.shards.tile_shape))
    assert f"{shape} makes {len(usual.tiling)} " in many.notes[0]
    assert survey_sweep(grid, tmp_path, (2, 1)).notes == ()
    assert usual.notes == ()
