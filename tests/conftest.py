"""One profile for all property tests: the same examples in every run, and no clock."""

from __future__ import annotations

import os

from hypothesis import settings

# A run must not fail by the luck of the draw or the load of the machine. HYPOTHESIS_PROFILE=search draws anew.
settings.register_profile("fixed", derandomize=True, deadline=None)
settings.register_profile("search", deadline=None, max_examples=500)
settings.load_profile(os.environ.get("HYPOTHESIS_PROFILE", "fixed"))


def pytest_configure(config):
    """Compile the kernels once, before test workers start: two that compile at once can differ in a last digit."""
    if not hasattr(config, "workerinput") and os.environ.get("NUMBA_DISABLE_JIT", "0") == "0":
        from latticedip.study.batch_worker import warm_up

        warm_up()
