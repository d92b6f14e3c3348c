"""The starters and the configs that come with the project."""

from pathlib import Path

import pytest
from config_text import BASE, problems, read, swap

from sweep.config import STARTERS, Config, config_from_document, load_config, starter_text
from sweep.errors import ConfigError, QuestionError
from sweep.identity import atlas_id

CONFIGS = Path(__file__).parents[1] / "configs"


def is_same(one: Config, other: Config) -> bool:
    ids = [atlas_id(config.structure, config.grid) for config in (one, other)]
    return ids[0] == ids[1] and (one.designs, one.cases) == (other.designs, other.cases)


@pytest.mark.parametrize("name", STARTERS)
def test_a_starter_is_short_sound_and_says_what_the_hold_already_holds(name):
    text = starter_text(name)
    assert len(text.splitlines()) < 40
    assert max(map(len, text.splitlines())) <= 100
    config = read(text)
    assert config.notes == ()
    assert [one.quantity for case in config.cases for one in case.requirements] == ["decay_time"]
    assert config.designs
    delay = text[text.index("[delay]") : text.index("[axes")]
    assert "in the model already" in delay
    assert 1e4 <= config.grid.size <= 1e6


def test_an_unknown_starter_is_a_question_error_that_names_the_known_ones():
    with pytest.raises(QuestionError, match="axis, converter, process"):
        starter_text("rocket")


@pytest.mark.parametrize(
    ("name", "least", "most"),
    [("first-look", 1e6, 3e6), ("overnight", 1e9, 1.15e9), ("lc-filter", 1e5, 1e6)],
)
def test_a_demo_config_has_its_nodes_and_asks_at_nodes_only(name, least, most):
    config = load_config(CONFIGS / f"{name}.toml")
    assert least <= config.grid.size <= most
    assert config.notes == ()
    assert len(config.designs) >= 2
    assert len(config.cases) >= 2
    assert all(case.requirements for case in config.cases)
    assert max(len(config.grid.axis(n)) for n in config.grid.names if n in ("kp", "kd")) >= 64


@pytest.mark.parametrize("path", sorted(CONFIGS.glob("*.toml")), ids=lambda path: path.stem)
def test_the_canonical_text_makes_the_same_config_again(path):
    config = load_config(path)
    again = config_from_document(config.document)
    assert is_same(again, config)
    assert again.document == config.document


def test_the_canonical_text_keeps_numbers_that_no_float_holds():
    config = read(swap(("kp = 0.2", "kp = 0.1999999999999999999999999999999999999")))
    assert '"0.1999999999999999999999999999999999999"' in config.document
    assert is_same(config_from_document(config.document), config)


def test_an_altered_canonical_text_is_refused_like_a_config():
    document = read(BASE).document.replace('"0.02"', '"-0.02"')
    with pytest.raises(ConfigError, match=r"axes\.damping\.values"):
        config_from_document(document)


def test_parameters_are_given_exactly_once():
    fixed_and_swept = swap(('kd = "1 ms"', 'kd = "1 ms"\nkp = 0.2'))
    assert "controller.kp exactly once" in problems(fixed_and_swept)["axes.kp"].expected
    missing = swap(('kd = "1 ms"\n', ""))
    assert "[axes.kd]" in problems(missing)["controller.kd"].remedy


def test_a_near_miss_is_named_and_not_called_missing_as_well():
    found = problems(swap(("natural_frequency =", "natural_freqency =")))
    assert list(found) == ["plant.natural_freqency"]
    assert found["plant.natural_freqency"].remedy == '"natural_frequency" was probably meant'


def test_an_unknown_kind_is_the_only_mistake_of_its_section():
    assert list(problems(swap(('"oscillator"', '"oscilator"')))) == ["plant.kind"]


def test_code_period_is_structure_when_given_and_a_parameter_then():
    assert not read(BASE).structure.has_code_period
    config = read(swap(('kd = "1 ms"\n', 'kd = "1 ms"\ncode_period = "2 ms"\n')))
    assert config.structure.has_code_period
    assert "controller.code_period" in config.grid.paths()
    swept = read(swap(("[designs", "[axes.code_period]\nvalues = [0.002]\n\n[designs"),
                      ("kp = 0.2", "kp = 0.2\ncode_period = 0.002")))  # fmt: skip
    assert swept.structure.has_code_period


def test_an_axis_called_delay_is_a_delay_part_of_that_name():
    config = read(swap(("[designs", "[axes.delay]\nvalues = [0, '1 ms']\n\n[designs")))
    assert config.grid.axis("delay").sets == ("delay.delay",)
    assert config.structure.delay_parts == (("delay", "s"), ("update", "samples"))


@pytest.mark.parametrize(
    ("value", "unit", "stored"),
    [
        ("0", "s", 0.0),
        ("1e-5", "s", 1e-5),
        ('"12 us"', "s", 1.2e-5),
        ('"0 samples"', "samples", 0.0),
        ('"1.5 samples"', "samples", 1.5),
    ],
)
def test_a_delay_part_keeps_the_unit_it_is_given_in_and_a_bare_one_is_seconds(value, unit, stored):
    config = read(swap(('"1 sample"', value)))
    assert config.structure.delay_parts == (("update", unit),)
    assert {one.path: one.value for one in config.grid.fixed}["delay.update"] == stored


def test_one_delay_part_has_one_unit():
    axis = '[axes.bus]\nsets = "delay.bus"\nvalues = [0, "1 us", "1 sample"]\n\n[designs'
    found = problems(swap(("[designs", axis)))
    assert "one delay part has one unit" in found["axes.bus.values[2]"].expected
