"""Hypothesis profiles, and no memo: a test that means to have one makes its own.

The everyday run takes the same examples each time, the profile `explore` new ones.
"""

import os

import pytest
from hypothesis import settings

settings.register_profile("everyday", derandomize=True, deadline=None)
settings.register_profile("explore", derandomize=False, deadline=None)
settings.load_profile(os.environ.get("HYPOTHESIS_PROFILE", "everyday"))

os.environ["SWEEP_MEMO"] = "off"


@pytest.fixture
def memo_is_on(monkeypatch):
    """For tests of the memo itself, each of which says where it is kept."""
    monkeypatch.delenv("SWEEP_MEMO")
