"""Tables, maps and progress: what they show, and that they show it the same way every time."""

from __future__ import annotations

import io
from dataclasses import replace
from datetime import datetime
from pathlib import Path
from types import SimpleNamespace

import matplotlib as mpl
import numpy as np
import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.colors import to_rgb
from memory_atlas import atlas, axis, rows

from sweep.compute.progress import KernelsReady, SweepStarted, SweepStopping, TileStored
from sweep.errors import InputError
from sweep.views import figures
from sweep.views.figures import draw_map, save_figure
from sweep.views.limits_table import limits_view
from sweep.views.progress import LineTeller, progress_listener
from sweep.views.sheet import to_text
from sweep.views.tables import info_view, plan_view, plane_view, run_view


def shown(view, width=100):
    return to_text(view, width=width, terminal=False)


# --- tables ------------------------------------------------------------------------------------

HOSTILE = "x [bold]y[/bold] \x1b[31mred\n:smile: $z$"


def two_gains(title="Bench", **more):
    gain = axis("kp", [0.0, 0.5, 1.0], sets="controller.kp", display_unit="V/um")
    damping = axis("damping", [0.01, 0.02], role="tolerance", sets="plant.damping")
    period = axis("sample_period", [0.001, 0.002], unit="s", display_unit="ms")
    values = np.linspace(-0.5, 0.6, 12).reshape(3, 2, 2)
    return atlas([gain, damping, period], values, title=title, **more)


def test_a_text_from_elsewhere_is_shown_as_it_is_and_cannot_steer_the_terminal():
    designs = (SimpleNamespace(name=HOSTILE, values={}),)
    text = shown(info_view(two_gains(HOSTILE, designs=designs).facts()))
    assert "[bold]y[/bold]" in text
    assert ":smile:" in text
    assert "\x1b" not in text


def test_labels_and_units_from_elsewhere_cannot_steer_the_terminal_either():
    unit = rows("unit", [HOSTILE, "b"], {"plant.gain": [1, 2]})
    gain = axis("kp", [0.0, 1.0], sets="controller.kp", display_unit="\x1b[2J")
    asked = atlas([unit, gain], np.zeros((2, 2)) - 1)
    for view in (
        limits_view(asked.limits("kp")),
        limits_view(asked.limits("kp", at={"unit": "b"})),
        plane_view(asked.plane("kp", "unit")),
        info_view(asked.facts()),
    ):
        assert "\x1b" not in shown(view)


def test_a_limits_table_says_units_once_in_its_heads():
    text = shown(limits_view(two_gains().limits("kp")))
    assert "sample_period [ms]" in text
    assert "from [V/um]" in text
    assert "beyond the axis end" in text
    assert "worst over damping 0.01 to 0.02" in text


def ended_by(damping, bus):
    """Gains 1 to 2 are stable; the places given are the worst at the lower and the upper end."""
    gain = axis("kp", [0.0, 1.0, 2.0, 3.0])
    first = axis("damping", [0.01, 0.02], role="tolerance")
    second = axis("bus", [0.0, 1.0], role="tolerance", unit="samples")
    values = np.full((4, 2, 2), -0.2)
    values[0, damping[0], bus[0]] = values[3, damping[1], bus[1]] = 0.2
    return atlas([gain, first, second], values)


def lines_below_ends(text):
    lines = text.splitlines()
    (row,) = [number for number, line in enumerate(lines) if "(1|0)" in line]
    return lines[row + 1].strip()


def test_a_tolerance_that_decides_every_end_is_said_once_and_others_below_each_end():
    text = shown(limits_view(ended_by((1, 1), (0, 1)).limits("kp")))
    assert lines_below_ends(text).split("  ")[0] == "bus 0 samples"
    assert lines_below_ends(text).endswith("bus 1 sample")
    assert "damping 0.02: the worst at every end" in text
    both = shown(limits_view(ended_by((0, 1), (1, 0)).limits("kp")))
    assert lines_below_ends(both).startswith("damping 0.01, bus 1 sample ")
    assert lines_below_ends(both).endswith("damping 0.02, bus 0 samples")
    assert "at every end" not in both


def test_nothing_is_said_to_decide_where_there_is_no_choice():
    asked = ended_by((1, 1), (0, 1))
    alone = asked.limits("kp", at={"bus": 1.0}, over={"damping": 0.02})
    for answer in (asked.limits("kp", nominal=True), alone):
        assert "worst at every end" not in shown(limits_view(answer))
        assert "below" not in shown(limits_view(answer))


