"""Keeping Matplotlib's talk about its own folders out of an answer."""

from __future__ import annotations

import logging
from collections.abc import Iterator
from contextlib import contextmanager


@contextmanager
def without_matplotlib_talk() -> Iterator[None]:
    """Import Matplotlib in here: where it cannot write its folders it works without, unheard."""
    logger = logging.getLogger("matplotlib")
    before = logger.level
    logger.setLevel(logging.ERROR)
    try:
        yield
    finally:
        logger.setLevel(before)
