"""A checked config, and what a user asks of a loop: designs, cases and their requirements."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal

from sweep.grid import Grid
from sweep.vocabulary import LoopStructure

Range = tuple[float, float] | tuple[str, ...]
"""Lowest and highest value of a plain axis, or labels of a row axis."""


@dataclass(frozen=True)
class Requirement:
    """One thing that a design must meet at every node of a tolerance box."""

    quantity: str
    """A key of `MEASURES` or `DERIVED`."""
    sense: Literal["max", "min"]
    """Whether the quantity may be at most or at least ``limit``."""
    limit: float
    """In the quantity's unit of the vocabulary."""

    @property
    def name(self) -> str:
        """As it is written in a config, such as ``max_decay_time``."""
        return f"{self.sense}_{self.quantity}"


@dataclass(frozen=True)
class Design:
    """A named set of values, one for each design axis."""

    name: str
    """Its name in the config."""
    values: Mapping[str, float | str] = field(default_factory=dict)
    """By axis name: a coordinate in the axis' unit, or the label of a row."""


@dataclass(frozen=True)
class Case:
    """A named tolerance box with what is required in it."""

    name: str
    """Its name in the config."""
    over: Mapping[str, Range] = field(default_factory=dict)
    """By axis name, for the tolerance axes that it narrows; the others count at full range."""
    requirements: tuple[Requirement, ...] = ()
    """What a design must meet."""


@dataclass(frozen=True, eq=False)
class Config:
    """A config without a mistake in it."""

    title: str
    """For people, and for the atlas' folder name."""
    structure: LoopStructure
    """Which formulas the loop uses."""
    grid: Grid
    """Axes and fixed parameters."""
    designs: tuple[Design, ...]
    """In the order of the config."""
    cases: tuple[Case, ...]
    """In the order of the config."""
    measures: tuple[str, ...]
    """What is computed at every node: always log_radius and mode_angle, then what is named."""
    output_unit: str
    """Unit of the plant's output for people; empty when not given."""
    input_unit: str
    """Unit of the plant's input for people; empty when not given."""
    document: str
    """Canonical text (JSON) from which `config_from_document` makes this config again."""
    notes: tuple[str, ...]
    """Things to tell: designs and case bounds between nodes, and the `include` for each."""
