"""Two sensors with a view each: how well the map between them is found, and what coarse events are worth."""

from dataclasses import dataclass, replace

import numpy as np
import pytest

from enhance.calibrate import calibrate
from enhance.clip.keys import Keys
from enhance.clip.pictures import Pictures
from enhance.clip.source import events_on_frames
from enhance.measure import psnr
from enhance.recording import EventArray
from enhance.settings import RigSettings
from enhance.simulate import Camera, EventSensor, SecondView, make_scene, simulate
from enhance.view import View

pytestmark = pytest.mark.slow

#: Event pixels, in the mean over the overlap.
TARGET_PX = 0.3


@dataclass(frozen=True)
class Pair:
    """One rig: scene, sizes, and where the event sensor looks."""

    kind: str
    seed: int
    full: tuple
    sensor: tuple
    pitch: float
    degrees: float = 0.0
    mirror: tuple = (1, 1)
    shift: tuple = (0, 0)
    perspective: tuple = (0.0, 0.0)
    #: The clock is given, or found with the map from this offset.
    offset_us: int | None = None

    def view(self):
        turn = np.deg2rad(self.degrees)
        rotation = np.array([[np.cos(turn), -np.sin(turn)], [np.sin(turn), np.cos(turn)]]) @ np.diag(self.mirror)
        matrix = np.eye(3)
        matrix[:2, :2] = self.pitch * rotation
        centre = (np.array(self.sensor) - 1) / 2
        matrix[:2, 2] = (np.array(self.full) - 1) / 2 + self.shift - matrix[:2, :2] @ centre
        matrix[2, :2] = self.perspective
        return View(matrix)

    def record(self):
        scene = make_scene(self.kind, self.full, np.random.default_rng(self.seed), 600.0)
        camera = Camera(rate_hz=30.0, exposure_us=12_000, start_us=12_000)
        sensor = EventSensor(0.20, 0.22, mismatch=0.03, noise_hz=1.0)
        second = SecondView(self.view(), self.sensor)
        return simulate(scene, camera, sensor, 0.4, self.seed, self.offset_us or 0, second_view=second)


PAIRS = {
    "1:1, turned 1.5 degrees": Pair("parts", 3, (240, 180), (240, 180), 1.0, 1.5, shift=(6, -4)),
    "1:1.9": Pair("label", 4, (240, 180), (120, 90), 1.9, -3, shift=(-5, 6)),
    "1:4": Pair("parts", 5, (320, 240), (80, 60), 4.0, 2, shift=(8, 3)),
    "turned 10 degrees": Pair("texture", 6, (240, 180), (128, 96), 1.7, 10, shift=(10, -8)),
    "mirrored left and right": Pair("text", 7, (240, 180), (160, 120), 1.4, -6, (-1, 1), (3, 5)),
    "keystone": Pair("fan", 8, (240, 180), (160, 120), 1.5, 4, shift=(0, 7), perspective=(2e-4, -1e-4)),
    "mirrored up and down, 1:3": Pair("cloth", 10, (300, 220), (110, 80), 3.0, -8, (1, -1), (-12, 10)),
    "1:1.9, clock not known": Pair("label", 4, (240, 180), (120, 90), 1.9, -3, shift=(-5, 6), offset_us=-3_000),
}


def error_px(found, truth, sensor, full):
    """Mean distance of the two maps over the overlap, event pixels."""
    y, x = np.mgrid[: sensor[1], : sensor[0]].reshape(2, -1).astype(float)
    points = np.column_stack([x, y])
    there = truth.to_frame(points)
    inside = ((there >= 0) & (there <= np.array(full) - 1)).all(axis=1)
    away = View(np.asarray(found)).to_frame(points[inside]) - there[inside]
    return float(np.hypot(*away.T).mean()) / truth.pitch(sensor)


@pytest.mark.parametrize("name", PAIRS)
def test_the_map_between_two_views_is_found(name):
    pair = PAIRS[name]
    recording = pair.record().recording
    settings = RigSettings(registration="estimate", offset_us=0 if pair.offset_us is None else None)
    rig = calibrate(recording, range(len(recording.frames)), settings)
    error = error_px(rig.registration.value, pair.view(), pair.sensor, pair.full)
    print(
        f"\n{name}: {error:.3f} event pixels (said {rig.registration.uncertainty:.3f}), {rig.registration.evidence}; "
        f"clock off by {rig.offset_us.value - (pair.offset_us or 0)} us"
    )
    assert error < TARGET_PX


@pytest.mark.parametrize("pitch", [2, 4])
def test_coarse_events_are_worth_more_than_frames_alone(pitch):
    full = (320, 240)
    pair = Pair("label", 21, full, (full[0] // pitch, full[1] // pitch), float(pitch))
    truth = pair.record()
    recording = truth.recording
    rig = calibrate(recording, range(len(recording.frames)), RigSettings(offset_us=0, registration="shared"))
    keys = Keys(recording.frames, range(len(recording.frames)), events_on_frames(recording, rig), rig)
    blind = Pictures(Keys(recording.frames, range(len(recording.frames)), None, replace(rig)))
    light, pictures = recording.frames.light, Pictures(keys)
    figures = []
    for key in (4, 5, 6):
        time_us = sum(keys.times_us[key : key + 2]) // 2
        reference = light.to_codes(truth.truth(time_us))
        figures.append([psnr(reference, light.to_codes(p.at(time_us).image), 255) for p in (pictures, blind)])
    by_events, by_frames = np.mean(figures, axis=0)
    print(f"\n1:{pitch}: inserted pictures {by_events:.2f} dB, by frames alone {by_frames:.2f} dB")
    assert by_events > by_frames + 3


def test_registration_is_refused_for_frames_and_events_of_two_scenes():
    one, other = PAIRS["1:1.9"].record().recording, Pair("parts", 99, (240, 180), (120, 90), 1.9).record().recording
    events = other.events
    cover = (events.cover_start_us, events.cover_end_us)
    mixed = replace(one, events=EventArray(events.events, events.size, cover))
    rig = calibrate(mixed, range(len(one.frames)), RigSettings(registration="estimate", offset_us=0, unknown="frames"))
    print(f"\ntwo scenes: {rig.registration.evidence}")
    assert rig.registration.value is None