def test_a_limits_table_with_deciding_tolerances_keeps_to_the_paper():
    many = [axis(f"tolerance_number_{i}", [1.0, 2.0], role="tolerance") for i in range(3)]
    values = np.full((4, 2, 2, 2), -0.2)
    values[0, 0, 1, 0] = values[3, 1, 0, 1] = 0.2
    asked = atlas([axis("kp", [0.0, 1.0, 2.0, 3.0]), *many], values)
    text = shown(limits_view(asked.limits("kp")), width=108)
    assert max(map(len, text.splitlines())) <= 108
    for name in (one.name for one in many):
        assert text.count(f"{name} 1") == 2, "in the box, and at one of the ends"


def test_the_half_sample_is_mentioned_wherever_a_delay_is_shown_and_only_there():
    delay = axis("bus", [0.0, 1.0], sets="delay.bus", unit="samples", role="tolerance")
    gain = axis("kp", [0.0, 1.0], sets="controller.kp")
    delayed = atlas([delay, gain], np.zeros((2, 2)) - 1)
    document = {"atlas": "x", "nodes": 4, "tiles": 1, "tiles_done": 1, "nodes_computed": 0}
    for asked, expected in ((delayed, True), (two_gains(), False)):
        for text in (
            shown(limits_view(asked.limits("kp"))),
            shown(plan_view(document, asked.grid, "Bench")),
        ):
            assert ("own half sample is in the model already" in text) == expected
    words = texts_of(draw_map(delayed.plane("kp", "bus"))).replace("\n", " ")
    assert "own half sample is in the model already" in words


def test_rows_that_were_left_out_are_counted():
    text = shown(limits_view(two_gains().limits("kp", rows=1)))
    assert "1 of 2 rows" in text
    assert "--rows" in text


def test_an_axis_in_seconds_has_one_unit_for_all_of_it():
    asked = atlas([axis("delay", [1e-6, 1e-5, 1e-3], unit="s")], [-1, -1, 1])
    text = shown(limits_view(asked.limits("delay")))
    assert "from [ms]" in text
    assert "0.001 " in text


def test_a_plan_says_roles_sizes_and_notes():
    document = {
        "atlas": "results/bench.zarr",
        "nodes": 12,
        "tiles": 4,
        "tiles_done": 1,
        "nodes_computed": 9,
        "seconds": 75.0,
        "start_seconds": 8.0,
        "workers": 2,
        "bytes_needed": 8.1e9,
        "bytes_free": 9.3e10,
        "notes": ["design quick lies between nodes"],
    }
    text = shown(plan_view(document, two_gains().grid, "Bench"))
    for piece in ("tolerance", "4, of which 1 are done", "about 1 min 15 s", "8.1 GB", "between"):
        assert piece in text
    assert "will not hold" not in text
    full = plan_view(document | {"fits": False}, two_gains().grid, "Bench")
    assert "will not hold" in shown(full)


@pytest.mark.parametrize(
    ("computed", "done", "first"),
    [(0, 4, "Nothing to do"), (9, 4, "Done"), (6, 3, "Stopped in good order")],
)
def test_a_run_report_begins_with_what_happened(computed, done, first):
    document = {
        "atlas": "results/bench.zarr",
        "tiles": 4,
        "tiles_done": done,
        "nodes_computed": computed,
        "seconds": 2.0,
        "slow_nodes": 1,
        "undecided_nodes": 0,
    }
    assert shown(run_view(document)).startswith(first)


# --- maps --------------------------------------------------------------------------------------


def plane(values=None, **more):
    x = axis("sample_period", np.geomspace(1e-3, 1e-1, 12), unit="s", display_unit="ms")
    y = axis("kp", np.linspace(-1, 1, 9), display_unit="V/um", long_name="proportional gain")
    held = axis("damping", [0.01, 0.02], role="tolerance")
    if values is None:
        values = np.add.outer(np.linspace(-0.3, 0.3, 12), np.linspace(-0.2, 0.2, 9))
    stacked = np.stack([values, values + 1], axis=-1)
    return atlas([x, y, held], stacked, **more).plane("sample_period", "kp")


@pytest.mark.parametrize("ending", ["png", "svg", "pdf"])
def test_the_same_answer_gives_the_same_bytes_whatever_the_settings(tmp_path, ending):
    first, second = tmp_path / f"a.{ending}", tmp_path / f"b.{ending}"
    save_figure(draw_map(plane()), first)
    with mpl.rc_context({"font.size": 31, "axes.facecolor": "red", "savefig.dpi": 20}):
        save_figure(draw_map(plane()), second)
    assert first.read_bytes() == second.read_bytes()


