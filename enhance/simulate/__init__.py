"""Scene, frame camera and event sensor: recordings whose truth is known.

`make_scene` draws a scene of one of `KINDS` at random; `simulate` records it with a `Camera` and an `EventSensor` and
gives a `Simulated`: the recording, and the truth at any instant. `write_recording` lays one down as the files and the
job that a user would have; `demo_recording` makes the one the demo runs on. `benchmark_recordings` are fixed scenes
made of textures that training never sees.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from enhance.simulate.benchmark import BENCHMARK, benchmark_recordings
    from enhance.simulate.camera import Camera
    from enhance.simulate.files import demo_recording, write_recording
    from enhance.simulate.kinds import KINDS, make_scene
    from enhance.simulate.recording import Simulated, simulate
    from enhance.simulate.scene import Scene
    from enhance.simulate.second_view import SecondView
    from enhance.simulate.sensor import EventSensor

__all__ = [
    "BENCHMARK",
    "KINDS",
    "Camera",
    "EventSensor",
    "Scene",
    "SecondView",
    "Simulated",
    "benchmark_recordings",
    "demo_recording",
    "make_scene",
    "simulate",
    "write_recording",
]

# Compiled loops and OpenCV come in only when something is simulated: the command line imports this room at start.
_HOMES = {
    "BENCHMARK": "benchmark",
    "KINDS": "kinds",
    "Camera": "camera",
    "EventSensor": "sensor",
    "Scene": "scene",
    "SecondView": "second_view",
    "Simulated": "recording",
    "benchmark_recordings": "benchmark",
    "demo_recording": "files",
    "make_scene": "kinds",
    "simulate": "recording",
    "write_recording": "files",
}


def __getattr__(name: str) -> Any:
    """Load a name from its own file when it is first asked for."""
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(import_module(f"{__name__}.{_HOMES[name]}"), name)
