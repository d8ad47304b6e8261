"""Frames of a video, by index, with exact presentation times (variable rate included)."""

from __future__ import annotations

from collections import OrderedDict
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from enhance.errors import FramesError
from enhance.read.video_colour import Conversion, conversion, light_curve

# Decoded pictures kept for callers that look back: the neighbours of a key, or fewer where pictures are large.
_CACHE_BYTES = 128 << 20
_CACHE_PICTURES = 24


class Video:
    """The first video stream of a file.

    Orientation tags are ignored on purpose: pixels must stay where the sensor has them.

    Parameters
    ----------
    path : Path

    Raises
    ------
    FramesError
        If the file is damaged, or its pictures have no time stamps.
    """

    def __init__(self, path: Path) -> None:
        import av

        self.path = path
        self._cache: OrderedDict[int, NDArray[np.generic]] = OrderedDict()
        self._frames: Iterator[Any] | None = None
        self._next = 0
        try:
            # An absolute path: in a relative one, what stands before a colon would be taken for a protocol.
            self._container = av.open(str(path.absolute()))
        except (av.FFmpegError, OSError, ValueError) as error:
            raise _damaged(path, error) from error
        try:
            self._open_stream()
        except BaseException:
            self._container.close()
            raise

    def codes(self, index: int) -> NDArray[np.generic]:
        """Decode one picture; reading on in order never seeks.

        Parameters
        ----------
        index : int

        Returns
        -------
        ndarray of uint8 or uint16, shape (H, W) or (H, W, 3)
            Full-range code values; colour is R, G, B.

        Raises
        ------
        FramesError
            If the picture cannot be decoded.
        """
        if index in self._cache:
            self._cache.move_to_end(index)
            return self._cache[index]
        codes = self._conversion.apply(self._decode(index))
        self._cache[index] = codes
        most = min(_CACHE_PICTURES, max(2, _CACHE_BYTES // codes.nbytes))
        while len(self._cache) > most:
            self._cache.popitem(last=False)
        return codes

    def close(self) -> None:
        """Release the file."""
        self._frames = None
        self._cache.clear()
        self._container.close()

    def _open_stream(self) -> None:
        streams = self._container.streams.video
        if not streams:
            raise FramesError(f"{self.path} holds no video stream. Check frames.source.")
        self._stream = streams[0]
        # Parallel jobs share the cores among themselves already.
        self._stream.codec_context.thread_count = 1
        context = self._stream.codec_context
        self.size: tuple[int, int] = (int(context.width), int(context.height))
        self._pts, self._keys = self._index()
        base = self._stream.time_base or Fraction(1, 1_000_000)
        # pts * time_base * 10^6, in whole numbers, floored
        self.stamps_us = np.array(
            [int(p) * base.numerator * 1_000_000 // base.denominator for p in self._pts], dtype=np.int64
        )
        self.names: Sequence[str] = [str(i) for i in range(len(self._pts))]
        first = self._decode(0)
        self._conversion: Conversion = conversion(self.path, context, first)
        self._cache[0] = self._conversion.apply(first)
        self.channels, self.depth = self._conversion.channels, self._conversion.depth
        self.light_curve = light_curve(context, first)
        self.notes = [*self._conversion.notes, *self._notes(base, first)]

    def _index(self) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        """Presentation times, sorted, and the indices of key frames: from the packets, without decoding."""
        import av

        pts: list[int | None] = []
        keys: list[bool] = []
        try:
            for packet in self._container.demux(self._stream):
                # The last packet is empty: it only tells the decoder to finish.
                if packet.size and not packet.is_discard:
                    pts.append(packet.pts)
                    keys.append(packet.is_keyframe)
        except av.FFmpegError as error:
            raise _damaged(self.path, error) from error
        if not pts:
            raise FramesError(f"{self.path} holds no pictures; it may be cut short. Copy it again.")
        if len(pts) < self._stream.frames:
            raise FramesError(
                f"{self.path}: {len(pts)} pictures, its header says {self._stream.frames}. "
                "The file is cut short; copy it again."
            )
        times = np.array([p for p in pts if p is not None], dtype=np.int64)
        if len(times) < len(pts) or len(np.unique(times)) < len(times):
            raise FramesError(
                f"{self.path}: {len(pts)} pictures but {len(np.unique(times))} different time stamps. Expected one a "
                "picture; put the video into MP4, MKV or NUT with its times, or export the pictures with a times table."
            )
        order = np.argsort(times)
        return times[order], np.flatnonzero(np.array(keys)[order])

    def _decode(self, index: int) -> Any:
        """Return the decoded frame, if its checksums hold."""
        if self._stream.codec_context.name != "ffv1":
            return self._find(index)
        # FFV1 carries checksums, but its decoder only mutters when they fail, and repeats the picture before.
        with _overheard() as messages:
            frame = self._find(index)
        if any("CRC mismatch" in text for _, _, text in messages):
            self._frames = None
            raise self._undecodable(index, "its checksum does not fit")
        return frame

    def _find(self, index: int) -> Any:
        """Read on from the last frame if no key frame lies between, else seek."""
        import av

        place = int(np.searchsorted(self._keys, index, side="right")) - 1
        # A key frame may not be a clean start (open groups): then the one before it, then the file's beginning.
        starts = [int(self._keys[k]) for k in (place, place - 1) if k >= 0] + [0]
        try:
            if self._frames is not None and starts[0] <= self._next <= index:
                frame = self._read_to(index)
                if frame is not None:
                    return frame
            for start in starts:
                self._container.seek(int(self._pts[start]), stream=self._stream, backward=True)
                self._frames = self._container.decode(self._stream)
                frame = self._read_to(index)
                if frame is not None:
                    return frame
        except (av.FFmpegError, EOFError) as error:
            self._frames = None
            raise self._undecodable(index, str(error)) from error
        self._frames = None
        raise self._undecodable(index, "no such picture came out")

    def _read_to(self, index: int) -> Any:
        """Decode up to one picture; None if the decoder passes it."""
        wanted = int(self._pts[index])
        for frame in self._frames or ():
            if frame.pts is not None and frame.pts >= wanted:
                self._next = int(np.searchsorted(self._pts, frame.pts)) + 1
                if frame.pts > wanted:
                    return None
                if frame.is_corrupt or (frame.width, frame.height) != self.size:
                    raise self._undecodable(index, f"damaged, or of another size ({frame.width} x {frame.height})")
                return frame
        return None

    def _undecodable(self, index: int, found: str) -> FramesError:
        return FramesError(
            f"{self.path}: frame {index} at {self.stamps_us[index]} us cannot be decoded: {found}. "
            "The file is damaged or cut short; copy it again, or cut the video before this frame."
        )

    def _notes(self, base: Fraction, first: Any) -> list[str]:
        notes = []
        if base > Fraction(1, 10_000):
            notes.append(
                f"{self.path}: the container keeps times in steps of {float(base * 1_000_000):g} us only; "
                "give exact times in frames.times if they are known"
            )
        missing_us = (self._container.duration or 0) - int(self.stamps_us[-1] - self.stamps_us[0])
        longest_us = int(np.diff(self.stamps_us).max(initial=0))
        # A header tells the length when it was finished; a copy that stops early still has the old one.
        if len(self._container.streams) == 1 and missing_us > 3 * longest_us + 100_000:
            notes.append(
                f"{self.path}: its header says {(self._container.duration or 0) / 1e6:g} s, but its pictures end "
                f"{missing_us / 1e6:g} s before: the file may be cut short"
            )
        if len(self._container.streams.video) > 1:
            notes.append(f"{self.path}: the first of {len(self._container.streams.video)} video streams is used")
        if first.interlaced_frame:
            notes.append(f"{self.path} is interlaced: each picture mixes two instants, which nothing here corrects")
        if first.rotation:
            notes.append(f"{self.path} asks to be turned by {first.rotation} degrees for display; its pixels are not")
        return notes


@contextmanager
def _overheard() -> Iterator[list[tuple[int, str, str]]]:
    """Collect what the decoder says meanwhile; repeated words count again."""
    import av.logging

    level, skip = av.logging.get_level(), av.logging.get_skip_repeated()
    av.logging.set_level(av.logging.ERROR)
    av.logging.set_skip_repeated(False)
    try:
        with av.logging.Capture(local=True) as messages:
            yield messages
    finally:
        av.logging.set_skip_repeated(skip)
        av.logging.set_level(level)


def _damaged(path: Path, error: BaseException) -> FramesError:
    return FramesError(
        f"{path} cannot be read as a video: {error}. It may be damaged, cut short or no video; "
        "copy it again, or check frames.source."
    )
