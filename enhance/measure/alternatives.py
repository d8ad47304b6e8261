"""The plain alternatives a made picture has to beat, made from captured keys: nearest, blend, frame-only flow."""

from __future__ import annotations

from enhance.kernels.optical_flow import frame_only_picture
from enhance.light import Image

#: Names in the order of the held-out table.
NAMES = ("nearest", "blend", "flow")


def nearest(key0: Image, key1: Image, t0_us: int, t1_us: int, t_us: int) -> Image:
    """Take the key that is nearer in time, the earlier one half way.

    Parameters
    ----------
    key0, key1 : ndarray of float32, shape (H, W) or (H, W, 3)
        Captured, linear light.
    t0_us, t1_us, t_us : int
        Times of the keys and of the picture.

    Returns
    -------
    ndarray of float32, same shape
    """
    return key0 if t_us - t0_us <= t1_us - t_us else key1


def blend(key0: Image, key1: Image, t0_us: int, t1_us: int, t_us: int) -> Image:
    """Mix the keys by time, in linear light.

    Parameters
    ----------
    key0, key1 : ndarray of float32, shape (H, W) or (H, W, 3)
        Captured, linear light.
    t0_us, t1_us, t_us : int

    Returns
    -------
    ndarray of float32, same shape
    """
    weight = (t_us - t0_us) / (t1_us - t0_us)
    return (1.0 - weight) * key0 + weight * key1


def frame_flow(key0: Image, key1: Image, t0_us: int, t1_us: int, t_us: int) -> Image:
    """Carry both keys along the motion the frames alone show, two warps weighted by time.

    Parameters
    ----------
    key0, key1 : ndarray of float32, shape (H, W) or (H, W, 3)
        Captured, linear light.
    t0_us, t1_us, t_us : int

    Returns
    -------
    ndarray of float32, same shape
    """
    return frame_only_picture(key0, key1, (t_us - t0_us) / (t1_us - t0_us))


def alternatives(key0: Image, key1: Image, t0_us: int, t1_us: int, t_us: int) -> dict[str, Image]:
    """Make all of them, by name.

    Parameters
    ----------
    key0, key1 : ndarray of float32, shape (H, W) or (H, W, 3)
        Captured, linear light.
    t0_us, t1_us, t_us : int

    Returns
    -------
    dict of str to ndarray
        ``nearest``, ``blend``, ``flow``.
    """
    made = (way(key0, key1, t0_us, t1_us, t_us) for way in (nearest, blend, frame_flow))
    return dict(zip(NAMES, made, strict=True))
