"""A cheap kernel in place of the real one, small configs, and a run to be killed from outside.

For tests in which it does not matter what the numbers are, only that they are the right ones in the
right places: every node's values follow from its coordinates by elementwise arithmetic.
"""

import os
import sys
import time
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from sweep.config import Config, parse_config
from sweep.vocabulary import MEASURES

SMALL = """
title = "Pan head on a mast"
[plant]
kind = "oscillator"
output_unit = "mrad"
input_unit = "V"
[controller]
kind = "pd"
[delay]
conversion = "12 us"
[axes.sample_period]
start = "0.5 ms"
stop = "50 ms"
count = 13
spacing = "log"
[axes.kp]
start = -1.2
stop = 3.0
step = 0.1
[axes.kd]
values = ["0 ms", "1 ms", "2 ms"]
[axes.unit]
rows = [
  {label = "A", natural_frequency = "45.1 Hz", damping = 0.008},
  {label = "bé", natural_frequency = "47 Hz", damping = 0.01},
]
[axes.bus]
sets = "delay.transport"
values = ["0 samples", "0.25 samples", "0.5 samples"]
nominal = "0.25 samples"
[designs.released]
sample_period = "2 ms"
kp = 0.4
kd = "1 ms"
[cases.normal]
over.bus = ["0 samples", "0.25 samples"]
require.max_decay_time = "80 ms"
"""
SMALL_TILE = (5, 16, 2, 2, 3)
"""Edge tiles on three of the five axes of `SMALL`."""

FLAT = """
title = "Flat"
sample_period = "2 ms"
[plant]
kind = "integrator"
[controller]
kind = "p"
[axes.kp]
start = 0.0
stop = 1.0
count = {kp}
[axes.gain]
start = 1.0
stop = 2.0
count = {gain}
"""


def config(text: str = SMALL, **replaced: str) -> Config:
    """A config from text in which some pieces are replaced by others."""
    for old, new in replaced.items():
        assert old in text
        text = text.replace(old, new)
    return parse_config(text, folder=Path(), source="stand-in")


def small(*changes: tuple[str, str]) -> Config:
    """The small config with changes to its text."""
    return config(SMALL, **dict(changes))


def flat(kp: int = 40, gain: int = 30) -> Config:
    """A two-axis config of the given lengths."""
    return config(FLAT.format(kp=kp, gain=gain))


@dataclass(frozen=True)
class Block:
    """As the kernel returns it."""

    values: dict
    slow_nodes: int = 0
    undecided_nodes: int = 0


def values_of(parameters, shape, measures):
    """Elementwise in every parameter, so that no tiling can change a bit."""
    total = np.zeros(shape)
    for place, path in enumerate(sorted(parameters)):
        total = total + np.sin((place + 1.0) * parameters[path])
    values = {"log_radius": total, "mode_angle": np.where(total > 0, np.pi, np.cos(total))}
    return {name: values.get(name, total * 2).astype(np.float32) for name in measures}


def compute(_structure, parameters, shape, measures):
    """The stand-in kernel."""
    return Block(values_of(parameters, shape, measures), slow_nodes=1)


def must_not_run(*_arguments):
    """A kernel that proves that nothing is computed."""
    raise AssertionError("something was computed")


@dataclass
class Recording:
    """The stand-in kernel with a list of what it was asked, and scripted faults."""

    faults: dict[int, Exception] = field(default_factory=dict)
    calls: list = field(default_factory=list)
    sleep_s: float = 0.0

    def __call__(self, structure, parameters, shape, measures):
        self.calls.append((shape, measures))
        time.sleep(self.sleep_s)
        if (fault := self.faults.get(len(self.calls) - 1)) is not None:
            raise fault
        return compute(structure, parameters, shape, measures)


@dataclass(frozen=True)
class Logged:
    """The stand-in kernel, slowed down, with a line in a file for every tile it starts."""

    log: Path
    sleep_s: float

    def __call__(self, structure, parameters, shape, measures):
        line = os.open(self.log, os.O_WRONLY | os.O_APPEND | os.O_CREAT)
        os.write(line, b"tile\n")
        os.close(line)
        time.sleep(self.sleep_s)
        return compute(structure, parameters, shape, measures)


def whole(config: Config, measure: str = "log_radius"):
    """The values that an atlas of ``config`` must hold, shape of its grid."""
    return values_of(config.grid.parameters(), config.grid.shape, (measure,))[measure]


def write_tile(atlas, tile, values):
    """Store some measures of one tile as a run does."""
    for measure, block in values.items():
        atlas.objects.write(tile, measure, block)


def drop_tile(atlas, index, measures=("log_radius", "mode_angle")):
    """Forget a tile, so that the next run computes it."""
    for measure in measures:
        atlas.objects.drop(measure, index)


def objects_of(folder: Path) -> dict[str, bytes]:
    """Every stored object of every measure, by path relative to the atlas."""
    paths = [p for name in MEASURES for p in folder.glob(f"{name}/c.*")]
    return {str(path.relative_to(folder)): path.read_bytes() for path in paths}


def killed() -> Config:
    """The config of the runs that are killed."""
    return flat(160, 96)


KILLED_TILE = (8, 8)
KILLED_TILES = 240
KILLED_TILE_S = 0.015


def main(shelf: str, log: str, workers: str) -> None:
    """Run `killed` for somebody who means to kill it."""
    from sweep.compute.run import run_sweep

    kernel = Logged(Path(log), KILLED_TILE_S)
    run_sweep(killed(), shelf, workers=int(workers), tile_shape=KILLED_TILE, compute=kernel)


if __name__ == "__main__":
    main(*sys.argv[1:])
