"""Which edge of the exposure the frames' times mark: a wrong one is told where the clock is known."""

import re
from dataclasses import replace

import pytest

from enhance.calibrate import calibrate
from enhance.calibrate.time_marks import check_clock, edge_of_offset
from enhance.rig import Quantity
from enhance.settings import RigSettings


def told(recording, offset_us):
    settings = RigSettings(offset_us=offset_us, drift_ppm=0.0, contrast=(0.2, 0.24))
    return calibrate(recording, range(len(recording.frames)), settings).clock_check


@pytest.mark.parametrize(
    ("share", "message"),
    [
        (0.5, 'exposures look half an exposure late .*time_marks is likely "middle" in place of "start", or "end" in'),
        (
            -0.5,
            'exposures look half an exposure early .*time_marks is likely "start" in place of "middle", or "middle"',
        ),
        (1.0, 'exposures look a whole exposure late .*time_marks is likely "end" in place of "start"; else check'),
        (-1.0, 'exposures look a whole exposure early .*time_marks is likely "start" in place of "end"'),
        (0.25, r"^frames and events fit best \+3.\d\d \+/- 0.\d\d ms from the given clock: check rig.clock"),
    ],
)
def test_exposures_laid_around_the_wrong_edge_are_told(simulated, share, message):
    # the true offset is -5300: exposures laid later by a share lack as much of an event
    recording = simulated("plain").recording
    frames = recording.frames
    later = round(share * 12_000)
    moved = replace(recording, frames=replace(frames, start_us=frames.start_us + later, end_us=frames.end_us + later))
    found = told(moved, -5_300)
    assert abs(found.value - later) < 3 * found.uncertainty
    assert re.search(message, found.evidence)


def test_the_right_clock_is_let_pass(simulated):
    found = told(simulated("plain").recording, -5_300)
    assert abs(found.value) < 300
    assert found.evidence == ""


def test_sharp_frames_and_single_pairs_tell_nothing_of_edges(simulated):
    assert told(simulated("sharp").recording, -6_600).value is None
    assert check_clock([], simulated("plain").recording.events, None).value is None


def test_an_estimated_offset_of_half_an_exposure_is_remarked():
    assert "time_marks is likely" in edge_of_offset(Quantity(6_050, 60.0), 12_000)
    assert edge_of_offset(Quantity(5_000, 60.0), 12_000) == ""
    assert edge_of_offset(Quantity(250, 60.0), 500) == ""
    assert edge_of_offset(Quantity(None, None), 12_000) == ""
