"""The frame camera: light added up over the exposure, shot and read noise, the curve, code values."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Self

import numpy as np
from numpy.typing import NDArray

from enhance.light import Image, Light, check_curve

MOSAICS = ("none", "RGGB", "BGGR", "GRBG", "GBRG")
#: The columns' offsets are the camera's own: the same in every recording of one width.
STRIPES_SEED = 77


@dataclass(frozen=True)
class Camera:
    """A frame camera, with a global shutter or a rolling one.

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
    row_time_us : float
        Row r is exposed ``row_time_us * r`` later than row 0, whose exposure is the frame's; negative: read upward; 0:
        a global shutter.
    exposure_shares, gains : tuple of float
        Of `exposure_us`, above 0 to 1, and the gain behind the sensor, frame by frame, over and over; none: all 1.
    dark : float
        Light every pixel shows without any, as a share of full scale, which `black` does not tell.
    stripes : float
        Standard deviation of the offset that each column has in every frame, as a share of full scale.
    mosaic : str
        ``none``, or the colours of the first two rows' first two pixels: ``RGGB``, ``BGGR``, ``GRBG``, ``GBRG``.

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
    row_time_us: float = 0.0
    exposure_shares: tuple[float, ...] = ()
    gains: tuple[float, ...] = ()
    dark: float = 0.0
    stripes: float = 0.0
    mosaic: str = "none"

    def __post_init__(self) -> None:
        check_curve(self.light_curve)
        if self.bits not in (8, 10, 12, 16):
            raise ValueError(f"bits is {self.bits}; expected 8, 10, 12 or 16")
        if not 0 < self.exposure_us <= 1e6 / self.rate_hz:
            raise ValueError(
                f"exposure_us is {self.exposure_us}; expected more than 0 and at most one frame interval, "
                f"{1e6 / self.rate_hz:.0f} us at {self.rate_hz} frames a second"
            )
        if not all(0 < share <= 1 for share in self.exposure_shares) or not all(gain > 0 for gain in self.gains):
            raise ValueError(
                f"exposure_shares are {self.exposure_shares} and gains {self.gains}; expected shares above 0, at most "
                "1, and gains above 0"
            )
        if self.mosaic not in MOSAICS:
            raise ValueError(f"mosaic is {self.mosaic!r}; expected one of {', '.join(MOSAICS)}")

    @property
    def light(self) -> Light:
        """The curve with its code values of no light and full scale."""
        return Light(self.light_curve, self.black, float(2**self.bits - 1))

    def row_delays_us(self, rows: int) -> NDArray[np.int64]:
        """How much later than row 0 each row is exposed, int64, shape (rows,), floored."""
        return np.floor(self.row_time_us * np.arange(rows)).astype(np.int64)

    def exposures(self, duration_us: int, rows: int = 1) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        """Exposures all rows of which fit into ``[0, duration_us)``: row 0's starts and ends, int64, shape (K,)."""
        delays = self.row_delays_us(rows)
        if self.start_us + delays.min() < 0:
            raise ValueError(
                f"row {rows - 1} of the first frame is exposed at {self.start_us + delays.min()} us; expected start_us "
                f"of {-delays.min()} or more for rows read upward, {self.row_time_us} us each"
            )
        room = duration_us - self.start_us - self.exposure_us - int(delays.max())
        count = int(room * self.rate_hz / 1e6) + 1 if room >= 0 else 0
        starts = self.start_us + np.floor(np.arange(count) * 1e6 / self.rate_hz).astype(np.int64)
        lengths = np.rint(self.exposure_us * _over_and_over(self.exposure_shares, count)).astype(np.int64)
        return starts, starts + np.maximum(lengths, 1)

    def frame_gains(self, count: int) -> NDArray[np.float64]:
        """Gains of the first `count` frames."""
        return _over_and_over(self.gains, count)

    def at(self, frame: int) -> Self:
        """Give the camera as it takes one frame: that frame's exposure and gain first."""
        if not self.exposure_shares and not self.gains:
            return self
        turned = [_over_and_over(v, frame + len(v))[frame:] if v else () for v in (self.exposure_shares, self.gains)]
        return replace(self, exposure_shares=tuple(turned[0]), gains=tuple(turned[1]))

    def capture(self, exposed: Image, rng: np.random.Generator) -> NDArray[np.generic]:
        """Turn mean light over the first frame's exposure into code values.

        Parameters
        ----------
        exposed : ndarray of float32, shape (H, W) or (H, W, 3)
            Linear radiance, averaged over the exposure.
        rng : numpy.random.Generator

        Returns
        -------
        ndarray of uint8 or uint16, shape (H, W) or (H, W, 3)
            (H, W) as well where a mosaic lets each pixel see one colour.
        """
        light: NDArray[np.float32] = np.clip(exposed, 0.0, None)
        if self.exposure_shares:
            light = light * np.float32(self.exposure_shares[0])
        if self.mosaic != "none":
            light = _seen_through(self.mosaic, light)
        if self.full_well is not None:
            electrons = rng.poisson(light * self.full_well) + rng.normal(0.0, self.read_noise, light.shape)
            light = (electrons / self.full_well).astype(np.float32)
        if self.gains:
            light = light * np.float32(self.gains[0])
        light = np.minimum(self._offset(light), np.float32(1.0))
        codes = np.rint(self.light.to_codes(light))
        return np.clip(codes, 0, self.light.white).astype(np.uint8 if self.bits == 8 else np.uint16)

    def _offset(self, light: Image) -> Image:
        if self.stripes:
            noise = np.random.default_rng(STRIPES_SEED).standard_normal((light.shape[1], 1))
            columns = (self.stripes * noise).astype(np.float32)
            light = light + (columns if light.ndim == 3 else columns[:, 0])
        return light + np.float32(self.dark) if self.dark else light


def _over_and_over(values: tuple[float, ...], count: int) -> NDArray[np.float64]:
    return np.resize(np.asarray(values or (1.0,), dtype=np.float64), count)


def _seen_through(mosaic: str, light: Image) -> Image:
    """Let each pixel see one colour, (H, W, 3) to (H, W); a grey picture is the same through any filter."""
    if light.ndim == 2:
        return light
    seen = np.empty(light.shape[:2], light.dtype)
    for place, colour in enumerate(mosaic):
        rows, columns = slice(place // 2, None, 2), slice(place % 2, None, 2)
        seen[rows, columns] = light[rows, columns, "RGB".index(colour)]
    return seen