def colours_at(figure, places):
    """RGB of the drawn pixels at data coordinates."""
    canvas = FigureCanvasAgg(figure)
    canvas.draw()
    pixels = np.asarray(canvas.buffer_rgba())
    found = figure.axes[0].transData.transform(places)
    return [pixels[len(pixels) - round(y), round(x), :3] / 255 for x, y in found.tolist()]


def test_what_is_not_stable_looks_unlike_what_is_unknown_and_what_is_stable():
    values = np.full((12, 9), -0.3)
    values[4:8] = 0.3
    values[8:] = np.nan
    figure = draw_map(plane(values))
    places = [(10.0, 0.13), (1.9, 0.13), *((60.0, y) for y in np.linspace(-0.9, 0.9, 60))]
    unstable, stable, *unknown = colours_at(figure, places)
    assert np.allclose(unstable, to_rgb(figures.UNSTABLE), atol=0.01)
    assert np.abs(stable - unstable).max() > 0.2
    assert len({tuple(colour) for colour in unknown}) > 1, "hatched, so of two colours at least"
    assert np.abs(unknown - unstable).max(axis=1).min() > 0.02


def lightness(colour):
    return float(np.dot([0.299, 0.587, 0.114], colour[:3]))


def test_shades_of_what_is_stable_fall_in_lightness_without_a_turn():
    shades = [lightness(figures.DECAY(value)) for value in np.linspace(0, 1, 60)]
    assert (np.diff(shades) < 0).all()
    assert lightness(to_rgb(figures.UNSTABLE)) - shades[0] > 0.05


def texts_of(figure):
    import matplotlib.text

    return " ".join(item.get_text() for item in figure.findobj(matplotlib.text.Text))


def test_a_map_names_units_held_values_roles_boundary_and_cautions():
    words = texts_of(draw_map(plane()))
    for piece in (
        "sample period (ms)",
        "proportional gain, kp (V/um)",
        "damping = 0.01 (tolerance, nominal)",
        "stability boundary",
        "not a safety case",
        "decay time constant",
    ):
        assert piece in words.replace("\n", " ")
    assert "not computed" not in words


def test_an_axis_spaced_by_ratio_is_drawn_by_ratio():
    axes = draw_map(plane()).axes[0]
    assert (axes.get_xscale(), axes.get_yscale()) == ("log", "linear")


def test_the_boundary_lies_where_the_threshold_is_crossed():
    figure = draw_map(plane())
    (line,) = [c for c in figure.axes[0].collections if c.get_label() == "boundary"]
    points = np.concatenate([path.vertices for path in line.get_paths()])
    columns = np.geomspace(1, 100, 12)
    points = points[np.abs(points[:, :1] / columns - 1).min(axis=1) < 1e-9]
    assert len(points) > 10
    x = np.interp(points[:, 0], columns, np.linspace(-0.3, 0.3, 12))
    assert np.abs(x + 0.2 * points[:, 1]).max() < 1e-6


def test_a_named_design_is_marked_in_the_units_of_the_axes():
    designs = (SimpleNamespace(name="quick", values={"sample_period": 0.004, "kp": 0.25}),)
    figure = draw_map(plane(designs=designs))
    (mark,) = [line for line in figure.axes[0].lines if line.get_marker() == "o"]
    assert (mark.get_xdata()[0], mark.get_ydata()[0]) == pytest.approx((4.0, 0.25))
    assert "quick" in texts_of(figure)


@pytest.mark.parametrize("value", [np.nan, -36.0, 0.3])
def test_a_plane_of_one_kind_is_drawn_without_complaint(tmp_path, value):
    save_figure(draw_map(plane(np.full((12, 9), value))), tmp_path / "map.png")


def test_hostile_titles_and_labels_are_drawn_as_they_are(tmp_path):
    unit = rows("unit", ["$x_1", HOSTILE], {"plant.gain": [1, 2]})
    gain = axis("kp", [0.0, 1.0])
    asked = atlas([unit, gain], [[-1, 1], [1, -1]], title=HOSTILE + " 云台")
    save_figure(draw_map(asked.plane("unit", "kp")), tmp_path / "map.svg")


