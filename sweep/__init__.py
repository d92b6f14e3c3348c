"""Sweep sampled control loops into an atlas of closed-loop eigenvalues, and ask it.

What a notebook needs, loaded when it is first used::

    import sweep

    config = sweep.load_config("configs/first-look.toml")
    print(sweep.plan(config, "results"))
    sweep.run(config, "results")
    atlas = sweep.open_atlas("first-look")
    atlas.limits("kp", at={"sample_period": "5 ms"})
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from sweep.compute.plan import plan_sweep as plan
    from sweep.compute.run import run_sweep as run
    from sweep.config import load_config
    from sweep.query.atlas import open_atlas

__all__ = ["load_config", "open_atlas", "plan", "run"]

_PLACES = {
    "load_config": ("sweep.config", "load_config"),
    "open_atlas": ("sweep.query.atlas", "open_atlas"),
    "plan": ("sweep.compute.plan", "plan_sweep"),
    "run": ("sweep.compute.run", "run_sweep"),
}


def __getattr__(name: str) -> Any:  # noqa: ANN401 - whatever the name stands for
    if name not in _PLACES:
        raise AttributeError(f"module 'sweep' has no attribute {name!r}")
    module, attribute = _PLACES[name]
    return getattr(import_module(module), attribute)


def __dir__() -> list[str]:
    return sorted([*globals(), *__all__])
