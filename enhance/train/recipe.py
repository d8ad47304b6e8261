"""What varies from one training recording to the next: everything that real rigs and scenes vary, drawn at random.

Every recording has a generator of its own, so that any one can be made again, alone and in any order.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from enhance.simulate.benchmark import FIRST_SEED
from enhance.simulate.kinds import KINDS

Rng = np.random.Generator

#: Scene seeds from here to the benchmark's first are those of held-out recordings; below are those trained on.
HELD_OUT_SEED = 900_000
#: Share of recordings on which the event model itself is violated. Real sensors do it always, a simulator never does:
#: without them the network would trust the events blindly.
VIOLATED = 0.45
#: Share of recordings with a rig far off, as after a failed calibration.
BADLY_RIGGED = 0.15
#: Keys of a recording; their spans differ in what the multi-frame integral knows of them.
KEYS = (5, 6)
#: Most motion within one exposure, pixels.
MOST_BLUR_PX = 30.0
#: Share of recordings whose frames are practically sharp, and their exposure over the time between keys.
SHARP, SHARP_SHARE = 0.1, (0.01, 0.05)
#: Share of recordings without noise events; of the others most have far less than the most, which is 10 Hz a pixel.
QUIET, MOST_NOISE_HZ = 0.1, 10.0
#: Share of the time that bursts of lost events take up, and the length of a burst, milliseconds.
BURSTS, BURST_MS = (0.02, 0.12), (1, 5)


@dataclass(frozen=True)
class Violations:
    """What real instruments do and the model leaves out; nothing of it by default.

    Parameters
    ----------
    lost : float
        Share of events lost where they come too thick, or all over.
    lost_where : str
        ``dense`` (in crowded spots), ``busy`` (in crowded milliseconds) or ``all``.
    bursts : float
        Share of the time in which every event is lost, in bursts of whole milliseconds.
    burst_ms : int
        Length of each.
    lag_us : float
        How late a dark pixel's events are; light 0.1 halves it.
    pedestal : float
        Light added to the frames alone, by stray light or a black level set too low.
    gain : float
        Factor on the frames' light, which then clips.
    exponent : float
        Of the curve the frames were stored with, over that of the curve they are read with.
    """

    lost: float = 0.0
    lost_where: str = "all"
    bursts: float = 0.0
    burst_ms: int = 0
    lag_us: float = 0.0
    pedestal: float = 0.0
    gain: float = 1.0
    exponent: float = 1.0

    @property
    def any(self) -> bool:
        """Whether anything is violated."""
        return self != Violations()


@dataclass(frozen=True)
class RigError:
    """How far the rig handed to the tool is from the truth.

    Parameters
    ----------
    contrast : tuple of float
        Factors on the thresholds, positive and negative.
    clock_us : int
        Error of the clock.
    ramp_us : int
        The ramp, which has no true value.
    hot_known : float
        Share of the hot pixels that were found.
    noise : float
        Factor on the frames' noise.
    """

    contrast: tuple[float, float]
    clock_us: int
    ramp_us: int
    hot_known: float
    noise: float


@dataclass(frozen=True)
class Recipe:
    """One training recording, before it is rendered.

    Parameters
    ----------
    kind : str
    seed : int
        Of the scene and all noise, below `FIRST_SEED`.
    size : tuple of int
        Width, height.
    keys : int
        Frames.
    gap_px, exposure_share, rate_hz : float
        Motion from key to key at the scene's full speed; exposure over the time between keys; keys a second.
    contrast : tuple of float
    mismatch, noise_hz, refractory_us, leak_hz, jitter_us, hot_fraction : float
        Of the event sensor.
    full_well, read_noise : float
    bits : int
    light_curve : str
        Of the camera.
    rig : RigError
    violations : Violations
    """

    kind: str
    seed: int
    size: tuple[int, int]
    keys: int
    gap_px: float
    exposure_share: float
    rate_hz: float
    contrast: tuple[float, float]
    mismatch: float
    noise_hz: float
    refractory_us: float
    leak_hz: float
    jitter_us: float
    hot_fraction: float
    full_well: float
    read_noise: float
    bits: int
    light_curve: str
    rig: RigError
    violations: Violations

    @property
    def exposure_us(self) -> int:
        """Exposure of every frame."""
        return max(50, round(self.exposure_share * 1e6 / self.rate_hz))

    @property
    def speed_px_s(self) -> float:
        """Speed of the fastest part."""
        return self.gap_px * self.rate_hz


def draw_recipe(seed: int, index: int, held_out: bool = False) -> tuple[Recipe, Rng]:
    """Draw one recording.

    Parameters
    ----------
    seed : int
        Of the whole training set.
    index : int
        Number of the recording; kinds of scene take turns.
    held_out : bool
        Draw from the seeds that are never trained on.

    Returns
    -------
    recipe : Recipe
    rng : numpy.random.Generator
        To draw everything else about this recording from.
    """
    rng = np.random.default_rng([seed, int(held_out), index])
    low, high = (HELD_OUT_SEED, FIRST_SEED) if held_out else (0, HELD_OUT_SEED)
    # A camera whose every 2nd, 4th or 8th frame is used is a camera of that rate with a shorter share of exposure.
    stride = int(rng.choice([1, 2, 4, 8], p=[0.65, 0.18, 0.1, 0.07]))
    gap_px = _log_uniform(rng, 4.0, 60.0) if rng.random() < 0.92 else _log_uniform(rng, 0.5, 4.0)
    open_share = rng.uniform(*SHARP_SHARE) if rng.random() < SHARP else rng.uniform(0.05, 0.9)
    share = min(open_share / stride, MOST_BLUR_PX / gap_px)
    rate_hz = _log_uniform(rng, 15.0, 120.0) / stride
    exposure_us = share * 1e6 / rate_hz
    common = _log_uniform(rng, 0.1, 0.4)
    recipe = Recipe(
        kind=KINDS[index % len(KINDS)],
        seed=int(rng.integers(low, high)),
        size=(int(rng.integers(12, 17)) * 16, int(rng.integers(10, 13)) * 16),
        keys=int(rng.choice(KEYS)),
        gap_px=gap_px,
        exposure_share=share,
        rate_hz=rate_hz,
        contrast=(common, float(np.clip(common * rng.uniform(0.75, 1.3), 0.1, 0.4))),
        mismatch=rng.uniform(0.0, 0.08),
        noise_hz=_log_uniform(rng, 0.03, MOST_NOISE_HZ) * (rng.random() >= QUIET),
        refractory_us=rng.uniform(0.0, 300.0),
        leak_hz=rng.uniform(0.0, 0.2),
        jitter_us=_log_uniform(rng, 5.0, 300.0),
        hot_fraction=_log_uniform(rng, 1e-5, 1e-3),
        full_well=_log_uniform(rng, 1_000.0, 30_000.0),
        read_noise=rng.uniform(1.0, 12.0),
        bits=int(rng.choice([8, 10, 12])),
        light_curve=str(rng.choice(["linear", "srgb"])),
        rig=_rig_error(rng, exposure_us, 1e6 / (gap_px * rate_hz)),
        violations=_violations(rng, gap_px * rate_hz) if rng.random() < VIOLATED else Violations(),
    )
    return recipe, rng


def _rig_error(rng: Rng, exposure_us: float, us_per_px: float) -> RigError:
    """Draw what a calibration would miss: thresholds, and the clock to 2 % of the exposure."""
    bad = rng.random() < BADLY_RIGGED
    # measured thresholds, over true ones, on 12 simulated recordings: 0.97 in the mean, deviation 0.08
    common = rng.uniform(0.7, 1.3) if bad else float(np.clip(rng.normal(0.98, 0.07), 0.8, 1.2))
    # Short exposures leave the clock to its absolute error, though never by more than pixels tell.
    most = max((0.05 if bad else 0.02) * exposure_us, min(300.0, (2.0 if bad else 0.7) * us_per_px))
    return RigError(
        contrast=(common * rng.normal(1.0, 0.05), common * rng.normal(1.0, 0.05)),
        clock_us=round(rng.uniform(-most, most)),
        ramp_us=int(exposure_us * rng.choice([0.0, 1 / 16, 1 / 8, 1 / 4])),
        hot_known=rng.uniform(0.3, 1.0),
        noise=_log_uniform(rng, 0.7, 1.5),
    )


def _violations(rng: Rng, speed_px_s: float) -> Violations:
    """Draw one violation or two."""
    most_lag = min(8_000.0, 6e6 / speed_px_s)
    drawn = {
        "lost": rng.uniform(0.1, 0.4),
        "bursts": rng.uniform(*BURSTS),
        "lag_us": rng.uniform(0.25, 1.0) * most_lag,
        "pedestal": rng.uniform(0.01, 0.12),
        "gain": rng.uniform(1.3, 2.0),
        "exponent": _log_uniform(rng, 0.7, 1.5),
    }
    chosen = rng.choice(list(drawn), size=int(rng.integers(1, 3)), replace=False)
    where = str(rng.choice(["dense", "busy", "all"]))
    burst_ms = int(rng.integers(BURST_MS[0], BURST_MS[1] + 1))
    return Violations(lost_where=where, burst_ms=burst_ms, **{name: drawn[name] for name in chosen.tolist()})


def _log_uniform(rng: Rng, low: float, high: float) -> float:
    return float(np.exp(rng.uniform(np.log(low), np.log(high))))
