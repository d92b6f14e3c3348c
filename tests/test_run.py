"""A run computes what is missing, once, and stops in good order."""

import dataclasses
import errno
import json
import os
import signal
import threading
import time
from datetime import datetime, timedelta

import numpy as np
import pytest
import stand_in

from sweep.compute import plan as planning
from sweep.compute import survey as surveying
from sweep.compute.gate import Gate, next_occurrence_s
from sweep.compute.progress import (
    KernelsReady,
    SweepFinished,
    SweepStarted,
    SweepStopping,
    TileStored,
)
from sweep.compute.run import TILES_PER_GRAPH, execute, run_sweep
from sweep.compute.survey import survey_sweep
from sweep.compute.task import TileTask, compute_tile
from sweep.errors import DamagedAtlas, InputError, QuestionError, ResourceError, SweepError
from sweep.store.atlas import create_atlas, open_stored
from sweep.store.shards import TileObjects
from sweep.store.shelf import Shelf
from sweep.vocabulary import MEASURES, MeasureSpec


class Ears:
    """A listener that keeps every event, and may act on one."""

    def __init__(self, act=lambda _event: None):
        self.events = []
        self.act = act

    def notify(self, event):
        self.events.append(event)
        self.act(event)

    def of(self, kind):
        return [event for event in self.events if isinstance(event, kind)]


def run(config, shelf, **options):
    options = {
        "tile_shape": stand_in.SMALL_TILE,
        "compute": stand_in.compute,
        "workers": 2,
    } | options
    return run_sweep(config, shelf, **options)


def test_a_run_equals_a_plain_loop_over_its_tasks(tmp_path):
    config = stand_in.small()
    survey = survey_sweep(config, tmp_path / "loop", stand_in.SMALL_TILE)
    atlas = create_atlas(survey.path, config, stand_in.SMALL_TILE)
    for task in survey.tasks():
        compute_tile(task, survey.spec(stand_in.compute))
    report = run(config, tmp_path / "run")
    assert stand_in.objects_of(report.atlas) == stand_in.objects_of(atlas.path)
    values = open_stored(report.atlas).read("log_radius", [slice(None)] * 5)
    assert np.array_equal(values, stand_in.whole(config))


def test_one_worker_and_two_store_the_same_bytes(tmp_path):
    one, two = (run(stand_in.small(), tmp_path / str(n), workers=n) for n in (1, 2))
    assert stand_in.objects_of(one.atlas) == stand_in.objects_of(two.atlas)
    assert len(stand_in.objects_of(one.atlas)) == 2 * one.tiles


def test_two_tile_shapes_hold_the_same_values(tmp_path):
    kinds = [run(stand_in.small(), tmp_path / str(n), tile_shape=shape) for n, shape in
             enumerate([(5, 16, 2, 2, 3), (13, 7, 3, 1, 2)])]  # fmt: skip
    first, second = (open_stored(k.atlas).read("mode_angle", [slice(None)] * 5) for k in kinds)
    assert np.array_equal(first, second)


def test_a_finished_config_computes_nothing_and_says_so(tmp_path):
    run(stand_in.small(), tmp_path)
    report = run(stand_in.small(), tmp_path, compute=stand_in.must_not_run)
    assert (report.tiles_computed, report.nodes_computed, report.seconds) == (0, 0, 0.0)
    assert report.summary == "Pan head on a mast is complete: nothing to compute"


def test_a_changed_title_is_taken_over_and_nothing_is_computed(tmp_path):
    first = run(stand_in.small(), tmp_path)
    renamed = stand_in.small(("Pan head on a mast", "Pan head, spring"))
    report = run(renamed, tmp_path, compute=stand_in.must_not_run)
    assert report.relabelled
    assert report.atlas == first.atlas
    assert open_stored(report.atlas).title == "Pan head, spring"
    assert len(list(tmp_path.iterdir())) == 1
    assert not run(renamed, tmp_path, compute=stand_in.must_not_run).relabelled


