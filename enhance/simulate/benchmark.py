"""Fixed scenes for figures that can be compared: textures and seeds that training never uses."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from enhance.simulate.camera import Camera
from enhance.simulate.kinds import make_scene
from enhance.simulate.recording import Simulated, simulate
from enhance.simulate.sensor import EventSensor

#: Training draws its seeds from below this, the benchmark's all lie above.
FIRST_SEED = 1_000_000

SIZE = (346, 260)


@dataclass(frozen=True)
class Benchmark:
    """One fixed scene.

    Parameters
    ----------
    kind : str
        Kind of scene.
    seed : int
        Of scene and noise; at least `FIRST_SEED`.
    blur_px : float
        Motion within one exposure at the scene's full speed, pixels.
    exposure_share : float
        Exposure over frame interval.
    contrast : tuple of float
        Thresholds (positive, negative).
    rate_hz : float
        Frames a second.
    frames : int
    size : tuple of int
        Width, height.
    color : bool
    """

    kind: str
    seed: int
    blur_px: float
    exposure_share: float
    contrast: tuple[float, float]
    rate_hz: float = 30.0
    frames: int = 9
    size: tuple[int, int] = SIZE
    color: bool = False

    @property
    def name(self) -> str:
        """Kind and the seed's number within the list."""
        return f"{self.kind}-{self.seed - FIRST_SEED}"

    def record(self) -> Simulated:
        """Simulate it: mismatch 3 %, noise 1 Hz a pixel."""
        exposure_us = round(self.exposure_share * 1e6 / self.rate_hz)
        speed = self.blur_px / (exposure_us * 1e-6)
        scene = make_scene(
            self.kind, self.size, np.random.default_rng(self.seed), speed, color=self.color, textures="test"
        )
        camera = Camera(rate_hz=self.rate_hz, exposure_us=exposure_us, start_us=12_000)
        sensor = EventSensor(*self.contrast, mismatch=0.03, noise_hz=1.0)
        duration_s = (camera.start_us + exposure_us + 12_000) * 1e-6 + (self.frames - 1) / self.rate_hz
        return simulate(scene, camera, sensor, duration_s, self.seed, title=self.name)


#: Two of every kind, spread by hand; an earlier list used up the seeds to `FIRST_SEED` + 100.
BENCHMARK: tuple[Benchmark, ...] = (
    Benchmark("texture", FIRST_SEED + 101, 17.0, 0.50, (0.20, 0.22)),
    Benchmark("texture", FIRST_SEED + 102, 23.0, 0.65, (0.13, 0.16)),
    Benchmark("parts", FIRST_SEED + 103, 12.0, 0.40, (0.25, 0.21)),
    Benchmark("parts", FIRST_SEED + 104, 20.0, 0.60, (0.15, 0.15)),
    Benchmark("fan", FIRST_SEED + 105, 9.0, 0.30, (0.18, 0.24)),
    Benchmark("fan", FIRST_SEED + 106, 22.0, 0.70, (0.28, 0.23)),
    Benchmark("drops", FIRST_SEED + 107, 10.0, 0.35, (0.14, 0.17)),
    Benchmark("drops", FIRST_SEED + 108, 16.0, 0.55, (0.22, 0.19)),
    Benchmark("thin", FIRST_SEED + 109, 8.0, 0.30, (0.26, 0.30)),
    Benchmark("thin", FIRST_SEED + 110, 15.0, 0.50, (0.17, 0.14)),
    Benchmark("zoom", FIRST_SEED + 111, 14.0, 0.45, (0.12, 0.14)),
    Benchmark("zoom", FIRST_SEED + 112, 24.0, 0.70, (0.21, 0.26)),
    Benchmark("cloth", FIRST_SEED + 113, 19.0, 0.60, (0.30, 0.27)),
    Benchmark("cloth", FIRST_SEED + 114, 11.0, 0.35, (0.16, 0.20)),
    Benchmark("text", FIRST_SEED + 115, 13.0, 0.45, (0.19, 0.15)),
    Benchmark("text", FIRST_SEED + 116, 21.0, 0.65, (0.24, 0.24)),
    Benchmark("fluid", FIRST_SEED + 117, 18.0, 0.60, (0.15, 0.18)),
    Benchmark("fluid", FIRST_SEED + 118, 24.0, 0.50, (0.23, 0.20)),
    Benchmark("glass", FIRST_SEED + 119, 12.0, 0.50, (0.18, 0.15)),
    Benchmark("glass", FIRST_SEED + 120, 18.0, 0.40, (0.27, 0.30)),
    Benchmark("specks", FIRST_SEED + 121, 9.0, 0.40, (0.13, 0.12)),
    Benchmark("specks", FIRST_SEED + 122, 20.0, 0.60, (0.20, 0.25)),
    Benchmark("label", FIRST_SEED + 123, 16.0, 0.55, (0.25, 0.29)),
    Benchmark("label", FIRST_SEED + 124, 10.0, 0.30, (0.17, 0.17)),
)


def benchmark_recordings(chosen: Sequence[Benchmark] = BENCHMARK) -> Iterator[tuple[str, Simulated]]:
    """Simulate the fixed scenes, one at a time.

    Parameters
    ----------
    chosen : sequence of Benchmark
        All of them if left out.

    Yields
    ------
    name : str
    simulated : Simulated
    """
    for entry in chosen:
        yield entry.name, entry.record()
