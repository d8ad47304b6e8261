"""What flows: half-open windows, times of frames, sources in memory."""

import numpy as np
import pytest

from enhance.light import Light
from enhance.recording import By, Contrast, EventArray, Events, Frame, FrameArray, Kind, Picture

EPOCH_US = 1_589_163_147_364_965


def train(times):
    n = len(times)
    return Events(
        np.asarray(times, np.int64), np.arange(n, dtype=np.uint16), np.zeros(n, np.uint16), np.ones(n, np.int8)
    )


def test_windows_of_events_are_half_open_and_keep_ties_in_order():
    events = train([10, 20, 20, 30])
    assert events.between(10, 30).x.tolist() == [0, 1, 2]
    assert events.between(20, 20).t_us.tolist() == []
    assert events.between(20, 21).x.tolist() == [1, 2]
    assert len(events.between(31, 99)) == len(Events.none()) == 0


def test_neighbouring_windows_share_out_all_events():
    rng = np.random.default_rng(1)
    events = train(np.sort(EPOCH_US + rng.integers(0, 1000, 500)))
    borders = [EPOCH_US + k for k in range(0, 1001, 50)]
    parts = [events.between(a, b) for a, b in zip(borders[:-1], borders[1:], strict=True)]
    assert np.concatenate([part.x for part in parts]).tolist() == events.x.tolist()


def test_a_window_is_a_view_not_a_copy():
    events = train(range(100))
    assert np.shares_memory(events.between(10, 20).t_us, events.t_us)


def test_empty_events_keep_their_types():
    none = Events.none()
    assert [none.t_us.dtype, none.x.dtype, none.y.dtype, none.polarity.dtype] == [
        np.int64,
        np.uint16,
        np.uint16,
        np.int8,
    ]


@pytest.mark.parametrize(("row_time", "expected"), [(0.0, 1_500), (10.0, 1_540), (-10.0, 1_460), (-0.1, 1_499)])
def test_a_frame_stands_in_the_middle_of_its_middle_row(row_time, expected):
    # start/end are row 0's, row r is row_time * r later; 8 rows: the middle one is row 4
    frame = Frame(np.zeros((8, 4), np.float32), 1_000, 2_001, row_time)
    assert frame.time_us == expected
    assert frame.exposure_us == 1_001


def test_contrast_gives_both_thresholds_and_their_mean():
    contrast = Contrast(0.2, 0.3)
    assert contrast.thresholds == (0.2, 0.3)
    assert contrast.mean == pytest.approx(0.25)


def test_events_in_memory_cover_first_to_last_or_what_they_are_told():
    events = train([5, 6, 9])
    plain, told = EventArray(events, (3, 1)), EventArray(events, (3, 1), cover=(0, 20))
    assert (plain.cover_start_us, plain.cover_end_us) == (5, 10)
    assert (told.cover_start_us, told.cover_end_us) == (0, 20)
    assert (told.first_us, told.last_us, told.count) == (5, 9, 3)
    assert told.count_between(5, 9) == len(told.between(5, 9)) == 2


@pytest.mark.parametrize("shape", [(2, 4, 6), (2, 4, 6, 3)])
def test_frames_in_memory_are_decoded_through_their_curve(shape):
    codes = np.full(shape, 128, np.uint8)
    frames = FrameArray(codes, np.array([0, 40_000]), np.array([500, 40_500]), Light("srgb"))
    frame = frames.frame(1)
    assert frame.image.dtype == np.float32
    assert frame.image.shape == frames.shape == shape[1:]
    assert frame.image.max() == pytest.approx(0.2158605, abs=1e-6)  # IEC 61966-2-1
    assert (frame.start_us, frame.end_us, frame.time_us) == (40_000, 40_500, 40_250)
    assert (frames.full_size, frames.crop_origin, len(frames)) == ((6, 4), (0, 0), 2)
    assert frames.gain.tolist() == [1.0, 1.0]
    assert list(frames.names) == ["0", "1"]


def test_kinds_are_written_as_their_words():
    assert [f"{kind}" for kind in Kind] == ["captured", "deblurred", "inserted"]


@pytest.mark.parametrize(
    ("error", "decibel"),
    [
        ([[1e-3, 1e-3]], 30.0),
        ([[0.0, 2e-4]], 40.0),  # the mean counts, not the mean of the pixels' own dB
        ([[0.0, 0.0]], 100.0),
        (None, None),
        ([[np.nan, 1e-3]], None),
        ([[np.inf, 1e-3]], None),
    ],
)
def test_expected_psnr_is_that_of_the_mean_expected_error(error, decibel):
    error = None if error is None else np.array(error, np.float32)
    picture = Picture(np.zeros((1, 2), np.float32), 0, Kind.INSERTED, By.NETWORK, error)
    assert picture.expected_psnr == (None if decibel is None else pytest.approx(decibel, abs=1e-5))
