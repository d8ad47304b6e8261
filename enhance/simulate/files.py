"""A simulated recording as the files and the job file a user would have, and the demo's own recording."""

from __future__ import annotations

import os
import uuid
from collections.abc import Callable
from pathlib import Path
from typing import cast

import cv2
import numpy as np
from numpy.typing import NDArray

from enhance.errors import WriteError
from enhance.recording import EventArray, FrameArray
from enhance.simulate.camera import Camera
from enhance.simulate.kinds import make_scene
from enhance.simulate.recording import Simulated, simulate
from enhance.simulate.sensor import EventSensor

#: Events a chunk: short windows read fast from it.
CHUNK = 16_384
#: Written first: what stands beside it was simulated and may be replaced.
_MARK = "truth.toml"


def write_recording(simulated: Simulated, folder: str | Path) -> Path:
    """Lay a simulated recording down: ``frames/*.png``, ``frames.csv``, ``events.h5``, ``truth.toml``, ``job.toml``.

    Files of these names are replaced, each at once, where they are an earlier copy's: ``truth.toml`` marks it, and is
    written first. Nobody's own recording is written over.

    Parameters
    ----------
    simulated : Simulated
    folder : str or Path
        Made if it is missing.

    Returns
    -------
    Path
        The job file, written last.

    Raises
    ------
    WriteError
        If a file cannot be written, or the folder holds a recording, or ``frames`` pictures, of something else.
    """
    folder = Path(folder)
    # a simulated recording always lies in memory
    frames = cast(FrameArray, simulated.recording.frames)
    events = cast(EventArray, simulated.recording.events)
    names = [f"{index:06d}.png" for index in range(len(frames))]
    _refuse_strangers(folder)
    try:
        (folder / "frames").mkdir(parents=True, exist_ok=True)
        strangers = sorted({path.name for path in (folder / "frames").iterdir()} - set(names))
    except OSError as error:
        raise WriteError(f"{folder}: the folder cannot be made ({error}). Choose one that can be written.") from error
    if strangers:
        raise WriteError(
            f"{folder / 'frames'}: holds {len(strangers)} files that are not part of this recording, such as "
            f"{strangers[0]}; expected an empty folder or an earlier copy. Empty it or choose another."
        )
    _write(folder / _MARK, _truth(simulated).encode())
    for name, codes in zip(names, frames.codes, strict=True):
        _write(folder / "frames" / name, _png(codes))
    _write(folder / "frames.csv", _times(names, frames).encode())
    _replace(folder / "events.h5", lambda path: _write_events(path, events))
    _write(folder / "job.toml", _job(simulated, frames, events).encode())
    return folder / "job.toml"


def _times(names: list[str], frames: FrameArray) -> str:
    """Write the times table; the gain stands in it where it changes."""
    rows = [f"{n},{a},{b}" for n, a, b in zip(names, frames.start_us, frames.end_us, strict=True)]
    if np.all(frames.gain == 1):
        return "\n".join(["frame,start_us,end_us", *rows, ""])
    rows = [f"{row},{gain:g}" for row, gain in zip(rows, frames.gain, strict=True)]
    return "\n".join(["frame,start_us,end_us,gain", *rows, ""])


def _refuse_strangers(folder: Path) -> None:
    """Refuse a folder with files of our names that no earlier copy left: they may be somebody's own recording."""
    found = [name for name in ("events.h5", "frames.csv", "job.toml") if (folder / name).exists()]
    found += [f"frames/{path.name}" for path in sorted(folder.glob("frames/*"))]
    if found and not (folder / _MARK).exists():
        raise WriteError(
            f"{folder}: holds {found[0]} without {_MARK} beside it, so it is no simulated recording and is not "
            "replaced; expected an empty folder or an earlier copy. Choose another folder."
        )


def demo_recording(folder: str | Path) -> Path:
    """Write the demo's recording: a labelling line whose bottles blur by about 12 pixels within each exposure.

    Parameters
    ----------
    folder : str or Path
        Made if it is missing.

    Returns
    -------
    Path
        The job file.

    Raises
    ------
    WriteError
        If a file cannot be written.
    """
    exposure_us, rate_hz, frames = 15_000, 30.0, 15
    scene = make_scene("label", (346, 260), np.random.default_rng(20_260), speed_px_s=12.0 / (exposure_us * 1e-6))
    camera = Camera(rate_hz=rate_hz, exposure_us=exposure_us, start_us=20_000)
    sensor = EventSensor(0.20, 0.22, mismatch=0.03, noise_hz=1.0, hot_fraction=1e-4, latency_jitter_us=20.0)
    duration_s = 2 * camera.start_us * 1e-6 + exposure_us * 1e-6 + (frames - 1) / rate_hz
    recorded = simulate(
        scene, camera, sensor, duration_s, seed=20_260, clock_offset_us=-7_300, title="Labelling wheel, line 3"
    )
    return write_recording(recorded, folder)


