"""steerkit: steering for differential-drive robots under a plain Python loop. See the README; names load when first used."""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from steerkit.controller import Controller as Controller
    from steerkit.platforms import Platform as Platform
    from steerkit.signals import Causes as Causes
    from steerkit.signals import Command as Command
    from steerkit.signals import Decision as Decision
    from steerkit.signals import Frame as Frame
    from steerkit.signals import Measurement as Measurement
    from steerkit.signals import Memory as Memory
    from steerkit.signals import Motion as Motion
    from steerkit.signals import Phase as Phase
    from steerkit.signals import Pose as Pose
    from steerkit.signals import Report as Report
    from steerkit.signals import Slowing as Slowing
    from steerkit.signals import Wheels as Wheels

HOMES = {
    "Controller": "controller",
    "Platform": "platforms",
    "Causes": "signals",
    "Command": "signals",
    "Decision": "signals",
    "Frame": "signals",
    "Measurement": "signals",
    "Memory": "signals",
    "Motion": "signals",
    "Phase": "signals",
    "Pose": "signals",
    "Report": "signals",
    "Slowing": "signals",
    "Wheels": "signals",
}

__all__ = [
    "Causes",
    "Command",
    "Controller",
    "Decision",
    "Frame",
    "Measurement",
    "Memory",
    "Motion",
    "Phase",
    "Platform",
    "Pose",
    "Report",
    "Slowing",
    "Wheels",
]
__version__ = "0.1.0"


def __getattr__(name: str) -> Any:
    if name in HOMES:
        return getattr(import_module("steerkit." + HOMES[name]), name)
    raise AttributeError(f"module 'steerkit' has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted(__all__)
