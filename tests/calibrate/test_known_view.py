"""What a job and its files tell of where the sensor looks: lens files, matrices, precedence, frames on event pixels."""

from dataclasses import replace

import cv2
import numpy as np
import pytest

from enhance.calibrate import calibrate, known_rig, read_rig, rig_text
from enhance.calibrate.known_view import on_sensor
from enhance.calibrate.lens_file import read_lens
from enhance.errors import CalibrationError
from enhance.light import Light
from enhance.recording import EventArray, Events, FrameArray, Recording
from enhance.rig import Quantity, Rig, RiggedEvents
from enhance.settings import RigSettings
from enhance.view import View

FULL, SENSOR = (48, 36), (12, 9)
QUARTER = ((4.0, 0.0, 1.5), (0.0, 4.0, 1.5), (0.0, 0.0, 1.0))
COEFFICIENTS = [-0.2, 0.05, 0.001, -0.002, 0.01]


def lens_file(path, size=FULL, coefficients=COEFFICIENTS, focal=(60.0, 61.0), leave_out=()):
    """Write a lens file by OpenCV itself."""
    file = cv2.FileStorage(str(path), cv2.FILE_STORAGE_WRITE)
    values = {
        "image_width": size[0],
        "image_height": size[1],
        "camera_matrix": np.array([[focal[0], 0, 23.5], [0, focal[1], 17.0], [0, 0, 1]]),
        "distortion_coefficients": np.array([coefficients]),
    }
    for name, value in values.items():
        if name not in leave_out:
            file.write(name, value)
    file.release()
    return path


@pytest.fixture
def recording():
    rng = np.random.default_rng(3)
    codes = rng.integers(40, 200, (3, FULL[1], FULL[0])).astype(np.uint8)
    starts = np.array([0, 20_000, 40_000])
    frames = FrameArray(codes, starts, starts + 10_000, Light("linear", 0, 255))
    count = 200
    events = Events(
        np.sort(rng.integers(0, 60_000, count)),
        rng.integers(0, SENSOR[0], count).astype(np.uint16),
        rng.integers(0, SENSOR[1], count).astype(np.uint16),
        np.where(rng.random(count) > 0.5, 1, -1).astype(np.int8),
    )
    return Recording("line 4", frames, EventArray(events, SENSOR, (0, 60_000)))


@pytest.mark.parametrize("suffix", [".yml", ".yaml", ".json", ".xml"])
def test_a_lens_is_read_from_every_form_that_opencv_writes(tmp_path, suffix):
    numbers = read_lens(lens_file(tmp_path / f"lens{suffix}"), FULL)
    assert numbers == pytest.approx([60.0, 61.0, 23.5, 17.0, *COEFFICIENTS])


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"leave_out": ("camera_matrix",)}, "lens.yml: camera_matrix: found nothing; expected a matrix of 3 x 3"),
        ({"leave_out": ("distortion_coefficients",)}, "distortion_coefficients: found nothing; expected"),
        ({"coefficients": [0.1, 0.2, 0.3]}, "found 3 numbers, .*; expected a matrix of 4, 5, 8, 12 or 14 numbers"),
        ({"coefficients": [0.1, np.nan, 0, 0]}, "numbers, or some that are none"),
        ({"focal": (-1.0, 60.0)}, "found focal lengths -1 and 60; expected pixels, above 0"),
        ({"size": (640, 480)}, r"is for pictures of \[640, 480\], these are of \[48, 36\] .width, height."),
    ],
)
def test_a_lens_file_that_cannot_be_is_refused_with_what_to_mend(tmp_path, changes, message):
    with pytest.raises(CalibrationError, match=message):
        read_lens(lens_file(tmp_path / "lens.yml", **changes), FULL)


def test_a_lens_file_that_is_none_or_not_there_is_named(tmp_path):
    (tmp_path / "text.yml").write_text("camera_matrix: [1, 2")
    with pytest.raises(CalibrationError, match=r"text.yml: this lens file cannot be read .* begins with %YAML:1.0"):
        read_lens(tmp_path / "text.yml", FULL)
    with pytest.raises(CalibrationError, match="none.yml: there is no such lens file; check rig.registration"):
        read_lens(tmp_path / "none.yml", FULL)


def test_a_matrix_that_maps_everything_outside_is_refused_with_where_it_leads(recording):
    far = ((4.0, 0.0, 100.0), (0.0, 4.0, 1.5), (0.0, 0.0, 1.0))
    with pytest.raises(
        CalibrationError,
        match=r"line 4: rig.registration maps the whole event sensor of 12 x 9 outside the frames: its centre lands at "
        r"\(122.0, 17.5\), the frames show x 0 to 47 and y 0 to 35",
    ):
        known_rig(recording, RigSettings(registration=far))


