"""Which instants a job shows, and when the clip shows them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction

from enhance.clock import factor_times, rate_times
from enhance.errors import JobError
from enhance.settings import ClipSettings, SlowMotionSettings, Window

#: A span longer than this many usual ones has lost a frame.
DROPPED = Fraction(3, 2)
#: Pictures a span where a job names neither a factor nor a rate.
USUAL_FACTOR = 8


@dataclass(frozen=True)
class Planned:
    """One picture to make.

    Parameters
    ----------
    time_us : int
        Its instant.
    pts_us : int or None
        When the clip shows it; None for a still outside the clip.
    """

    time_us: int
    pts_us: int | None


@dataclass(frozen=True)
class Plan:
    """All pictures of a job, in time order.

    Parameters
    ----------
    pictures : tuple of Planned
    playback_rate : Fraction or None
        Pictures a second of the clip at its densest; None without a clip.
    slowed : Fraction or None
        Seconds of clip for one second of scene.
    remarks : tuple of str
        What the user should know, such as spans over dropped frames.
    """

    pictures: tuple[Planned, ...]
    playback_rate: Fraction | None = None
    slowed: Fraction | None = None
    remarks: tuple[str, ...] = ()


def make_plan(settings: ClipSettings, times_us: Sequence[int]) -> Plan:
    """Plan a job's pictures.

    Parameters
    ----------
    settings : ClipSettings
    times_us : sequence of int
        Times of the keys.

    Returns
    -------
    Plan

    Raises
    ------
    JobError
        If a window or a still lies outside the recording.
    """
    wanted = [times_us[0] + t for t in settings.output.times_us]
    mistakes = [
        f"output.times: {(t - times_us[0]) / 1e6:.6f} s is outside the keys, which run from 0 to "
        f"{(times_us[-1] - times_us[0]) / 1e6:.6f} s; no picture is made outside them"
        for t in wanted
        if not times_us[0] <= t <= times_us[-1]
    ]
    clip: dict[int, int] = {}
    slow = settings.slow_motion
    plan = Plan(())
    if slow is not None and len(times_us) > 1:
        plan, mistakes_of_windows = _plan_clip(slow, times_us)
        mistakes += mistakes_of_windows
        clip = {p.time_us: p.pts_us for p in plan.pictures if p.pts_us is not None}
    if mistakes:
        raise JobError(f"{settings.title}: {len(mistakes)} instants cannot be shown", mistakes)
    stills = set(times_us) if slow is None else set()
    instants = sorted(stills | set(wanted) | set(clip)) if (stills or wanted or clip) else [times_us[0]]
    pictures = tuple(Planned(t, clip.get(t)) for t in instants)
    return Plan(pictures, plan.playback_rate, plan.slowed, plan.remarks)


def _plan_clip(slow: SlowMotionSettings, times_us: Sequence[int]) -> tuple[Plan, list[str]]:
    usual = _usual_span(times_us)
    windows = slow.windows or (Window(0, times_us[-1] - times_us[0] + 1),)
    slowed = _slowed(slow, windows, usual)
    pictures: list[Planned] = []
    mistakes: list[str] = []
    next_pts = Fraction(0)
    for window in windows:
        instants = _instants(slow, window, times_us)
        if not instants:
            mistakes.append(
                f"slow_motion.windows: {window.from_us / 1e6} s to {window.to_us / 1e6} s holds no picture; the keys "
                f"run from 0 to {(times_us[-1] - times_us[0]) / 1e6:.6f} s"
            )
            continue
        start = next_pts
        pts = [start + (t - instants[0]) * slowed for t in instants]
        pictures += [Planned(t, int(p)) for t, p in zip(instants, pts, strict=True)]
        # The next window follows without a gap: after the last picture has stood as long as the one before.
        step = pts[-1] - pts[-2] if len(pts) > 1 else 1_000_000 / slow.playback_rate
        next_pts = pts[-1] + step
    return Plan(tuple(pictures), slow.playback_rate, slowed, _remarks(times_us, usual)), mistakes


def _instants(slow: SlowMotionSettings, window: Window, times_us: Sequence[int]) -> list[int]:
    """Instants of the grid inside ``[from, to)``."""
    low, high = times_us[0] + window.from_us, times_us[0] + window.to_us
    if slow.scene_rate is not None:
        grid = rate_times(times_us[0], times_us[-1], slow.scene_rate)
        return [t for t in grid if low <= t < high]
    factor = window.factor or slow.factor or USUAL_FACTOR
    grid = []
    for first, last in zip(times_us[:-1], times_us[1:], strict=True):
        if first < high and last >= low:
            grid += [first, *factor_times(first, last, factor)]
    grid.append(times_us[-1])
    # Keys closer than n microseconds would put two pictures on one instant.
    return [t for t in sorted(set(grid)) if low <= t < high]


def _slowed(slow: SlowMotionSettings, windows: Sequence[Window], usual: int) -> Fraction:
    """Clip time for scene time: one speed for the whole clip, so that its densest stretch plays at the rate asked."""
    if slow.scene_rate is not None:
        return slow.scene_rate / slow.playback_rate
    factor = max(window.factor or slow.factor or USUAL_FACTOR for window in windows)
    return Fraction(factor * 1_000_000) / (slow.playback_rate * usual)


def _usual_span(times_us: Sequence[int]) -> int:
    spans = sorted(b - a for a, b in zip(times_us[:-1], times_us[1:], strict=True))
    return spans[len(spans) // 2]


def _remarks(times_us: Sequence[int], usual: int) -> tuple[str, ...]:
    long = [
        (a - times_us[0], b - a) for a, b in zip(times_us[:-1], times_us[1:], strict=True) if b - a > DROPPED * usual
    ]
    if not long:
        return ()
    where = ", ".join(f"{at / 1e6:.3f} s ({length / usual:.1f} times the usual)" for at, length in long[:5])
    more = f" and {len(long) - 5} more" if len(long) > 5 else ""
    return (f"spans over dropped frames, which keep their scene speed: {len(long)}, at {where}{more}",)
