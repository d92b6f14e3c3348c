"""`kill -9` of a real run, at random moments: at most the tiles in flight are lost, and no bit."""

import os
import random
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
import stand_in

from sweep.compute.run import run_sweep
from sweep.store.atlas import open_stored
from sweep.store.shelf import Shelf

WORKERS = 2
TILES = stand_in.KILLED_TILES


def start(shelf, log):
    """A run in a process of its own, which writes a line to ``log`` for each tile it starts."""
    here = Path(stand_in.__file__).resolve()
    paths = [str(here.parents[1]), os.environ.get("PYTHONPATH", "")]
    environment = {**os.environ, "PYTHONPATH": os.pathsep.join(filter(None, paths))}
    return subprocess.Popen(
        [sys.executable, str(here), str(shelf), str(log), str(WORKERS)], env=environment
    )


def stored_tiles(shelf):
    """Tiles of which every object is there; 0 when there is no atlas yet."""
    entries = Shelf(shelf).list()
    return int(open_stored(entries[0].path).tiles_done().sum()) if entries else 0


def kill_after(shelf, log, tiles, draw):
    """Start a run and kill it at a random moment once ``tiles`` tiles are stored; tiles by then."""
    process = start(shelf, log)
    try:
        while process.poll() is None and stored_tiles(shelf) < tiles:
            time.sleep(0.001)
        time.sleep(draw.uniform(0.0, 2 * stand_in.KILLED_TILE_S))
    finally:
        process.kill()
        process.wait()
    assert process.returncode == -signal.SIGKILL
    return stored_tiles(shelf)


def check_kills(tmp_path, kills, seed):
    shelf, log, draw = tmp_path / "killed", tmp_path / "log", random.Random(seed)
    done = 0
    for left in range(kills, 0, -1):
        furthest = done + (TILES - done - 20) // left
        now = kill_after(shelf, log, draw.randint(done + 1, max(done + 1, furthest)), draw)
        assert done < now < TILES
        done = now
    last = stand_in.Recording()
    report = run_sweep(stand_in.killed(), shelf, workers=WORKERS, compute=last)
    started = len(log.read_text().splitlines()) + len(last.calls)
    assert report.complete
    assert report.tiles_computed == TILES - done
    assert TILES <= started <= TILES + kills * WORKERS
    calm = run_sweep(
        stand_in.killed(),
        tmp_path / "calm",
        tile_shape=stand_in.KILLED_TILE,
        compute=stand_in.compute,
    )
    assert stand_in.objects_of(report.atlas) == stand_in.objects_of(calm.atlas)
    assert not list(shelf.rglob("*.partial"))


def test_three_kills_lose_at_most_the_tiles_in_flight_and_change_no_bit(tmp_path):
    check_kills(tmp_path, kills=3, seed=time.time_ns())


@pytest.mark.long
def test_twenty_kills_lose_at_most_the_tiles_in_flight_and_change_no_bit(tmp_path):
    check_kills(tmp_path, kills=20, seed=time.time_ns())


def test_a_real_interrupt_ends_a_run_in_good_order(tmp_path):
    process = start(tmp_path / "shelf", tmp_path / "log")
    while stored_tiles(tmp_path / "shelf") < 3:
        time.sleep(0.005)
    process.send_signal(signal.SIGINT)
    assert process.wait(timeout=20) == 0
    stored = stored_tiles(tmp_path / "shelf")
    assert len((tmp_path / "log").read_text().splitlines()) == stored < TILES
