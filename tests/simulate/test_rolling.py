"""A rolling camera against the global one: each row is the global frame's that is exposed at that row's time."""

from dataclasses import dataclass

import numpy as np
import pytest

from enhance.simulate import Camera, EventSensor, simulate

CLEAN = {"bits": 16, "full_well": None, "exposure_us": 4_000, "rate_hz": 100.0}


@dataclass(frozen=True)
class Grating:
    """A sine that pans to the right; all rows alike."""

    speed_px_s: float = 400.0
    size: tuple = (60, 12)
    name: str = "grating"

    def render(self, t_s):
        x = np.arange(self.size[0]) - self.speed_px_s * t_s
        return np.tile(0.5 + 0.4 * np.sin(2 * np.pi * 0.05 * x), (self.size[1], 1)).astype(np.float32)


def frames_of(camera, duration_s=0.06, scene=None):
    source = simulate(scene or Grating(), camera, EventSensor(), duration_s, 3).recording.frames
    return np.stack([source.frame(i).image for i in range(len(source))]), source.start_us


def exact(starts_us):
    """Mean over 4 ms of the grating, in closed form: a sine averaged over time T shrinks by sinc(f v T)."""
    f, v, length = 0.05, 400.0, 4e-3
    phase = 2 * np.pi * f * (np.arange(60) - v * (np.asarray(starts_us)[:, None] * 1e-6 + length / 2))
    return 0.5 + 0.4 * np.sinc(f * v * length) * np.sin(phase)


# 600 us from row to row: exposures of successive frames overlap in time, though in no row
@pytest.mark.parametrize("row_time", [100.0, 600.0, -250.5])
def test_each_row_is_exposed_at_its_own_time(row_time):
    images, starts = frames_of(Camera(start_us=4_000, row_time_us=row_time, **CLEAN))
    assert len(images) >= 4
    for image, start in zip(images, starts, strict=True):
        np.testing.assert_allclose(image, exact(start + np.floor(row_time * np.arange(12))), atol=4e-4)


def test_only_frames_all_of_whose_rows_fit_are_taken():
    _, starts = frames_of(Camera(start_us=1_000, row_time_us=600.0, **CLEAN), duration_s=0.0316)
    # row 11 of a frame ends 11 * 600 + 4000 us after its start
    assert starts.tolist() == [1_000, 11_000, 21_000]
    _, starts = frames_of(Camera(start_us=1_000, row_time_us=600.0, **CLEAN), duration_s=0.0315)
    assert starts.tolist() == [1_000, 11_000]


def test_rows_read_upward_must_not_begin_before_the_recording():
    with pytest.raises(ValueError, match=r"row 11 of the first frame is exposed at -5600 us; .* 6600 or more"):
        frames_of(Camera(start_us=1_000, row_time_us=-600.0, **CLEAN))


def test_the_events_are_those_of_the_global_camera():
    rolling, plain = (
        simulate(Grating(), Camera(start_us=4_000, row_time_us=row_time, **CLEAN), EventSensor(), 0.06, 3).recording
        for row_time in (200.0, 0.0)
    )
    one, two = rolling.events.events, plain.events.events
    assert abs(len(one) - len(two)) < 0.02 * len(two)