def _png(codes: NDArray[np.generic]) -> bytes:
    """Pack one frame's code values, (H, W) or (H, W, 3), as PNG: 8 bits a sample, or 16 for anything deeper."""
    stored = codes if codes.ndim == 2 else codes[..., ::-1]
    good, packed = cv2.imencode(".png", np.ascontiguousarray(stored))
    if not good:
        raise WriteError(f"a frame of shape {codes.shape} and type {codes.dtype} cannot be packed as PNG")
    return packed.tobytes()


def _write_events(path: Path, events: EventArray) -> None:
    """Write t, x, y, p as HDF5 columns."""
    import h5py

    columns = {"t": events.events.t_us, "x": events.events.x, "y": events.events.y, "p": events.events.polarity}
    # no time stamps inside: the same recording gives the same bytes
    with h5py.File(path, "w", track_order=False) as file:
        for name, column in columns.items():
            file.create_dataset(
                name,
                data=column,
                chunks=(CHUNK,),
                maxshape=(None,),
                shuffle=True,
                compression="gzip",
                compression_opts=1,
            )


def _truth(simulated: Simulated) -> str:
    """Tell what a real recording would not, as TOML."""
    sensor, clock = simulated.sensor, simulated.clock
    hot = ", ".join(f"[{x}, {y}]" for x, y in simulated.hot)
    return "\n".join(
        [
            "# The truth behind this simulated recording; nothing reads it but you.",
            f'scene = "{simulated.scene.name}"',
            f"speed_px_s = {simulated.scene.speed_px_s:.3f}",
            f"seed = {simulated.seed}",
            "",
            "[contrast]",
            f"positive = {sensor.contrast_positive}",
            f"negative = {sensor.contrast_negative}",
            f"mismatch = {sensor.mismatch}",
            "",
            "[clock]",
            f"offset_us = {clock.offset_us}",
            f"drift_ppm = {clock.drift_ppm}",
            "",
            "[pixels]",
            f"hot = [{hot}]",
            "",
        ]
    )


def _job(simulated: Simulated, frames: FrameArray, events: EventArray) -> str:
    """Write the job a user would write for it; what the tool can find out by itself is left out."""
    light = frames.light
    width, height = events.size
    return "\n".join(
        [
            f'title = "{simulated.recording.title}"',
            "",
            "[frames]",
            'source = "frames"',
            'times = "frames.csv"',
            f'light_curve = "{light.curve}"',
            f"black = {light.black:g}",
            f"white = {light.white:g}",
            *_shutter(simulated.camera.row_time_us),
            *([] if simulated.camera.mosaic == "none" else [f'mosaic = "{simulated.camera.mosaic}"']),
            "",
            "[events]",
            'source = "events.h5"',
            f"size = [{width}, {height}]",
            f'cover = ["{events.cover_start_us} us", "{events.cover_end_us} us"]',
            "",
            "[slow_motion]",
            "factor = 8",
            "",
            "[measure]",
            "hold_out = 2",
            "",
            "[output]",
            'folder = "out"',
            "",
        ]
    )


def _shutter(row_time_us: float) -> list[str]:
    return ['shutter = "rolling"', f'row_time = "{row_time_us!r} us"'] if row_time_us else []


def _write(path: Path, content: bytes) -> None:
    _replace(path, lambda temporary: temporary.write_bytes(content))


def _replace(path: Path, fill: Callable[[Path], object]) -> None:
    """Fill a temporary file and move it into place: the name never stands for half a file."""
    temporary = path.with_name(f".{path.name}.{os.getpid()}-{uuid.uuid4().hex[:8]}.part")
    try:
        fill(temporary)
        with temporary.open("rb") as file:
            os.fsync(file.fileno())
        os.replace(temporary, path)
    except OSError as error:
        raise WriteError(
            f"{path}: cannot be written ({error}). Free some space or choose a folder that can be written."
        ) from error
    finally:
        temporary.unlink(missing_ok=True)
