"""The frame camera: light added up over the exposure, shot and read noise, the curve, code values."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from enhance.light import Image, Light, check_curve


@dataclass(frozen=True)
class Camera:
    """A frame camera with a global shutter.

    Parameters
    ----------
    rate_hz : float
        Frames a second.
    exposure_us : int
        At most one frame interval.
    bits : int
        8, 10, 12 or 16; full scale is ``2**bits - 1``.
    light_curve : str
        A curve of `enhance.light`.
    full_well : float or None
        Electrons at full scale, which set the shot noise; None: a camera without any noise.
    read_noise : float
        Electrons.
    black : float
        Code value of no light.
    start_us : int
        When the first exposure begins.
    sees_lamp : bool
        Whether a flickering lamp lights the frames as well as the events.

    Raises
    ------
    ValueError
        If a setting cannot be.
    """

    rate_hz: float = 30.0
    exposure_us: int = 16_000
    bits: int = 8
    light_curve: str = "linear"
    full_well: float | None = 20_000.0
    read_noise: float = 5.0
    black: float = 0.0
    start_us: int = 10_000
    sees_lamp: bool = True

    def __post_init__(self) -> None:
        check_curve(self.light_curve)
        if self.bits not in (8, 10, 12, 16):
            raise ValueError(f"bits is {self.bits}; expected 8, 10, 12 or 16")
        if not 0 < self.exposure_us <= 1e6 / self.rate_hz:
            raise ValueError(
                f"exposure_us is {self.exposure_us}; expected more than 0 and at most one frame interval, "
                f"{1e6 / self.rate_hz:.0f} us at {self.rate_hz} frames a second"
            )

    @property
    def light(self) -> Light:
        """The curve with its code values of no light and full scale."""
        return Light(self.light_curve, self.black, float(2**self.bits - 1))

    def exposures(self, duration_us: int) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        """Exposures that fit into ``[0, duration_us)``: starts and ends, int64, shape (K,)."""
        room = duration_us - self.start_us - self.exposure_us
        count = int(room * self.rate_hz / 1e6) + 1 if room >= 0 else 0
        starts = self.start_us + np.floor(np.arange(count) * 1e6 / self.rate_hz).astype(np.int64)
        return starts, starts + self.exposure_us

    def capture(self, exposed: Image, rng: np.random.Generator) -> NDArray[np.generic]:
        """Turn mean light over an exposure into code values.

        Parameters
        ----------
        exposed : ndarray of float32, shape (H, W) or (H, W, 3)
            Linear radiance, averaged over the exposure.
        rng : numpy.random.Generator

        Returns
        -------
        ndarray of uint8 or uint16, same shape
        """
        light = np.clip(exposed, 0.0, None)
        if self.full_well is not None:
            electrons = rng.poisson(light * self.full_well) + rng.normal(0.0, self.read_noise, light.shape)
            light = np.minimum(electrons / self.full_well, 1.0).astype(np.float32)
        codes = np.rint(self.light.to_codes(light))
        return np.clip(codes, 0, self.light.white).astype(np.uint8 if self.bits == 8 else np.uint16)
