"""The README's guide for a robot: after it hobnail runs, after its last part nothing is left.

Its parts "Install" and "Start" have made the board that all tests here run on.
"""

from __future__ import annotations

import pytest

from systemd import guide
from systemd.board import Board

pytestmark = [pytest.mark.systemd, pytest.mark.slow]


def test_first_steps(board: Board) -> None:
    (_, steps) = guide.blocks("Start")
    done = board.run(steps.script, user=steps.user)
    assert "off" in done.stdout
    assert board.state()["state"] == "off"
    assert board.pulsing() == 0


def test_update(board: Board) -> None:
    installed = "/opt/hobnail/lib/python3.11/site-packages/hobnail/__init__.py"
    before = board.file(installed).stat().st_ino
    board.follow("Update")
    assert board.file(installed).stat().st_ino != before
    assert board.state()["state"] == "off"


def test_remove(board: Board) -> None:
    board.follow("Several robots on one board")
    board.follow("Remove")
    left = board.run("find / -xdev -iname '*hobnail*' -not -path '/root/*' -not -path '/proc/*'").stdout
    # The configuration is kept: it is the user's.
    assert sorted(left.split()) == ["/etc/hobnail", "/etc/hobnail@bramble"]
    for question in ("getent passwd hobnail", "getent group hobnail", "systemctl cat hobnail"):
        assert board.run(question, check=False).returncode != 0, question
