"""A board with hobnail on it: Debian, then the README's install guide, then one boot a test."""

from __future__ import annotations

import shutil
from collections.abc import Iterator
from pathlib import Path

import pytest

from systemd import container, guide
from systemd.board import SOURCE, USER, Board
from systemd.container import Container, Layer

SOURCES = ("pyproject.toml", "README.md", "LICENSE", "runtime", "drivers", "config", "systemd")


@pytest.fixture(scope="session")
def debian() -> Iterator[Path]:
    """A small Debian in a folder, with nothing of hobnail."""
    container.require()
    with container.alone():
        yield container.debian()


@pytest.fixture(scope="session")
def installed(debian: Path) -> Iterator[Layer]:
    """The same with hobnail installed and enabled, by the very lines of the guide.

    Two things are not the guide's: the login that it takes for granted, and a
    drop-in that puts a chip model in the place of the board.
    """
    layer = Layer(debian)
    try:
        for name in SOURCES:
            _copy(guide.REPOSITORY / name, layer.file(f"{SOURCE}/{name}"))
        with Container(layer, throw_away=False) as fresh:
            fresh.run(f"useradd -m {USER}")
            Board(fresh).follow("Install")
            _put_model_in_place(Board(fresh))
            (enable, _) = guide.blocks("Start")
            done = fresh.run(enable.script, check=False)
            assert done.returncode == 0, done.stdout + done.stderr + Board(fresh).journal()
            fresh.power_off()
        yield layer
    finally:
        layer.close()


@pytest.fixture
def board(installed: Layer) -> Iterator[Board]:
    """A board that was just switched on; the service has come up with it.  Nothing done to it stays."""
    with Container(installed, throw_away=True) as booted:
        fresh = Board(booted)
        fresh.wait_active()
        yield fresh


def _copy(source: Path, target: Path) -> None:
    if source.is_dir():
        shutil.copytree(source, target, ignore=shutil.ignore_patterns("__pycache__", "*.egg-info"))
    else:
        target.parent.mkdir(parents=True, exist_ok=True)
        shutil.copy(source, target)


def _put_model_in_place(board: Board) -> None:
    unit = board.file("/etc/systemd/system/hobnail.service").read_text()
    (line,) = (line for line in unit.splitlines() if line.startswith("ExecStart="))
    modelled = line.replace("--driver pca9685", "--driver chip-model:%t/%N/chips.bin")
    assert modelled != line
    for name in ("hobnail", "hobnail@"):
        folder = board.file(f"/etc/systemd/system/{name}.service.d")
        folder.mkdir()
        (folder / "model.conf").write_text(f"[Service]\nExecStart=\n{modelled}\n")
    board.run("systemctl daemon-reload")
