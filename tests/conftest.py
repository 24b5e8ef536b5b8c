"""One profile for all property tests: the same examples in every run, and no clock."""

from __future__ import annotations

import os

from hypothesis import settings

# A run must not fail by the luck of the draw or the load of the machine. HYPOTHESIS_PROFILE=search draws anew.
settings.register_profile("fixed", derandomize=True, deadline=None)
settings.register_profile("search", deadline=None, max_examples=500)
settings.load_profile(os.environ.get("HYPOTHESIS_PROFILE", "fixed"))
