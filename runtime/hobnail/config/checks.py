"""Checks of a configuration that need more than one value: names, wiring, gaits, heights.

Values are in SI units; problems are told at the place in the file where they
can be mended.  Each check skips what is missing, since that is told already.
Whether feet can get where they must is in `hobnail.config.reach`.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from itertools import pairwise
from typing import Any

from hobnail.config.fields import Section, nearest
from hobnail.config.strict_yaml import Listing, Report
from hobnail.config.tables import JOINT_NAMES
from hobnail.motion.gaits import BUILT_IN_GAITS, built_in_gait, fewest_feet_down

ALL_CALL = 0x70
FEWEST_FEET = 2
# Left of a frame for a board's clock being off, so that a pulse never fills it.
FRAME_SHARE = 0.95
PULSE_RATE = (1.0, 100.0)  # us a degree: wide enough for a table's close points


def check_robot(robot: Section, report: Report) -> None:
    """Tell every problem between the values of the sections that could be read."""
    boards = _sections(robot, "boards")
    servos = _sections(robot, "servos")
    legs = _sections(robot, "legs")
    gaits = _sections(robot, "gaits")
    for named in (boards, servos, legs, gaits):
        _check_unique_names(named, report)
    _check_addresses(boards, robot.values.get("supply"), report)
    for servo in servos:
        check_pulse_map(servo, report)
    _check_hips(legs, report)
    _check_wiring(legs, boards, servos, report)
    _check_supply(robot.values.get("supply"), report)
    for gait in gaits:
        _check_gait(gait, legs, report)
    _check_heights(robot, report)


def _sections(robot: Section, key: str) -> list[Section]:
    """The entries of a list that are mappings; all of them where the list itself is good."""
    return list(robot.values.get(key) or ())


def _by_name(sections: Iterable[Section]) -> dict[str, Section]:
    return {section.values["name"]: section for section in sections if "name" in section.values}


def _check_unique_names(sections: Iterable[Section], report: Report) -> None:
    first: dict[str, Section] = {}
    for section in sections:
        name = section.values.get("name")
        if name in first:
            line = first[name].at("name").line
            report.add(section.at("name"), f"{name} again", "each name once", f"The first is in line {line}.")
        elif name:
            first[name] = section


def _check_addresses(boards: Sequence[Section], supply: Section | None, report: Report) -> None:
    taken: dict[tuple[int, int], str] = {}
    for board in boards:
        bus, address = board.values.get("bus"), board.values.get("address")
        if address == ALL_CALL:
            report.add(
                board.at("address"), "0x70", "another address", "All boards answer to 0x70 at power-up."
            )
        elif bus is not None and address is not None:
            if (bus, address) in taken:
                found = f"0x{address:02x} on bus {bus}"
                report.add(
                    board.at("address"), found, "each address once a bus", f"{taken[bus, address]} has it."
                )
            else:
                taken[bus, address] = f"Board {board.values.get('name', '')}".rstrip()
    if supply and (bus := supply.values.get("monitor_bus")) is not None:
        address = supply.values.get("monitor_address", 0x41)
        if (bus, address) in taken:
            found = f"0x{address:02x} on bus {bus}"
            node = supply.at("monitor_address" if "monitor_address" in supply.values else "monitor_bus")
            report.add(node, found, "an address of its own for the monitor", f"{taken[bus, address]} has it.")


def check_pulse_map(section: Section, report: Report) -> None:
    """A pulse map must rise at a plausible rate; one that does not counts as missing from here on."""
    points = section.values.get("pulse_map_deg_us")
    listing = section.at("pulse_map_deg_us")
    if points is None or not isinstance(listing, Listing):
        return
    degrees = [(math.degrees(angle), pulse) for angle, pulse in points]
    for node, ((angle0, pulse0), (angle1, pulse1)) in zip(listing.items[1:], pairwise(degrees), strict=True):
        found = f"{angle0:g} to {angle1:g} deg from {pulse0:g} to {pulse1:g} us"
        if angle1 <= angle0 or pulse1 <= pulse0:
            hint = "For a servo that turns the other way set direction: -1 at its joint."
            report.add(node, found, "points that rise in angle and in pulse", hint)
        elif not PULSE_RATE[0] <= (pulse1 - pulse0) / (angle1 - angle0) <= PULSE_RATE[1]:
            allowed = f"{PULSE_RATE[0]:g} to {PULSE_RATE[1]:g} us a degree"
            report.add(node, found, allowed, "Most servos have 5 to 12.")
        else:
            continue
        section.values.pop("pulse_map_deg_us", None)


def _check_hips(legs: Sequence[Section], report: Report) -> None:
    first: dict[tuple[float, ...], Section] = {}
    for leg in legs:
        hip = leg.values.get("hip_mm")
        if hip is None:
            continue
        if abs(hip[1]) < 0.001:
            found = f"y = {hip[1] * 1000.0:g} mm"
            allowed = "y of at least 1 mm for a left leg, at most -1 mm for a right one"
            report.add(leg.at("hip_mm"), found, allowed, "The side of the hip is the side of the leg.")
        elif hip in first:
            line = first[hip].at("hip_mm").line
            report.add(
                leg.at("hip_mm"), "the place of another hip", "each place once", f"It is in line {line}."
            )
        else:
            first[hip] = leg


def _check_wiring(
    legs: Sequence[Section], boards: Sequence[Section], servos: Sequence[Section], report: Report
) -> None:
    known_boards, known_servos = _by_name(boards), _by_name(servos)
    taken: dict[tuple[str, int], str] = {}
    for leg in legs:
        joints = leg.values.get("joints")
        for name in JOINT_NAMES:
            joint = joints.values.get(name) if joints else None
            if joint is None:
                continue
            check_pulse_map(joint, report)
            servo = _refer(joint, "servo", known_servos, report)
            board = _refer(joint, "board", known_boards, report)
            if servo and board:
                _check_frame(joint, servo, board, report)
            channel = joint.values.get("channel")
            if board is None or channel is None:
                continue
            label = f"{leg.values.get('name', leg.node.path)}.{name}"
            wire = (board.values["name"], channel)
            if wire in taken:
                found = f"channel {channel} of board {wire[0]}"
                report.add(
                    joint.at("channel"), found, "each channel once", f"{taken[wire]} is plugged in there."
                )
            else:
                taken[wire] = label


def _refer(section: Section, key: str, known: dict[str, Section], report: Report) -> Section | None:
    name = section.values.get(key)
    if name is None or not known:
        return None
    if name not in known:
        report.add(section.at(key), f"unknown {key} {name}", " or ".join(known), nearest(name, known))
    return known.get(name)


def _check_frame(joint: Section, servo: Section, board: Section, report: Report) -> None:
    frame_hz = board.values.get("frame_hz")
    if frame_hz is None:
        return
    shortest_s = servo.values.get("shortest_frame_ms", 0.003)
    if 1.0 / frame_hz < shortest_s * (1.0 - 1e-9):
        found = f"{frame_hz:g} Hz, a frame of {1000.0 / frame_hz:g} ms"
        allowed = f"at most {1.0 / shortest_s:g} Hz for servo {servo.values['name']}"
        report.add(
            board.at("frame_hz"), found, allowed, f"It takes a pulse every {shortest_s * 1000.0:g} ms."
        )
    longest_us = FRAME_SHARE * 1e6 / frame_hz
    holder = joint if "pulse_limits_us" in joint.values else servo
    limits = holder.values.get("pulse_limits_us")
    if limits and limits[1] > longest_us:
        found = f"{limits[1]:g} us in a frame of {1e6 / frame_hz:g} us"
        hint = f"Board {board.values['name']} sends {frame_hz:g} frames a second."
        report.add(holder.at("pulse_limits_us"), found, f"at most {longest_us:g} us", hint)


def _check_supply(supply: Section | None, report: Report) -> None:
    if supply is None:
        return
    low, nominal = supply.values.get("low_v"), supply.values.get("nominal_v")
    if low is not None and nominal is not None and low >= nominal:
        report.add(supply.at("low_v"), f"{low:g} V", f"less than nominal_v, {nominal:g} V")


def _check_gait(gait: Section, legs: Sequence[Section], report: Report) -> None:
    name = gait.values.get("name")
    duty, phases = gait.values.get("duty"), gait.values.get("phases")
    hips = [leg.values["hip_mm"] for leg in legs if "hip_mm" in leg.values]
    complete = bool(legs) and len(hips) == len(legs)
    if phases is not None and legs and len(phases) != len(legs):
        allowed = f"{len(legs)}, one for each leg in the order of legs"
        report.add(gait.at("phases"), f"{len(phases)} phases", allowed)
        phases = None
    elif name in BUILT_IN_GAITS and "phases" not in gait.node.entries and complete:
        try:
            pattern = built_in_gait(name, hips)
        except ValueError as error:
            report.add(gait.at("name"), f"{name}: {error}", "a built-in gait that suits the legs, or phases")
        else:
            phases = pattern.phases
            duty = pattern.duty if "duty" not in gait.node.entries else duty
    elif name is not None and (name not in BUILT_IN_GAITS or "phases" in gait.node.entries):
        for key, allowed in (
            ("duty", "the share of the cycle that a foot stands"),
            ("phases", "one phase a leg"),
        ):
            if key not in gait.node.entries:
                report.add(gait.node, "nothing", allowed, _own_numbers_hint(name), key=key)
    if duty is not None and phases is not None:
        fewest = fewest_feet_down(duty, phases)
        if fewest < FEWEST_FEET:
            found = f"a gait that at times leaves {fewest} of {len(phases)} feet down"
            hint = "Raise duty, or set phases further apart."
            report.add(gait.at("duty"), found, f"at least {FEWEST_FEET} feet down at any time", hint)
    _check_swing(gait, report)


def _own_numbers_hint(name: str) -> str:
    """Why a gait of that name must have all its numbers."""
    if name in BUILT_IN_GAITS:
        return f"With phases of its own, {name} needs its own duty; without them, neither."
    hint = f"{nearest(name, dict.fromkeys(BUILT_IN_GAITS))} {', '.join(BUILT_IN_GAITS)} need none.".strip()
    return f"{hint[:1].upper()}{hint[1:]}"


def _check_swing(gait: Section, report: Report) -> None:
    swing: Any = gait.values.get("swing")
    listing = gait.at("swing")
    if swing is None or not isinstance(listing, Listing):
        return
    frames = [frame.values for frame in swing]
    if any(len(frame) < 3 for frame in frames):
        return
    for node, (before, after) in zip(listing.items[1:], pairwise(frames), strict=True):
        if after["time"] <= before["time"]:
            report.add(node, f"time {after['time']:g}", f"more than {before['time']:g}, the one before")
    for index, end in ((0, 0.0), (-1, 1.0)):
        for key, want in (("time", end), ("travel", end), ("lift", 0.0)):
            if frames[index][key] != want:
                place = "first" if index == 0 else "last"
                found, allowed = f"{key} {frames[index][key]:g}", f"{key} {want:g} in the {place} keyframe"
                report.add(swing[index].at(key), found, allowed)
    if max(frame["lift"] for frame in frames) <= 0.0:
        report.add(listing, "no lift at all", "a keyframe with lift above 0", "The foot would drag.")


def _check_heights(robot: Section, report: Report) -> None:
    stance, posture, body = (robot.values.get(key) for key in ("stance", "posture", "body"))
    if stance is None:
        return
    height, rest = stance.values.get("height_mm"), stance.values.get("rest_height_mm")
    span = posture.values.get("height_mm") if posture else None
    if height is not None and span is not None and not span[0] <= height <= span[1]:
        allowed = f"within posture.height_mm, {span[0] * 1000.0:g} to {span[1] * 1000.0:g} mm"
        report.add(stance.at("height_mm"), f"{height * 1000.0:g} mm", allowed)
    if rest is None:
        return
    belly = body.values.get("belly_mm", 0.03) if body else None
    if belly is not None and rest < belly - 1e-9:
        found, allowed = f"{rest * 1000.0:g} mm", f"at least belly_mm, {belly * 1000.0:g} mm"
        report.add(
            stance.at("rest_height_mm"), found, allowed, "The body cannot lie lower than its underside."
        )
    if height is not None and rest >= height:
        found, allowed = f"{rest * 1000.0:g} mm", f"less than height_mm, {height * 1000.0:g} mm"
        report.add(stance.at("rest_height_mm"), found, allowed)