def test_a_given_matrix_goes_before_the_file_and_that_before_one_shared_view(recording, tmp_path):
    path = tmp_path / "rig.toml"
    turned = [[4.0, 0.1, 2.0], [-0.1, 4.0, 1.0], [0.0, 0.0, 1.0]]
    known = Rig(*[Quantity(0)] * 2, *[Quantity(0.2)] * 2, sensor_size=SENSOR, registration=Quantity(turned, 0.07))
    path.write_text(rig_text(known))
    for settings, value in (
        (RigSettings(registration=QUARTER, file=path), [list(row) for row in QUARTER]),
        (RigSettings(file=path), turned),
        (RigSettings(file=path, registration="estimate"), turned),
        (RigSettings(), [list(row) for row in QUARTER]),
        (RigSettings(file=path, registration="shared"), [list(row) for row in QUARTER]),
    ):
        np.testing.assert_allclose(known_rig(recording, settings).registration.value, value)
    assert known_rig(recording, RigSettings(registration="estimate")).registration.value is None


def test_registration_and_lenses_survive_the_rig_file(recording, tmp_path):
    settings = RigSettings(registration=QUARTER, frame_lens=lens_file(tmp_path / "frames.yml"))
    rig = replace(known_rig(recording, settings), offset_us=Quantity(0), contrast_positive=Quantity(0.2))
    path = tmp_path / "rig.toml"
    path.write_text(rig_text(rig))
    again = read_rig(path, SENSOR)
    assert again.registration.value == [list(row) for row in QUARTER]
    assert again.frame_lens.value == pytest.approx([60.0, 61.0, 23.5, 17.0, *COEFFICIENTS])
    assert again.event_lens.value is None
    assert again.view.frame_lens == rig.view.frame_lens


@pytest.mark.parametrize(
    ("section", "value", "expected"),
    [
        ("registration.matrix", "[[1, 0, 0], [0, 1, 0]]", "three rows of three numbers"),
        ("registration.matrix", "[[1, 2, 0], [2, 4, 0], [0, 0, 1]]", "no singular matrix"),
        ("registration.event_lens", "[60, 60, 20, 20, 0.1]", "fx, fy, cx, cy and 4, 5, 8, 12 or 14 coefficients"),
    ],
)
def test_a_rig_file_with_a_map_that_cannot_be_is_refused(tmp_path, section, value, expected):
    path = tmp_path / "rig.toml"
    path.write_text(f"[sensor]\nsize = [12, 9]\n[{section}]\nvalue = {value}\n")
    with pytest.raises(CalibrationError, match=f"{section}.*cannot be; expected .*{expected}"):
        read_rig(path, SENSOR)


def test_frames_on_event_pixels_are_the_mean_over_each_and_dark_outside(recording):
    moved = View(np.array([[4.0, 0, 5.5], [0, 4, 1.5], [0, 0, 1]]))
    seen = on_sensor(recording, moved).frames
    image, whole = seen.frame(1).image, recording.frames.frame(1).image
    assert (seen.shape, seen.full_size, seen.crop_origin) == (SENSOR[::-1], SENSOR, (0, 0))
    assert image.dtype == np.float32
    # the Gaussian that stands in for a box follows the mean of 4 x 4 pixels, not their spread
    boxes = whole.reshape(9, 4, 12, 4).mean(axis=(1, 3))
    assert np.corrcoef(image[1:-1, 1:-2].ravel(), boxes[1:-1, 2:-1].ravel())[0, 1] > 0.85
    assert (image[:, -1] == 0).all()


def test_a_lens_is_used_where_events_meet_the_frames(recording, tmp_path):
    plain, bent = (
        known_rig(recording, RigSettings(registration=QUARTER, frame_lens=lens, offset_us=0))
        for lens in (None, lens_file(tmp_path / "frames.yml"))
    )
    one, two = (RiggedEvents(recording.events, replace(r, hot_pixels=Quantity([])), FULL) for r in (plain, bent))
    found = [events.view.to_frame(np.array([[0.0, 0.0], [5.5, 4.0]])) for events in (one, two)]
    assert np.abs(found[0] - found[1])[0].max() > 0.4  # at the corner
    assert np.abs(found[0] - found[1])[1].max() < 0.05  # at the centre


def test_where_the_sensor_looks_cannot_be_told_without_motion(recording):
    codes = np.repeat(recording.frames.codes[:1], 3, axis=0)
    still = replace(recording, frames=replace(recording.frames, codes=codes))
    asked = RigSettings(registration="estimate", offset_us=0)
    with pytest.raises(
        CalibrationError,
        match="line 4: where the event sensor looks cannot be told: no usable pixel of the frames changes. Give "
        'rig.registration .a matrix from event pixels to frame pixels, or "shared"., or set rig.unknown = "frames"',
    ):
        calibrate(still, range(3), asked)
    rig = calibrate(still, range(3), replace(asked, unknown="frames"))
    assert rig.offset_us.value is rig.registration.value is None
    assert "cannot be told: no usable pixel" in rig.offset_us.evidence