def test_an_atlas_is_found_by_its_id_in_a_folder_of_any_name(tmp_path):
    run(stand_in.small(), tmp_path).atlas.rename(tmp_path / "mine")
    report = run(stand_in.small(), tmp_path, compute=stand_in.must_not_run)
    assert report.atlas == tmp_path / "mine"


def test_only_missing_tiles_are_computed(tmp_path):
    whole = run(stand_in.small(), tmp_path)
    before = stand_in.objects_of(whole.atlas)
    atlas = open_stored(whole.atlas)
    stand_in.drop_tile(atlas, (1, 2, 0, 0, 0))
    stand_in.drop_tile(atlas, (2, 0, 1, 0, 0))
    kernel = stand_in.Recording()
    report = run(stand_in.small(), tmp_path, compute=kernel)
    assert sorted(shape for shape, _ in kernel.calls) == [(3, 16, 1, 2, 3), (5, 11, 2, 2, 3)]
    assert (report.tiles_computed, report.tiles_done) == (2, report.tiles)
    assert report.nodes_computed == 3 * 16 * 6 + 5 * 11 * 12
    assert stand_in.objects_of(whole.atlas) == before


def test_only_the_missing_measure_of_a_tile_is_computed(tmp_path):
    whole = run(stand_in.small(), tmp_path)
    stand_in.drop_tile(open_stored(whole.atlas), (0, 0, 0, 0, 0), ["mode_angle"])
    kernel = stand_in.Recording()
    run(stand_in.small(), tmp_path, compute=kernel)
    assert kernel.calls == [((5, 16, 2, 2, 3), ("mode_angle",))]


def test_a_measure_that_joins_the_config_is_added_to_the_atlas(tmp_path, monkeypatch):
    first = run(stand_in.small(), tmp_path)
    before = stand_in.objects_of(first.atlas)
    monkeypatch.setitem(MEASURES, "swing", MeasureSpec("swing", "dB", "a measure made for a test"))
    wider = dataclasses.replace(stand_in.small(), measures=("log_radius", "mode_angle", "swing"))
    kernel = stand_in.Recording()
    report = run(wider, tmp_path, compute=kernel)
    assert {measures for _, measures in kernel.calls} == {("swing",)}
    assert report.atlas == first.atlas
    after = stand_in.objects_of(first.atlas)
    assert {name: after[name] for name in before} == before
    assert open_stored(report.atlas).complete


def test_an_atlas_whose_measure_has_another_version_is_left_alone(tmp_path, monkeypatch):
    run(stand_in.small(), tmp_path)
    newer = dataclasses.replace(MEASURES["log_radius"], version=2)
    monkeypatch.setitem(MEASURES, "log_radius", newer)
    with pytest.raises(InputError, match="has version 1, this program computes version 2"):
        run(stand_in.small(), tmp_path, compute=stand_in.must_not_run)


def test_a_damaged_atlas_on_the_shelf_stops_the_run(tmp_path):
    (run(stand_in.small(), tmp_path).atlas / "kp" / "zarr.json").unlink()
    with pytest.raises(DamagedAtlas):
        run(stand_in.small(), tmp_path)


def test_the_report_has_the_promised_keys_and_counts(tmp_path):
    document = run(stand_in.small(), tmp_path).to_json()
    assert json.loads(json.dumps(document, allow_nan=False)) == document
    promised = {"atlas", "atlas_id", "physics_id", "seconds", "start_seconds", "nodes_adopted"}
    assert promised <= set(document)
    assert (document["nodes"], document["nodes_computed"]) == (10062, 10062)
    assert (document["tiles"], document["tiles_done"], document["slow_nodes"]) == (18, 18, 18)
    assert document["seconds"] > 0
    assert document["peak_memory_bytes"] is None or document["peak_memory_bytes"] > 10**7
    assert (document["interrupted"], document["stopped_by_until"]) == (False, False)


