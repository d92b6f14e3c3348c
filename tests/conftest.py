"""Hypothesis profiles: the everyday run takes the same examples each time, `explore` new ones."""

import os

from hypothesis import settings

settings.register_profile("everyday", derandomize=True, deadline=None)
settings.register_profile("explore", derandomize=False, deadline=None)
settings.load_profile(os.environ.get("HYPOTHESIS_PROFILE", "everyday"))
