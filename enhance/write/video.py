"""Video: an MP4 that plays anywhere, or a lossless 16-bit MKV in the frames' own curve."""

from __future__ import annotations

import contextlib
from collections.abc import Mapping
from fractions import Fraction
from pathlib import Path
from types import TracebackType
from typing import Any

import numpy as np

from enhance.errors import WriteError
from enhance.light import Image, Light
from enhance.write.levels import display_signal, limited_yuv, own_levels
from enhance.write.strip import draw_strip, strip_rows
from enhance.write.whole import commit, discard, partial_path, write_error

_TIME_BASE = Fraction(1, 1_000_000)

# Code points of ITU-T H.273; 2 says "unspecified".
_BT709, _LIMITED, _FULL, _UNSPECIFIED = 1, 1, 2, 2
_TRANSFER = {"linear": 8, "srgb": 13, "bt709": 1, "gamma 2.2": 4, "gamma 2.8": 5}

# One thread each: how many there are must not decide the bytes.
_OPTIONS = {
    # crf 16 is next to invisible; no picture waits for a later one, so the first stands at 0 and none before it;
    # a whole picture every 30 lets a player step back and forth quickly.
    "h264": {"crf": "16", "preset": "medium", "bf": "0", "g": "30", "threads": "1"},
    "ffv1": {"level": "3", "coder": "1", "context": "0", "g": "1", "slices": "4", "slicecrc": "1", "threads": "1"},
}
_CONTAINER = {
    "h264": ("mp4", {"movflags": "+faststart", "fflags": "+bitexact"}),
    # Without this flag the container holds a random number, and no two runs the same bytes.
    "ffv1": ("matroska", {"fflags": "+bitexact"}),
}


