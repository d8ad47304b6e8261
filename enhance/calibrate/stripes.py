"""Fixed vertical stripes: an offset that each column of the sensor adds to every frame.

Light from column to column differs by the scene, which changes from row to row and from frame to frame, and by the
columns' offsets, which do not. So the middle over rows and frames of the difference between neighbouring columns is
that of their offsets; they follow by summing up. What is left of the scene in them is blurred and so lies in the low
frequencies: offsets are taken to be as strong there as in the high ones, where they can be seen, and no stronger.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from enhance.calibrate.clipped import USABLE_LIGHT
from enhance.light import Image
from enhance.recording import FrameSource
from enhance.rig import Quantity

METHOD = "columns' differences that rows and frames agree on"
#: Frames looked at, and bands of rows: each row of a band is one witness, and odd and even bands must agree.
LOOKED_AT, BANDS = 24, 8
#: Cycles a column from which on blurred scenes have little left, so that what is there is the sensor's.
FINE = 0.3
#: Correlation of the fine parts of the two halves of the witnesses below which nothing is taken out; chance gives
#: about 1 / sqrt(columns).
LEAST_AGREEMENT = 0.6
#: Root mean square of offsets (1 = full scale) that is worth it, and that no sensor has.
RANGE = (0.0008, 0.05)
#: A few upright edges are no stripes: the fine parts are spread over all columns, their robust spread near their whole.
LEAST_SPREAD = 0.8
#: Narrower frames cannot tell; frequencies over which a spectrum is averaged.
LEAST_WIDTH, AVERAGED = 64, 9
#: Times the fine power that an averaged spectrum shows by chance alone: below it nothing is held back.
ALLOWED = 2.0


def find_stripes(frames: FrameSource, keys: Sequence[int]) -> tuple[Image | None, Quantity]:
    """Find the columns' offsets.

    Parameters
    ----------
    frames : FrameSource
    keys : sequence of int
        Frames that may be looked at.

    Returns
    -------
    offset : ndarray of float32, shape (W,) or (W, 3), or None
        Light to take out of every row of a frame as captured; None: nothing.
    quantity : Quantity
        Value: root mean square of the offsets, 0 for none.
    """
    chosen = [keys[i] for i in np.unique(np.linspace(0, len(keys) - 1, min(len(keys), LOOKED_AT)).round().astype(int))]
    if frames.shape[1] < LEAST_WIDTH or frames.shape[0] < 2 * BANDS:
        return None, Quantity(0.0, None, METHOD, "the frames are too small to tell")
    odd, even = (_spectrum(half) for half in _differences(frames, chosen))
    fine = np.fft.rfftfreq(frames.shape[1]) >= FINE
    # power of what both halves have, and of either
    common = max(0.0, float(np.mean((odd * even.conj()).real[fine])))
    alone = np.sqrt(np.mean(np.abs(odd[fine]) ** 2) * np.mean(np.abs(even[fine]) ** 2))
    agreement = float(common / alone) if alone > 0 else 0.0
    mean = 0.5 * (odd + even)
    # Wiener filter: signal / (signal + the rest), the signal being white
    power = np.stack([np.convolve(np.abs(c) ** 2, np.ones(AVERAGED) / AVERAGED, "same") for c in mean.T], axis=1)
    offset = np.fft.irfft(mean * np.minimum(1.0, ALLOWED * common / np.maximum(power, 1e-30)), frames.shape[1], axis=0)
    ripple = np.fft.irfft(mean * fine[:, None], frames.shape[1], axis=0)
    strength = float(np.sqrt(common / frames.shape[1]))
    spread = 1.4826 * float(np.median(np.abs(ripple)))
    found = f"agreement {agreement:.2f} between halves of the rows, {strength:.5f} of full scale, {len(chosen)} frames"
    even_spread = spread >= LEAST_SPREAD * float(np.sqrt(np.mean(ripple**2)))
    if not (agreement >= LEAST_AGREEMENT and RANGE[0] <= strength <= RANGE[1] and even_spread):
        return None, Quantity(0.0, None, METHOD, f"none ({found})")
    # Spearman-Brown: the mean of two halves that agree by r differs from the truth by 1 - 2 r / (1 + r)
    missed = strength * float(np.sqrt(max(0.0, (1 - agreement) / (1 + agreement))))
    squeezed = offset if len(frames.shape) == 3 else offset[:, 0]
    return squeezed.astype(np.float32), Quantity(strength, missed, METHOD, found)


def _differences(frames: FrameSource, chosen: Sequence[int]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Usual step from column to column, shape (W - 1, C), by the odd bands of the first half and by all the rest.

    Bands change their half from frame to frame, so that what stands still in one band does not fill one half alone.
    """
    height = frames.shape[0]
    band = np.arange(height) * BANDS // height
    halves: tuple[list[Image], list[Image]] = ([], [])
    for index in chosen:
        frame = frames.frame(index)
        image = frame.image.reshape(*frame.image.shape[:2], -1) * np.float32(frame.scale)
        step = np.diff(image, axis=1)
        low, high = USABLE_LIGHT
        usable = (image > low) & (image < high)
        step[~(usable[:, 1:] & usable[:, :-1])] = np.nan
        for half in (0, 1):
            halves[half].append(step[band % 2 == half])
    return _middle(halves[0]), _middle(halves[1])


def _middle(steps: list[Image]) -> NDArray[np.float64]:
    """Mean of the middle half over rows and frames, column by column; 0 where no pixel tells.

    A median of whole code values would be one of few.
    """
    stacked = np.sort(np.concatenate(steps), axis=0)
    count = np.sum(np.isfinite(stacked), axis=0)
    place = np.arange(len(stacked)).reshape(-1, *[1] * (stacked.ndim - 1))
    inside = (place >= count // 4) & (place < count - count // 4)
    return np.asarray(np.where(inside, stacked, 0).sum(axis=0, dtype=np.float64) / np.maximum(inside.sum(axis=0), 1))


def _spectrum(step: NDArray[np.float64]) -> NDArray[np.complex128]:
    """Sum differences up to offsets and give their spectrum, shape (W // 2 + 1, C)."""
    offset = np.concatenate([np.zeros((1, step.shape[1])), np.cumsum(step, axis=0)])
    # without its trend, whose jump from the last column to the first would fill all frequencies
    line = np.linspace(0.0, 1.0, len(offset))[:, None]
    return np.asarray(np.fft.rfft(offset - offset[:1] - line * (offset[-1:] - offset[:1]), axis=0))
