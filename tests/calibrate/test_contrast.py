"""Contrast thresholds, recovered from simulated recordings whose thresholds are known."""

import numpy as np
import pytest

from enhance.calibrate.contrast import estimate_contrast
from enhance.calibrate.evidence import gather_pairs
from enhance.light import Light
from enhance.recording import EventArray, Events, FrameArray


@pytest.mark.parametrize(("name", "shift_us"), [("plain", 0), ("strong", 0), ("colour", 0), ("long", 1_500_000)])
def test_both_thresholds_are_found_within_8_percent(simulated, found, name, shift_us):
    truth, rig = simulated(name), found(name, shift_us)
    assert rig.contrast_positive.value == pytest.approx(truth.contrast_positive.mean(), rel=0.08)
    assert rig.contrast_negative.value == pytest.approx(truth.contrast_negative.mean(), rel=0.08)
    assert 0 < rig.contrast_positive.uncertainty < 0.02
    assert "pairs of deblurred keys" in rig.contrast_negative.evidence


def steps(positive, negative, only_up=False):
    """Make two sharp frames, and events by the thresholds for the log change between them.

    Each pixel starts anywhere between its thresholds and changes one way; nothing is noisy. The changes are Laplace
    distributed, the one law whose fall-off is the same at every count of events: no count is dragged down by its
    neighbours, so the estimate has no excuse.
    """
    rng = np.random.default_rng(4)
    change = rng.laplace(0, 0.45, (120, 160))
    change = np.abs(change) if only_up else change
    filled = rng.random((120, 160))
    up = np.floor(np.maximum(change, 0) / positive + filled).astype(int)
    down = np.floor(np.maximum(-change, 0) / negative + filled).astype(int)
    # room for every change: what leaves the frame's range would be missed on one side
    first = np.where(change > 0, 0.03, 0.9)
    light = np.stack([first, first * np.exp(change)])
    y, x = np.indices((120, 160)).reshape(2, -1)
    count = (up + down).ravel()
    pixel = np.repeat(np.arange(count.size), count)
    t = 1_000 + np.sort(rng.integers(0, 30_000, pixel.size))
    events = Events(
        t,
        x[pixel].astype(np.uint16),
        y[pixel].astype(np.uint16),
        np.where(up.ravel()[pixel] > 0, 1, -1).astype(np.int8),
    )
    start = np.array([0, 40_000])
    frames = FrameArray(np.rint(light * 65_535).astype(np.uint16), start, start, Light("linear", 0, 65_535))
    return gather_pairs(frames, [0, 1]), EventArray(events, (160, 120))


def test_part_filled_thresholds_do_not_make_the_estimate_read_high():
    # ln I1 - ln I0 = c+ N+ - c- N- + b+ [N+ > 0] - b- [N- > 0]: the intercepts absorb the part that is not filled
    pairs, events = steps(0.2, 0.3)
    positive, negative = estimate_contrast(pairs, events)
    assert positive.value == pytest.approx(0.2, rel=0.03)
    assert negative.value == pytest.approx(0.3, rel=0.03)
    assert positive.uncertainty is None  # a single pair has no scatter to show


def test_light_that_only_rises_tells_only_the_positive_threshold():
    pairs, events = steps(0.2, 0.3, only_up=True)
    positive, negative = estimate_contrast(pairs, events)
    assert positive.value == pytest.approx(0.2, rel=0.06)
    assert negative.value is None
    assert "the negative threshold ran to 0.03, the border of what a sensor can have" in negative.evidence


@pytest.mark.parametrize("pairs_left", [0, 1])
def test_too_few_events_tell_nothing_and_say_so(pairs_left):
    pairs, _ = steps(0.2, 0.3)
    for quantity in estimate_contrast(pairs[:pairs_left], EventArray(Events.none(), (160, 120), (0, 1))):
        assert quantity.value is None
        assert "only 0 usable pixels with events between the keys; 400 are needed" in quantity.evidence
