"""hobnail: gait controller for servo-driven walking robots.

The public face: `load_robot`, `Controller`, `Client` and `errors`.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from hobnail import errors

if TYPE_CHECKING:
    from hobnail.config import load_robot
    from hobnail.controller import Controller, Tick
    from hobnail.service.client import Client

__all__ = ["Client", "Controller", "Tick", "errors", "load_robot"]

_HOMES = {
    "load_robot": "hobnail.config",
    "Controller": "hobnail.controller",
    "Tick": "hobnail.controller",
    "Client": "hobnail.service.client",
}


def __getattr__(name: str) -> object:
    """Import a public name on first use: a client need not load numpy."""
    if name in _HOMES:
        from importlib import import_module

        return getattr(import_module(_HOMES[name]), name)
    raise AttributeError(f"module 'hobnail' has no attribute {name!r}")