def test_events_arrive_in_order_and_count_up_to_the_end(tmp_path):
    ears, here = Ears(), []
    ears.act = lambda _event: here.append(threading.current_thread())
    report = run(stand_in.small(), tmp_path, listener=ears)
    kinds = [type(event) for event in ears.events]
    assert kinds == [SweepStarted, KernelsReady, *[TileStored] * 18, SweepFinished]
    stored = ears.of(TileStored)
    assert [event.tiles_done for event in stored] == list(range(1, 19))
    assert stored[-1].nodes_done == stored[-1].nodes_computed == 10062
    assert sum(event.nodes for event in stored) == 10062
    assert ears.of(SweepFinished)[0].report == report
    assert set(here) == {threading.current_thread()}


def test_a_resumed_run_starts_counting_where_the_last_one_ended(tmp_path):
    whole = run(stand_in.small(), tmp_path)
    stand_in.drop_tile(open_stored(whole.atlas), (0, 0, 0, 0, 0))
    ears = Ears()
    run(stand_in.small(), tmp_path, listener=ears)
    started, stored = ears.of(SweepStarted)[0], ears.of(TileStored)[0]
    assert (started.tiles_done, started.nodes_done) == (17, 10062 - 960)
    assert (stored.tiles_done, stored.nodes_done, stored.nodes_computed) == (18, 10062, 960)


def test_a_tile_that_fails_is_named_and_the_others_stay(tmp_path):
    def faulty(structure, parameters, shape, measures):
        kp, kd = parameters["controller.kp"], parameters["controller.kd"]
        if parameters["sample_period"].max() > 0.03 and kp.min() > 1.9 and kd.min() > 0.001:
            raise FloatingPointError("a made-up fault")
        return stand_in.compute(structure, parameters, shape, measures)

    with pytest.raises(SweepError) as caught:
        run(stand_in.small(), tmp_path, compute=faulty)
    message = caught.value.message
    assert "computing tile (2, 2, 1, 0, 0)" in message
    assert "FloatingPointError: a made-up fault" in message
    assert "kp 2 to 3, kd 0.002 to 0.002 s, unit A to bé, bus 0 to 0.5 samples" in message
    assert isinstance(caught.value.__cause__, FloatingPointError)
    (atlas,) = tmp_path.iterdir()
    stored = len(open_stored(atlas).done_tiles("mode_angle"))
    assert f"{stored} tiles of this run are stored" in message
    assert stored > 0
    assert run(stand_in.small(), tmp_path).tiles_computed == 18 - stored


def test_nothing_is_started_after_a_failure(tmp_path):
    kernel = stand_in.Recording(faults={5: FloatingPointError("a made-up fault")})
    with pytest.raises(SweepError):
        run(stand_in.small(), tmp_path, compute=kernel, workers=1)
    assert len(kernel.calls) <= 7


@pytest.mark.parametrize("fault", ["nan", "shape", "type"])
def test_a_kernel_that_breaks_its_promise_stores_nothing(tmp_path, fault):
    def broken(_structure, parameters, shape, measures):
        values = stand_in.values_of(parameters, shape, measures)
        bad = {"nan": values["log_radius"] * np.nan, "shape": values["log_radius"][1:],
               "type": values["log_radius"].astype("f8")}[fault]  # fmt: skip
        return stand_in.Block({**values, "log_radius": bad})

    with pytest.raises(SweepError, match="the kernel returned log_radius"):
        run(stand_in.small(), tmp_path, compute=broken)
    (atlas,) = tmp_path.iterdir()
    assert not open_stored(atlas).done_tiles("log_radius")


def test_a_disk_that_fills_up_stops_the_run_with_a_remedy(tmp_path):
    full = OSError(errno.ENOSPC, "No space left on device")
    with pytest.raises(ResourceError, match="No space left") as caught:
        run(stand_in.small(), tmp_path, compute=stand_in.Recording(faults={3: full}))
    assert "free some disk space" in caught.value.remedy
    assert run(stand_in.small(), tmp_path).complete


def test_a_tile_that_does_not_reach_the_disk_has_failed_and_is_not_done(tmp_path, monkeypatch):
    def lost(_objects, _measure, _index):
        raise OSError(errno.EIO, "Input/output error")

    monkeypatch.setattr(TileObjects, "flush", lost)
    with pytest.raises(SweepError, match="Input/output error"):
        run(stand_in.small(), tmp_path)
    monkeypatch.undo()
    (atlas,) = tmp_path.iterdir()
    assert not open_stored(atlas).done_tiles("log_radius")
    assert run(stand_in.small(), tmp_path).complete


