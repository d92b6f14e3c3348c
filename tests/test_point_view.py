"""What a point says of the delay is the sum of its parts, apart from the samples split off."""

from __future__ import annotations

import json

import numpy as np
import pytest
import stand_in

from sweep.__main__ import main
from sweep.config import parse_config
from sweep.store.atlas import create_atlas

CONFIG = """
title = "Late"
sample_period = "2 ms"
[plant]
kind = "oscillator"
natural_frequency = "40 Hz"
damping = 0.01
[controller]
kind = "p"
[delay]
update = "1 sample"
{bus}
[axes.kp]
values = [0.1, 0.2]
"""


def point(capsys, tmp_path, bus, *options):
    config = parse_config(CONFIG.format(bus=bus), folder=tmp_path, source="test")
    atlas = create_atlas(tmp_path / "late.zarr", config, (2,))
    values = np.array([-0.1, 0.1], np.float32)
    for tile in atlas.tiling:
        stand_in.write_tile(atlas, tile, dict.fromkeys(config.measures, values))
    assert main(["point", "late", "--shelf", str(tmp_path), *options]) == 0
    return capsys.readouterr().out


DELAYS = {
    "": ("1 sample;", "1 whole sample, a further z^1", "z^1 to z^0"),
    'bus = "0.06 ms"': ("1.03 samples;", "2 whole samples, a further z^2", "z^2 to z^0"),
    'bus = "1 sample"': ("2 samples;", "2 whole samples, a further z^2", "z^1 to z^0"),
}


@pytest.mark.parametrize("bus", DELAYS)
def test_a_point_tells_the_delay_apart_from_the_samples_split_off(capsys, tmp_path, bus):
    delay, split, powers = DELAYS[bus]
    lines = point(capsys, tmp_path, bus).splitlines()
    shown = {line[:24].strip(): line[24:].strip() for line in lines if line.startswith("  ")}
    assert shown["delay"].startswith(f"{delay} the hold's own half sample")
    assert shown["split off"].startswith(split)
    assert shown["plant numerator"].startswith(f"{powers}: ")
    assert shown["plant denominator"].startswith("z^2 to z^0: 1, ")
    assert shown["controller numerator"] == "z^0: 0.1"


def test_a_program_is_told_the_delay_as_it_is(capsys, tmp_path):
    found = json.loads(point(capsys, tmp_path, 'bus = "0.06 ms"', "--json"))["computed_now"]
    assert found["delay_samples"] == pytest.approx(1.03, abs=1e-15)
    assert found["coefficients"]["whole_delay"] == 2
    assert len(found["coefficients"]["plant_numerator"]) == 3
