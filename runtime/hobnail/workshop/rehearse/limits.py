"""When a rehearsal passes: bounds in SI units; judges nothing by itself (`measures` does)."""

from __future__ import annotations

import math
from dataclasses import dataclass


@dataclass(frozen=True, slots=True, kw_only=True)
class Limits:
    """When a rehearsal passes.  Speeds may be off by a share of the command or an
    absolute amount, whichever is larger.  Heading may drift by `drift_rad_m`, averaged over
    walks of at least `drift_way_m`: over less than a metre it is chance."""

    error_share: float = 0.05
    speed_error_m_s: float = 0.005
    turn_error_rad_s: float = 0.02
    drift_rad_m: float = math.radians(1.0)
    drift_way_m: float = 1.0
    tilt_rad: float = math.radians(3.0)
