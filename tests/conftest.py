"""How hypothesis runs here: `ci` gives the same examples every time, `long` twenty times as many.

Choose by the environment: HYPOTHESIS_PROFILE=long.  There is no deadline in
either, for no test may depend on how quick the machine is.
"""

from __future__ import annotations

import os

from hypothesis import HealthCheck, settings

SLOW = [HealthCheck.too_slow, HealthCheck.data_too_large]

settings.register_profile(
    "ci", derandomize=True, deadline=None, print_blob=True, suppress_health_check=SLOW, max_examples=100
)
settings.register_profile(
    "long", deadline=None, print_blob=True, suppress_health_check=SLOW, max_examples=2000
)
settings.load_profile(os.environ.get("HYPOTHESIS_PROFILE", "ci"))
