from fractions import Fraction
from pathlib import Path

import pytest

from enhance.clip.plan import make_plan
from enhance.errors import JobError
from enhance.settings import (
    ClipSettings,
    EventsSettings,
    FramesSettings,
    OutputSettings,
    SlowMotionSettings,
    Window,
)


def job(slow=None, **output) -> ClipSettings:
    return ClipSettings(
        "plan",
        FramesSettings(Path("frames")),
        EventsSettings(Path("events.h5")),
        OutputSettings(Path("out"), **output),
        slow_motion=slow,
    )


KEYS = [1_000_003, 1_040_003, 1_080_004, 1_120_006]


def test_factor_inserts_n_minus_one_pictures_a_span_floored() -> None:
    plan = make_plan(job(SlowMotionSettings(factor=8)), KEYS)
    times = [p.time_us for p in plan.pictures]
    assert len(times) == (len(KEYS) - 1) * 8 + 1
    assert times[:3] == [1_000_003, 1_005_003, 1_010_003]
    expected = [a + i * (b - a) // 8 for a, b in zip(KEYS[:-1], KEYS[1:], strict=True) for i in range(8)] + [KEYS[-1]]
    assert times == expected


def test_clip_has_one_speed_and_starts_at_zero() -> None:
    plan = make_plan(job(SlowMotionSettings(factor=8, playback_rate=Fraction(30))), KEYS)
    # 8 pictures of a usual 40 001 us span at 30 a second: 266 667 us of clip for 40 001 us of scene
    assert plan.slowed == Fraction(8 * 1_000_000, 30 * 40_001)
    for p in plan.pictures:
        assert p.pts_us == int((p.time_us - KEYS[0]) * plan.slowed)
    assert plan.pictures[0].pts_us == 0


def test_scene_rate_steps_from_the_first_key_and_is_not_forced_onto_keys() -> None:
    plan = make_plan(job(SlowMotionSettings(scene_rate=Fraction(960), playback_rate=Fraction(24))), KEYS)
    times = [p.time_us for p in plan.pictures]
    assert times == [KEYS[0] + k * 1_000_000 // 960 for k in range(len(times))]
    assert times[-1] <= KEYS[-1] < times[-1] + 1042
    assert plan.slowed == 40


def test_windows_follow_without_a_gap_at_one_speed() -> None:
    slow = SlowMotionSettings(factor=4, windows=(Window(0, 40_000), Window(80_000, 120_004, factor=8)))
    plan = make_plan(job(slow), KEYS)
    first = [p for p in plan.pictures if p.time_us < KEYS[0] + 40_000]
    second = [p for p in plan.pictures if p.time_us >= KEYS[0] + 80_000]
    assert len(first) + len(second) == len(plan.pictures)
    assert [p.time_us - KEYS[0] for p in first] == [0, 10_000, 20_000, 30_000]
    # the densest window plays at the rate asked: 8 pictures of 40 001 us at 30 a second
    step = second[1].pts_us - second[0].pts_us
    assert abs(step - 33_333) < 100
    assert second[0].pts_us - first[-1].pts_us == first[-1].pts_us - first[-2].pts_us
    for stretch in (first, second):
        for a, b in zip(stretch[:-1], stretch[1:], strict=True):
            assert abs((b.pts_us - a.pts_us) - (b.time_us - a.time_us) * plan.slowed) <= 1


def test_dropped_frames_keep_their_scene_speed_and_are_reported() -> None:
    keys = [0, 40_000, 80_000, 200_000, 240_000]
    plan = make_plan(job(SlowMotionSettings(factor=2)), keys)
    assert (
        "spans over dropped frames, which keep their scene speed: 1, at 0.080 s (3.0 times the usual)"
        in plan.remarks[0]
    )
    pts = {p.time_us: p.pts_us for p in plan.pictures}
    assert abs((pts[200_000] - pts[80_000]) - 3 * (pts[40_000] - pts[0])) <= 2


def test_stills_only_makes_the_keys_and_the_instants_asked_for() -> None:
    plan = make_plan(job(times_us=(50_000, 40_000)), KEYS)
    assert [p.time_us for p in plan.pictures] == sorted({*KEYS, 1_050_003, 1_040_003})
    assert all(p.pts_us is None for p in plan.pictures)


def test_instants_outside_the_keys_are_all_named() -> None:
    slow = SlowMotionSettings(factor=8, windows=(Window(300_000, 400_000),))
    with pytest.raises(JobError, match="outside the keys") as caught:
        make_plan(job(slow, times_us=(200_000, -5)), KEYS)
    assert len(caught.value.mistakes) == 3
    assert "holds no picture" in caught.value.mistakes[2]


def test_one_frame_is_one_still() -> None:
    plan = make_plan(job(SlowMotionSettings(factor=8)), [5])
    assert [(p.time_us, p.pts_us) for p in plan.pictures] == [(5, None)]
    assert plan.playback_rate is None


def test_keys_closer_than_the_factor_never_share_an_instant() -> None:
    plan = make_plan(job(SlowMotionSettings(factor=8)), [0, 3, 40_000, 80_000])
    times = [p.time_us for p in plan.pictures]
    assert times == sorted(set(times))
