"""What a job asks for, as plain frozen data: the rooms read their own part, the job file fills all of it.

Times that a job gives relative to the recording (`windows`, `times`) are microseconds from the first frame's time.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from fractions import Fraction
from pathlib import Path

#: What pictures below `ClipSettings.least_psnr` are called wherever pictures are counted.
BELOW_LEAST = "below measure.least_psnr"


@dataclass(frozen=True)
class FramesSettings:
    """Where the frames are and what their code values and times mean.

    Parameters
    ----------
    source : Path
        A folder of images or a video file.
    times : Path, optional
        Times table: ``frame,start_us,end_us[,gain]`` or ``frame,time_us``.
    exposure_us : int, optional
        Where the table or the video has one time a frame. 0 means sharp.
    time_marks : str
        ``start``, ``middle`` or ``end``: what that one time marks.
    light_curve : str, optional
        ``linear``, ``srgb``, ``bt709``, ``gamma G``; None takes a video's tag and is an error for images.
    black, white : float, optional
        Code values of no light (default 0) and of full scale (default: the depth's highest code).
    crop : tuple of int, optional
        x, y, width, height.
    mosaic : str
        ``none``, ``RGGB``, ``BGGR``, ``GRBG`` or ``GBRG``: raw pictures' colours, from the whole frame's corner.
    dark : Path, optional
        A dark frame: one picture taken without light.
    level : str
        ``estimate`` or ``given``: whether steps of brightness and stripes are looked for in the frames themselves.
    """

    source: Path
    times: Path | None = None
    exposure_us: int | None = None
    time_marks: str = "start"
    light_curve: str | None = None
    black: float | None = None
    white: float | None = None
    crop: tuple[int, int, int, int] | None = None
    mosaic: str = "none"
    dark: Path | None = None
    level: str = "estimate"


@dataclass(frozen=True)
class EventsSettings:
    """Where the events are and what their columns mean.

    Parameters
    ----------
    source : Path
        .h5, .npz, .csv, .txt or .parquet.
    columns : mapping, optional
        Any of t, x, y, p to a column's or dataset's name.
    time_unit : str
        s, ms, us or ns.
    size : tuple of int, optional
        Width, height of the sensor; the whole frame's own size if left out.
    cover_us : tuple of int, optional
        When the sensor was really recording, in the event file's own clock.
    """

    source: Path
    columns: Mapping[str, str] | None = None
    time_unit: str = "us"
    size: tuple[int, int] | None = None
    cover_us: tuple[int, int] | None = None


@dataclass(frozen=True)
class RigSettings:
    """What is known of the rig; the rest is read from `file`, or estimated.

    Parameters
    ----------
    file : Path, optional
        A rig file measured earlier.
    contrast : tuple of float, optional
        Thresholds (positive, negative).
    offset_us, drift_ppm : optional
        The clock, where it is given; ``shared`` clocks are 0 and 0.
    row_time_us : float, optional
        Of the frames' shutter: 0 for a global one, negative where rows are read upward; None: a rolling one whose row
        time the rig file tells, or that is estimated.
    unknown : str
        ``stop`` or ``frames``: what to do where the clock cannot be told.
    registration : str or 3x3 nested tuple of float, optional
        ``shared``, ``estimate`` or the matrix from event pixels to whole-frame pixels; None: the file's, or shared.
    frame_lens, event_lens : Path, optional
        Lens files of an OpenCV calibration.
    triggers : Path, optional
        A table of the exposures' starts in the event clock: ``time_us``, one row a frame, or ``frame,time_us``.
    """

    file: Path | None = None
    contrast: tuple[float, float] | None = None
    offset_us: int | None = None
    drift_ppm: float | None = None
    unknown: str = "stop"
    registration: str | tuple[tuple[float, ...], ...] | None = None
    frame_lens: Path | None = None
    event_lens: Path | None = None
    triggers: Path | None = None
    row_time_us: float | None = 0.0


@dataclass(frozen=True)
class Window:
    """A stretch of the recording, microseconds from the first frame's time, with its own factor if it has one."""

    from_us: int
    to_us: int
    factor: int | None = None


@dataclass(frozen=True)
class SlowMotionSettings:
    """Which instants the clip shows, and how fast it plays.

    Parameters
    ----------
    factor : int, optional
        Pictures a span, the first key counted.
    scene_rate : Fraction, optional
        Pictures a second of scene time instead.
    playback_rate : Fraction
        Pictures a second of the clip.
    windows : tuple of Window
        None: the whole recording.
    """

    factor: int | None = None
    scene_rate: Fraction | None = None
    playback_rate: Fraction = Fraction(30)
    windows: tuple[Window, ...] = ()


@dataclass(frozen=True)
class OutputSettings:
    """Where the results go and in which form.

    Parameters
    ----------
    folder : Path
    video : str
        ``h264``, ``ffv1`` or ``none``.
    stills : str
        ``none``, ``deblurred`` or ``all``.
    times_us : tuple of int
        Stills of exactly these instants, from the first frame's time.
    strip : bool
        A caption strip in the clip.
    trust : bool
        A map of the expected error beside every still that has one.
    """

    folder: Path
    video: str = "h264"
    stills: str = "all"
    times_us: tuple[int, ...] = ()
    strip: bool = False
    trust: bool = False


@dataclass(frozen=True)
class ClipSettings:
    """Everything one recording's job asks for.

    Parameters
    ----------
    hold_out : int
        The second pass uses every n-th frame only; 0: no second pass.
    network : str
        ``fusion`` or ``off``.
    least_psnr : float, optional
        Pictures whose expected PSNR, in dB, is lower are marked and counted.
    """

    title: str
    frames: FramesSettings
    events: EventsSettings
    output: OutputSettings
    rig: RigSettings = field(default_factory=RigSettings)
    slow_motion: SlowMotionSettings | None = None
    hold_out: int = 0
    network: str = "fusion"
    least_psnr: float | None = None
