"""Two sensors with a view each, from files to rig.png and pictures that say where events tell nothing."""

import tomllib

import cv2
import numpy as np
import pytest

from enhance import clip
from enhance.clip.overlap import outside_by_frames, share_of_events
from enhance.recording import By, Kind, Picture
from enhance.settings import ClipSettings, EventsSettings, FramesSettings, OutputSettings, RigSettings
from enhance.simulate import Camera, EventSensor, SecondView, make_scene, simulate, write_recording
from enhance.view import View

FULL, SENSOR = (96, 80), (40, 40)
#: Twice as wide as an event pixel, and 12 frame pixels on the left that the sensor does not see.
MATRIX = ((2.0, 0.0, 12.5), (0.0, 2.0, 0.5), (0.0, 0.0, 1.0))


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    scene = make_scene("parts", FULL, np.random.default_rng(5), 500.0)
    camera = Camera(rate_hz=40.0, exposure_us=12_000, start_us=9_000)
    second = SecondView(View(np.array(MATRIX)), SENSOR)
    path = tmp_path_factory.mktemp("two")
    write_recording(simulate(scene, camera, EventSensor(), 0.2, 5, second_view=second), path)
    return path


@pytest.fixture
def settings(folder, tmp_path):
    return ClipSettings(
        "Two",
        FramesSettings(folder / "frames", folder / "frames.csv", light_curve="linear"),
        EventsSettings(folder / "events.h5", size=SENSOR, cover_us=(0, 200_000)),
        OutputSettings(tmp_path / "out", stills="all"),
        rig=RigSettings(contrast=(0.2, 0.2), offset_us=0, drift_ppm=0.0, registration=MATRIX),
        network="off",
    )


def test_calibrating_leaves_the_rig_and_its_evidence_as_a_picture(settings):
    clip.calibrate(settings, lambda *_: None)
    written = tomllib.loads((settings.output.folder / "rig.toml").read_text())
    assert written["registration"]["matrix"]["value"] == [list(row) for row in MATRIX]
    assert written["registration"]["matrix"]["method"] == "given"
    drawn = cv2.imread(str(settings.output.folder / "rig.png"))
    assert drawn.shape == (880, 720, 3)
    # frames and events agree: in the map more pixels are grey than red or cyan
    panel = drawn[44:480].astype(int)
    lit = panel[panel.max(axis=2) > 60]
    assert (np.ptp(lit, axis=1) < 80).mean() > 0.5


def test_pictures_are_the_frames_own_where_the_sensor_does_not_look():
    seen = np.ones((20, 30), bool)
    seen[:, :10] = False
    one, two = (np.full((20, 30), value, np.float32) for value in (0.2, 0.6))
    by_events = Picture(one, 5, Kind.INSERTED, By.INTEGRAL, error=0.01 * np.ones_like(one))
    alone = Picture(two, 5, Kind.INSERTED, By.FRAMES, error=0.05 * np.ones_like(one))
    made = outside_by_frames(by_events, alone, seen)
    np.testing.assert_array_equal(made.image[:, :10], two[:, :10])
    np.testing.assert_array_equal(made.image[:, 15:], one[:, 15:])
    np.testing.assert_allclose(made.error[:, :10], 0.05)
    np.testing.assert_allclose(made.error[:, 15:], 0.01)
    assert (made.kind, made.time_us) == (Kind.INSERTED, 5)
    # the frame's own border is no border of what is seen
    assert share_of_events(seen)[0, -1] == 1


def test_a_picture_whose_error_is_not_known_outside_has_none():
    seen = np.zeros((4, 4), bool)
    known = Picture(np.zeros((4, 4, 3), np.float32), 0, Kind.INSERTED, By.INTEGRAL, np.zeros((4, 4), np.float32))
    unknown = Picture(np.ones((4, 4, 3), np.float32), 0, Kind.INSERTED, By.FRAMES)
    made = outside_by_frames(known, unknown, seen)
    assert made.error is None
    np.testing.assert_array_equal(made.image, unknown.image)


def test_a_run_writes_which_part_the_events_tell_of(settings):
    result = clip.run(settings, lambda *_: None)
    mask = cv2.imread(str(settings.output.folder / "overlap.png"), cv2.IMREAD_UNCHANGED)
    assert "overlap.png" in result.files
    assert (mask[:, :12] == 0).all()
    assert (mask[:, 12:92] == 65_535).all()
    assert (mask[:, 92:] == 0).all()
    assert any("looks at 83.3% of the picture (overlap.png)" in note for note in result.notes)