@pytest.mark.parametrize("edge", ["x", "y"])
def test_a_long_axis_name_is_said_once_and_stays_inside_the_picture(edge):
    name = "boards_of_the_second_production_run_2031"
    unit = replace(rows(name, ["a", "b"], {"plant.gain": [1, 2]}), long_name=f"row of {name}")
    long_name = "natural frequency of the second mode of the sensor that was fitted"
    width = axis("a_name_of_forty_letters_as_they_may_have", [1, 2], long_name=long_name)
    asked = atlas([unit, width, axis("kp", [0.0, 1.0])], np.zeros((2, 2, 2)) - 1)
    for long in (name, width.name):
        figure = draw_map(asked.plane(*((long, "kp") if edge == "x" else ("kp", long))))
        canvas = FigureCanvasAgg(figure)
        canvas.draw()
        axes = figure.axes[0]
        label = (axes.xaxis if edge == "x" else axes.yaxis).label
        extent = label.get_window_extent(canvas.get_renderer())
        assert label.get_text().replace(" ", "_").replace("\n", "_").count(long) == 1
        assert min(extent.x0, extent.y0) >= 0
        assert extent.x1 <= figure.bbox.x1
        assert extent.y1 <= figure.bbox.y1


def test_planes_with_a_single_node_on_an_edge_are_drawn(tmp_path):
    asked = atlas([axis("kp", [0.5]), axis("ki", [1.0, 2.0])], [[-1, 1]])
    save_figure(draw_map(asked.plane("kp", "ki")), tmp_path / "map.png")
    assert "1 of 2 computed nodes" in shown(plane_view(asked.plane("kp", "ki")))


def test_a_plane_finer_than_the_picture_is_thinned_and_says_so():
    asked = atlas([axis("kp", np.arange(3100.0)), axis("ki", [1.0, 2.0])], np.zeros((3100, 2)) - 1)
    words = texts_of(draw_map(asked.plane("kp", "ki")))
    assert "one node in 3 of kp is drawn" in words
    assert "of ki is drawn" not in words


def test_a_map_that_cannot_be_written_leaves_nothing_behind(tmp_path):
    folder = tmp_path / "map.png"
    folder.mkdir()
    with pytest.raises(InputError, match="Is a directory"):
        save_figure(draw_map(plane()), folder)
    assert list(tmp_path.iterdir()) == [folder]


# --- progress ----------------------------------------------------------------------------------

STARTED = SweepStarted("Bench", Path("bench.zarr"), 2, 10, 0, 1000, 0)


def stored(done):
    return TileStored((done,), 100, done, 100 * done, 100 * done, 0.5 * done)


def test_plain_progress_is_a_line_every_few_seconds():
    now = iter(np.arange(0, 100, 2.0))
    stream = io.StringIO()
    teller = LineTeller(stream, clock=lambda: next(now))
    for event in (STARTED, KernelsReady(3.0), *map(stored, range(1, 11))):
        teller.notify(event)
    lines = stream.getvalue().splitlines()
    assert lines[0] == "Bench: 10 of 10 tiles to compute, 2 at once"
    assert 2 <= len(lines[1:]) <= 5
    assert all("% " in line and "left" in line for line in lines[1:])


def test_a_run_that_stops_says_why():
    stream = io.StringIO()
    LineTeller(stream).notify(SweepStopping("interrupted"))
    assert "stopping" in stream.getvalue()


def test_a_run_goes_on_when_nobody_reads_its_progress():
    class Gone(io.StringIO):
        def write(self, _text):
            raise BrokenPipeError

    teller = LineTeller(Gone())
    teller.notify(STARTED)
    teller.notify(SweepStopping("until"))


def test_a_terminal_gets_a_bar_and_a_file_gets_lines():
    class Terminal(io.StringIO):
        def isatty(self):
            return True

    screen, paper = Terminal(), io.StringIO()
    for stream in (screen, paper):
        with progress_listener(stream) as listener:
            for event in (
                replace(STARTED, until=datetime(2031, 3, 5, 6, 30), until_in_s=33_120.0),  # noqa: DTZ001
                KernelsReady(3.0),
                stored(4),
                SweepStopping("until"),
                stored(10),
            ):
                listener.notify(event)
    assert "100%" in screen.getvalue()
    assert "1,000 nodes" in screen.getvalue()
    assert "the time is up" in screen.getvalue()
    assert paper.getvalue().startswith("Bench: 10 of 10 tiles")
    for stream in (screen, paper):
        assert "stops by 06:30, in 9 h 12 min" in stream.getvalue()
