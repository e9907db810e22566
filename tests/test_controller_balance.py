"""Balance of the real controller's slow walks, with pinocchio's centre of mass; m, body and ground frame.

Margins are printed: `pytest -s tests/test_controller_balance.py`.
"""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest

from hobnail.motion.support import stability_margin
from hobnail.robot import Robot
from pinocchio_judge import RobotJudge
from robots import anvil, bramble, juniper, stilt
from walks import Walk, record, to_ground

SLOW = pytest.mark.parametrize(
    ("robot", "gait"),
    [(juniper(), "crawl"), (bramble(), "wave"), (stilt(), "crawl"), (anvil(), "crawl")],
    ids=lambda value: value if isinstance(value, str) else value.name,
)
FORWARD = [(0.1, 0.0, 0.0), (0.3, 0.0, 0.0), (1.0, 0.0, 0.0)]
ANYWHERE = [(-1.0, 0.0, 0.0), (0.0, 1.0, 0.0), (0.0, 0.0, 1.0), (0.6, 0.6, 0.6)]
WARM_UP_S = 3.0


def steady(robot: Robot, gait: str, shares: tuple[float, float, float], *, strong: bool) -> Walk:
    """Eight seconds of that gait; `strong`: with servos that never slow it."""
    walk = Walk(robot)
    walk.controller.gait(gait)
    if strong:
        walk.controller.supply_v = 20.0 * robot.supply.nominal_v
    return walk.walk(*shares).go(round(8.0 / walk.dt_s))


@SLOW
@pytest.mark.parametrize("shares", FORWARD)
def test_body_is_over_the_feet_that_remain_before_a_foot_lifts(
    robot: Robot, gait: str, shares: tuple[float, float, float]
) -> None:
    """Statically, at every lift-off of a crawl, the very first included: the centre of mass, legs
    included, lies inside the polygon of the feet that stay."""
    judge = RobotJudge(robot)
    walk = steady(robot, gait, shares, strong=False)
    margins = []
    for before, after in pairwise(walk.ticks):
        lifts = [now and not then for now, then in zip(before.stance, after.stance, strict=True)]
        if any(lifts):
            com = judge.centre_of_mass(before.joints_rad)
            remain = [
                (foot[0], foot[1])
                for foot, now, lift in zip(before.feet_m, before.stance, lifts, strict=True)
                if now and not lift
            ]
            margins.append(stability_margin(remain, (com[0], com[1])))
    print(
        f"{robot.name} {gait} {shares[0]:.1f} ahead: {len(margins)} lift-offs, margins "
        f"{min(margins) * 1e3:.1f} to {max(margins) * 1e3:.1f} mm"
    )
    assert len(margins) >= 3
    assert min(margins) > 0.002


@SLOW
@pytest.mark.parametrize("shares", FORWARD + ANYWHERE)
def test_zero_moment_point_stays_over_the_feet(
    robot: Robot, gait: str, shares: tuple[float, float, float]
) -> None:
    """In motion, at every tick: p = x - (z/g) x'' (cart on a table; memory) of the centre of
    mass.  Ahead with a margin; a lateral sequence walked backwards is a diagonal one
    (Hildebrand 1965) and may use its margin up."""
    walk = steady(robot, gait, shares, strong=True)
    judge = RobotJudge(robot)
    found = record(walk)
    com = np.array([judge.centre_of_mass(tick.joints_rad) for tick in walk.ticks])
    place = to_ground(walk, com[:, None, :])[:, 0]
    bend = (place[2:] - 2.0 * place[1:-1] + place[:-2]) / walk.dt_s**2
    point = place[1:-1, :2] - place[1:-1, 2:] / 9.81 * bend[:, :2]
    margins = []
    for row in range(round(WARM_UP_S / walk.dt_s), len(point)):
        now = found.stance[row + 1]
        if (found.stance[row] == now).all() and (found.stance[row + 2] == now).all():
            feet = [(float(x), float(y)) for x, y, _ in found.on_ground_m[row + 1][now]]
            margins.append(stability_margin(feet, (float(point[row][0]), float(point[row][1]))))
    print(f"{robot.name} {gait} {shares}: least margin in motion {min(margins) * 1e3:.1f} mm")
    assert min(margins) > (0.005 if shares in FORWARD else -0.007)