def test_a_shelf_that_cannot_be_made_is_refused(tmp_path, monkeypatch):
    def refuse(*_arguments):
        raise PermissionError(errno.EACCES, "Permission denied")

    monkeypatch.setattr(Shelf, "open_or_create", refuse)
    with pytest.raises(ResourceError, match="preparing the atlas") as caught:
        run(stand_in.small(), tmp_path / "shelf")
    assert "may write" in caught.value.remedy


def test_no_workers_or_an_unfit_tile_write_nothing(tmp_path):
    with pytest.raises(QuestionError):
        run(stand_in.small(), tmp_path / "shelf", workers=0)
    with pytest.raises(QuestionError):
        run(stand_in.small(), tmp_path / "shelf", tile_shape=(3, 3))
    assert list(tmp_path.iterdir()) == []


def test_leftovers_of_killed_runs_are_cleared_away(tmp_path):
    atlas = run(stand_in.small(), tmp_path).atlas
    partial = atlas / "log_radius" / f"c.0.0.0.0.0.{'f' * 32}.partial"
    partial.write_bytes(b"half")
    (tmp_path / f"x.zarr.{'f' * 32}.partial").mkdir()
    run(stand_in.small(), tmp_path, compute=stand_in.must_not_run)
    assert not partial.exists()
    assert list(tmp_path.iterdir()) == [atlas]


def interrupting(times):
    """A listener that interrupts the process when a tile is stored, ``times`` times in all."""

    def act(event):
        nonlocal times
        if isinstance(event, TileStored) and times:
            times -= 1
            signal.raise_signal(signal.SIGINT)

    return Ears(act)


def test_an_interrupt_lets_tiles_in_flight_finish_and_says_how_to_resume(tmp_path):
    before, ears = signal.getsignal(signal.SIGINT), interrupting(1)
    kernel = stand_in.Recording(sleep_s=0.01)
    report = run(stand_in.small(), tmp_path, listener=ears, compute=kernel)
    assert report.interrupted
    assert 1 <= report.tiles_computed <= 4
    assert report.tiles_computed == len(kernel.calls) == len(ears.of(TileStored))
    assert [event.reason for event in ears.of(SweepStopping)] == ["interrupted"]
    assert "run the same config again" in report.summary
    assert signal.getsignal(signal.SIGINT) is before
    assert len(open_stored(report.atlas).done_tiles("mode_angle")) == report.tiles_done
    assert run(stand_in.small(), tmp_path).tiles_computed == 18 - report.tiles_computed


def test_a_second_interrupt_does_not_wait_for_tiles_in_flight(tmp_path):
    calls = []

    def slow_from_the_second_on(*arguments):
        calls.append(arguments)
        time.sleep(0.8 if len(calls) > 1 else 0.0)
        return stand_in.compute(*arguments)

    def act(event):
        if isinstance(event, TileStored):
            signal.raise_signal(signal.SIGINT)
            started.append(time.perf_counter())
            threading.Timer(0.1, os.kill, [os.getpid(), signal.SIGINT]).start()

    started = []
    report = run(stand_in.small(), tmp_path, listener=Ears(act), compute=slow_from_the_second_on)
    assert time.perf_counter() - started[0] < 0.6
    assert report.interrupted
    assert report.tiles_computed == 1
    time.sleep(1.0)
    assert run(stand_in.small(), tmp_path).complete


def test_a_run_outside_the_main_thread_leaves_interrupts_alone(tmp_path):
    before, reports = signal.getsignal(signal.SIGINT), []
    thread = threading.Thread(target=lambda: reports.append(run(stand_in.small(), tmp_path)))
    thread.start()
    thread.join()
    assert reports[0].complete
    assert signal.getsignal(signal.SIGINT) is before


