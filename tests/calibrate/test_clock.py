"""The offset between the two clocks, recovered from simulated recordings whose clock is known."""

import numpy as np
import pytest

from enhance.calibrate.clock import _choose_peak, coarse_offset, coarse_peak
from enhance.calibrate.evidence import gather_pairs
from enhance.errors import CalibrationError
from enhance.recording import EventArray, Events, FrameArray

EPOCH_US = 1_700_000_000_000_000


@pytest.mark.parametrize(
    ("name", "shift_us"),
    [
        pytest.param("plain", 0, id="milliseconds off"),
        pytest.param("plain", EPOCH_US, id="epochs that never meet"),
        pytest.param("strong", 0, id="other thresholds, mismatch and noise"),
        pytest.param("colour", 0, id="colour frames"),
        pytest.param("long", 1_500_000, id="events 1.5 s late"),
        pytest.param("long", -1_500_000, id="events 1.5 s early"),
    ],
)
def test_the_offset_is_found_within_3_percent_of_the_exposure(simulated, found, name, shift_us):
    truth = simulated(name)
    offset = found(name, shift_us).offset_us
    assert abs(offset.value - (truth.clock.offset_us - shift_us)) < 0.03 * truth.camera.exposure_us
    assert isinstance(offset.value, int)
    assert 0 < offset.uncertainty < 0.03 * truth.camera.exposure_us
    assert "correlation 0.9" in offset.evidence
    assert ("epochs do not overlap: starts matched first" in offset.evidence) == (shift_us == EPOCH_US)


@pytest.mark.parametrize("name", ["plain", "strong", "colour"])
def test_what_is_left_is_within_twice_the_uncertainty_and_near_1_percent_of_the_exposure(simulated, found, name):
    # a plain staircase is 0.7 to 0.9 ms early there
    truth, offset = simulated(name), found(name, 0).offset_us
    left = abs(offset.value - truth.clock.offset_us)
    assert left < 0.016 * truth.camera.exposure_us
    assert left < 2 * offset.uncertainty


def pairs_of(recording):
    return gather_pairs(recording.frames, range(len(recording.frames)))


def test_the_coarse_search_lands_within_its_step_over_its_whole_range(simulated, shifted):
    recording = simulated("plain").recording
    for true_us in (-1_900_000, 40_000):
        events = shifted(recording, -5_300 - true_us).events
        assert abs(coarse_offset(pairs_of(recording)[:3], events).offset_us - true_us) <= 4_000


def test_the_coarse_search_reads_events_piece_by_piece(simulated):
    recording = simulated("plain").recording
    lengths = []

    class Watched:
        def between(self, start_us, end_us):
            lengths.append(end_us - start_us)
            return recording.events.between(start_us, end_us)

    coarse_offset(pairs_of(recording)[:1], Watched())
    # 2 s either side in pieces of a tenth of a second
    assert max(lengths) <= 100_000
    assert sum(lengths) >= 4_000_000


def test_the_scatter_of_events_on_the_grid_equals_a_direct_count(simulated):
    # correlation at one offset, straight from its definition
    recording = simulated("plain").recording
    pair = pairs_of(recording)[3]
    peak = coarse_peak([pair], recording.events, 100_000)
    seen = recording.events.between(pair.first.time_us - peak.offset_us, pair.second.time_us - peak.offset_us)
    shape = pair.change.shape
    total = np.zeros(shape)
    np.add.at(total, (seen.y.astype(int), seen.x.astype(int)), seen.polarity)
    strong = np.abs(pair.change) >= np.sort(np.abs(pair.change), axis=None)[-4_000]
    assert np.corrcoef(total[strong], pair.change[strong])[0, 1] == pytest.approx(peak.correlation, abs=0.02)


def test_a_repeating_scene_names_its_rivals_and_takes_the_smallest():
    offsets = np.arange(-100_000, 100_001, 2_000)
    peak = _choose_peak(offsets, np.cos(2 * np.pi * (offsets - 6_000) / 40_000))
    assert peak.offset_us == 6_000
    assert set(peak.rivals_us) == {-74_000, -34_000, 46_000, 86_000}
    assert "a repeating scene: -74 ms, -34 ms, 46 ms, 86 ms fit as well, the smallest was taken" in peak.remark


def test_one_broad_hill_is_one_answer():
    offsets = np.arange(-100_000, 100_001, 2_000)
    peak = _choose_peak(offsets, np.exp(-(((offsets + 8_000) / 30_000.0) ** 2)))
    assert (peak.offset_us, peak.rivals_us, peak.remark) == (-8_000, (), "")


def noise_events(seed, count, size, start_us, end_us):
    rng = np.random.default_rng(seed)
    return Events(
        np.sort(rng.integers(start_us, end_us, count)),
        rng.integers(0, size[0], count).astype(np.uint16),
        rng.integers(0, size[1], count).astype(np.uint16),
        rng.choice(np.array([-1, 1], np.int8), count),
    )


def test_events_of_noise_alone_tell_no_clock(simulated):
    recording = simulated("plain").recording
    noise = EventArray(noise_events(1, 200_000, (80, 60), -2_000_000, 2_200_000), (80, 60))
    with pytest.raises(
        CalibrationError, match=r"do not move together \(best correlation only 0.[01]\d\); too little mot"
    ):
        coarse_offset(pairs_of(recording), noise)


@pytest.mark.parametrize("other", ["strong", "long"])
def test_events_of_another_scene_tell_no_clock(simulated, other):
    recording, elsewhere = simulated("colour").recording, simulated(other).recording
    seen = elsewhere.events.events
    inside = (seen.x < 64) & (seen.y < 48)
    events = EventArray(seen.keep(inside), (64, 48))
    with pytest.raises(CalibrationError, match="do not move together .* too little motion, or two different scenes"):
        coarse_offset(pairs_of(recording), events)


def test_exchanged_polarities_are_told(simulated):
    recording = simulated("plain").recording
    seen = recording.events.events
    swapped = EventArray(Events(seen.t_us, seen.x, seen.y, -seen.polarity), recording.events.size)
    with pytest.raises(
        CalibrationError, match=r"brighter where frames grow darker \(correlation -0.9\d, against 0.\d\d "
    ):
        coarse_offset(pairs_of(recording), swapped)


def test_no_events_in_reach_tell_no_clock(simulated, shifted):
    recording = simulated("plain").recording
    with pytest.raises(CalibrationError, match="no events near the keys"):
        coarse_offset(pairs_of(recording), shifted(recording, 60_000_000).events)


@pytest.mark.parametrize("code", [0, 120, 255], ids=["dark", "static", "clipped"])
def test_frames_in_which_nothing_changes_tell_no_clock(simulated, code):
    # 0 / 0 must not pass for a correlation
    recording = simulated("plain").recording
    frames = recording.frames
    flat = FrameArray(np.full_like(frames.codes, code), frames.start_us, frames.end_us, frames.light)
    with pytest.raises(CalibrationError, match="no usable pixel of the frames changes"):
        coarse_offset(gather_pairs(flat, range(len(flat))), recording.events)


def test_no_pair_of_keys_tells_no_clock(simulated):
    with pytest.raises(CalibrationError, match="no two successive keys within 2 s of each other"):
        coarse_offset([], simulated("plain").recording.events)