class ClipWriter:
    """Writes one clip; the file appears when the block ends without an exception.

    Parameters
    ----------
    path : Path
        ``.mp4`` for h264, ``.mkv`` for ffv1.
    codec : str
        ``h264``: 8 bit, BT.709 converted and tagged, times exact to the microsecond, odd sizes padded by an edge row or
        column. ``ffv1``: lossless 16-bit levels of the frames' own curve; the container rounds times to 1 ms, so the
        exact ones stand in the table of pictures.
    shape : tuple of int
        (H, W) or (H, W, 3).
    light : Light
        The frames' own curve.
    playback_rate : Fraction
        Pictures a second; the last picture stands for one of them.
    metadata : mapping of str to str
        ``title`` and ``comment`` (the caution).
    strip : bool
        A caption strip below the picture.

    Raises
    ------
    WriteError
        If the file cannot be written, or a picture or its time does not fit.
    """

    def __init__(
        self,
        path: Path,
        codec: str,
        shape: tuple[int, ...],
        light: Light,
        playback_rate: Fraction,
        metadata: Mapping[str, str],
        strip: bool = False,
    ) -> None:
        if codec not in _OPTIONS:
            raise WriteError(f'{path}: {codec!r} is no video of ours; expected "h264" or "ffv1" (output.video).')
        self.path = Path(path)
        self.codec = codec
        self.shape = tuple(shape)
        self.strip = strip
        self.count = 0
        self._light = light
        self._rate = Fraction(playback_rate)
        self._metadata = dict(metadata)
        self._last_us = -1
        self._partial = partial_path(self.path)
        self._container: Any = None
        self._stream: Any = None

    @property
    def coded_size(self) -> tuple[int, int]:
        """Width, height of the coded picture: strip and padding included."""
        height, width = self.shape[:2]
        if self.strip:
            height += strip_rows(width)
        return (width + width % 2, height + height % 2) if self.codec == "h264" else (width, height)

    def __enter__(self) -> ClipWriter:
        import av

        try:
            self.path.parent.mkdir(parents=True, exist_ok=True)
            form, options = _CONTAINER[self.codec]
            self._container = av.open(str(self._partial), "w", format=form, container_options=dict(options))
            self._open_stream()
        except (OSError, av.error.FFmpegError) as error:
            self._abandon()
            raise write_error(self.path, error) from error
        except BaseException:
            self._abandon()
            raise
        return self

    def add(self, linear_image: Image, pts_us: int, caption: str | None = None) -> None:
        """Append one picture.

        Parameters
        ----------
        linear_image : ndarray of float32, shape (H, W) or (H, W, 3)
            Linear light, of the clip's shape.
        pts_us : int
            When it is shown: 0 for the first, later than the one before for each other.
        caption : str, optional
            For the strip.

        Raises
        ------
        WriteError
            If the picture, its time or the disk is not as needed.
        """
        if linear_image.shape != self.shape:
            raise WriteError(f"{self.path}, picture {self.count}: shape {linear_image.shape}, expected {self.shape}.")
        if (self.count == 0 and pts_us != 0) or pts_us <= self._last_us:
            wanted = "0" if self.count == 0 else f"later than {self._last_us} us"
            raise WriteError(f"{self.path}, picture {self.count}: shown at {pts_us} us, expected {wanted}.")
        frame = self._frame(linear_image, caption)
        frame.pts, frame.time_base = int(pts_us), _TIME_BASE
        self._last_us, self.count = int(pts_us), self.count + 1
        self._mux(frame)

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if kind is not None:
            self._abandon()
            return
        import av

        try:
            if self.count == 0:
                raise WriteError(f"{self.path}: no picture was given; a clip holds at least one.")
            self._mux(None)
            self._container.close()
            commit(self._partial, self.path)
        except (OSError, av.error.FFmpegError) as problem:
            self._abandon()
            raise problem if isinstance(problem, WriteError) else write_error(self.path, problem) from problem

    def _open_stream(self) -> None:
        width, height = self.coded_size
        name = {"h264": "libx264", "ffv1": "ffv1"}[self.codec]
        self._stream = stream = self._container.add_stream(name, rate=self._rate, options=dict(_OPTIONS[self.codec]))
        stream.width, stream.height = width, height
        stream.time_base = stream.codec_context.time_base = _TIME_BASE
        stream.codec_context.thread_count = 1
        stream.pix_fmt = self._format
        self._tag(stream.codec_context)
        self._container.metadata.update(self._metadata)

    @property
    def _format(self) -> str:
        if self.codec == "h264":
            return "yuv420p"
        return "gray16le" if len(self.shape) == 2 else "gbrp16le"

    def _tag(self, target: Any) -> None:
        """Say how the stored values are meant; both the stream and every frame carry it."""
        target.color_primaries = _BT709
        if self.codec == "h264":
            target.color_trc = target.colorspace = _BT709
            target.color_range = _LIMITED
        else:
            target.color_trc = _TRANSFER.get(self._light.curve, _UNSPECIFIED)
            target.color_range = _FULL

    def _frame(self, linear: Image, caption: str | None) -> Any:
        import av

        if self.codec == "h264":
            signal = display_signal(linear)
            if self.strip:
                signal = np.concatenate([signal, self._band(caption)])
            width, height = self.coded_size
            margins = [(0, height - signal.shape[0]), (0, width - signal.shape[1])] + [(0, 0)] * (signal.ndim - 2)
            stored: Any = limited_yuv(np.pad(signal, margins, mode="edge"))
        else:
            stored = own_levels(linear, self._light)
            if self.strip:
                stored = np.concatenate([stored, np.rint(self._band(caption) * 65535).astype(np.uint16)])
        frame = av.VideoFrame.from_ndarray(np.ascontiguousarray(stored), format=self._format)
        self._tag(frame)
        return frame

    def _band(self, caption: str | None) -> Image:
        band = draw_strip(self.shape[1], caption or "")
        return band if len(self.shape) == 2 else np.repeat(band[..., None], 3, axis=2)

    def _mux(self, frame: Any) -> None:
        import av

        try:
            for packet in self._stream.encode(frame):
                self._container.mux(packet)
        except (OSError, av.error.FFmpegError) as error:
            raise write_error(self.path, error) from error

    def _abandon(self) -> None:
        """Close what is open and remove the temporary file; the first problem is the one to report."""
        container, self._container = self._container, None
        if container is not None:
            with contextlib.suppress(Exception):
                container.close()
        discard(self._partial)