def test_two_runs_of_one_atlas_at_once_are_harmless(tmp_path):
    reference = stand_in.objects_of(run(stand_in.small(), tmp_path / "alone").atlas)
    reports = []

    def start():
        kernel = stand_in.Recording(sleep_s=0.002)
        reports.append(run(stand_in.small(), tmp_path / "both", compute=kernel))

    threads = [threading.Thread(target=start) for _ in range(3)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert len({report.atlas for report in reports}) == 1
    assert all(report.complete for report in reports)
    assert stand_in.objects_of(reports[0].atlas) == reference


def test_until_stops_so_that_tiles_in_flight_end_in_time(tmp_path):
    """Local clock: the deadline lies 3 s ahead, a tile takes 0.3 s, 18 tiles are wanted.

    However long a busy machine takes to start, one tile fits in, and never do all of them.
    """
    deadline = datetime.now() + timedelta(seconds=3)  # noqa: DTZ005
    kernel = stand_in.Recording(sleep_s=0.3)
    ears = Ears()
    monkey = pytest.MonkeyPatch()
    monkey.setattr(planning, "PROBE_S", 0.0)
    with monkey.context():
        report = run(
            stand_in.small(),
            tmp_path,
            until=deadline.time(),
            compute=kernel,
            workers=1,
            listener=ears,
        )
    monkey.undo()
    assert datetime.now() <= deadline + timedelta(seconds=0.2)  # noqa: DTZ005
    assert report.stopped_by_until
    assert not report.interrupted
    assert 1 <= report.tiles_computed <= 9
    assert [event.reason for event in ears.of(SweepStopping)] == ["until"]
    assert run(stand_in.small(), tmp_path).complete


def test_until_that_comes_late_enough_changes_nothing(tmp_path):
    later = datetime.now() + timedelta(minutes=30)  # noqa: DTZ005
    report = run(stand_in.small(), tmp_path, until=later.time())
    assert report.complete
    assert not report.stopped_by_until


def test_until_means_the_next_time_that_the_local_clock_shows_it():
    now = datetime(2031, 3, 4, 22, 15, 30)  # noqa: DTZ001
    for clock, expected in (
        ("06:30", datetime(2031, 3, 5, 6, 30)),  # noqa: DTZ001
        ("22:15", datetime(2031, 3, 5, 22, 15)),  # noqa: DTZ001
        ("22:16", datetime(2031, 3, 4, 22, 16)),  # noqa: DTZ001
    ):
        until = datetime.strptime(clock, "%H:%M").time()  # noqa: DTZ007
        assert next_occurrence_s(until, now.timestamp()) == expected.timestamp()


def test_the_gate_shuts_before_a_tile_would_end_too_late():
    gate = Gate(deadline_s=time.time() + 10, tile_s=1.0)
    assert gate.admits()
    gate.learn(9.0)
    assert not gate.admits()
    assert gate.reason == "until"
    gate.close("interrupted")
    assert gate.reason == "until"


def test_only_a_bounded_number_of_tasks_is_ever_made_ahead():
    made, done, ahead = 0, 0, 0

    def tasks():
        nonlocal made, ahead
        for n in range(3000):
            made += 1
            ahead = max(ahead, made - done)
            yield n

    def on_outcome(_outcome):
        nonlocal done
        done += 1

    execute(tasks(), lambda _task: None, 2, Gate(), on_outcome)
    assert done == 3000
    assert ahead <= TILES_PER_GRAPH


def test_a_probed_tile_is_not_stored(tmp_path):
    survey = survey_sweep(stand_in.flat(), tmp_path, (16, 8))
    task = survey.task(survey.pending[0])
    assert isinstance(task, TileTask)
    result = compute_tile(task, survey.spec(stand_in.compute), store=False)
    assert result.bytes > 0
    assert list(tmp_path.iterdir()) == []


def test_a_run_notes_a_tile_shape_that_makes_very_many_tiles_and_goes_on(tmp_path, monkeypatch):
    monkeypatch.setattr(surveying, "MANY_TILES", 50)
    report = run(stand_in.flat(40, 30), tmp_path, tile_shape=(4, 4))
    assert report.complete
    assert [note for note in report.notes if "80 tiles" in note]
