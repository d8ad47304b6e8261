"""What the rig knows of lamp, lost events and bad pixels reaches the user in words and quality.json in numbers."""

from dataclasses import replace

from enhance.clip.remarks import lost_figures, rig_remarks
from enhance.rig import Quantity, Rig

PLAIN = Rig(Quantity(0), Quantity(0.0), Quantity(0.2), Quantity(0.2))


def test_a_rig_without_trouble_has_nothing_to_say() -> None:
    assert rig_remarks(PLAIN) == []
    assert lost_figures(PLAIN)["stretches_us"] == []


def test_a_lamp_is_told_with_depth_and_what_was_done_to_the_frames() -> None:
    lit = replace(PLAIN, flicker_hz=Quantity(100.02), flicker_depth=Quantity(0.21), flicker_in_frames=Quantity(1))
    assert rig_remarks(lit) == [
        "a lamp flickers at 100.02 Hz, depth of modulation 0.21: its events were taken out; frames were brought to "
        "steady light"
    ]
    (apart,) = rig_remarks(replace(lit, flicker_in_frames=Quantity(0, None, "", "these follow it 0.02 times")))
    assert apart.endswith("the frames do not show it and stay as they are (these follow it 0.02 times)")
    (unknown,) = rig_remarks(replace(lit, offset_us=Quantity(None)))
    assert unknown == "a lamp flickers at 100.02 Hz; frames that beat with it stay as they are"


def test_lost_events_are_told_with_their_times() -> None:
    lost = Quantity([[100_000, 112_000, 1.0]], None, "", "gap from 0.100 to 0.112 s (sure)")
    broken = replace(PLAIN, lost=lost)
    (remark,) = rig_remarks(broken)
    assert remark.startswith("events are missing in 1 stretch of the recording (gap from 0.100 to 0.112 s (sure))")
    assert lost_figures(broken)["stretches_us"] == [[100_000, 112_000, 1.0]]


def test_dead_pixels_are_counted() -> None:
    (remark,) = rig_remarks(replace(PLAIN, dead_pixels=Quantity([[3, 4], [7, 7]])))
    assert remark == "dead pixels of the event sensor, given their neighbours' events: 2"
