"""rig.png: the evidence for a rig in one picture, for the eye to judge.

Top: where light changed between two keys, as the frames tell it (red) and as the events do (cyan), laid over each other
by the registration; where they agree the two make grey. Middle: how well the two fit for other clock offsets. Bottom:
what single pixels say of the two thresholds.
"""

from __future__ import annotations

from collections.abc import Sequence

import cv2
import numpy as np
from numpy.typing import NDArray

from enhance.calibrate.evidence import Pair, gather_pairs
from enhance.calibrate.known_view import on_sensor, view_of
from enhance.calibrate.registration import predicted_change
from enhance.calibrate.rig import _events
from enhance.kernels.double_integral import log_blur_ratio
from enhance.kernels.event_integral import event_counts
from enhance.recording import EventSource, Recording
from enhance.rig import Quantity, Rig

Canvas = NDArray[np.uint8]

#: Size of the three panels, pixels, and of the text.
WIDTH, MAP_HEIGHT, PLOT_HEIGHT, TEXT = 720, 480, 200, 0.42
#: Pairs whose curve is drawn, offsets on it and how far it reaches either side of the clock found, microseconds.
PAIRS, OFFSETS, REACH_US = 4, 41, 20_000
#: Pixels with fewer events of one sign say nothing of a threshold; thresholds drawn, log units.
LEAST_EVENTS, HIGHEST = 3, 0.6
_RED, _CYAN, _GREY, _WHITE = (230, 80, 70), (70, 200, 220), (110, 110, 110), (235, 235, 235)


def rig_picture(recording: Recording, keys: Sequence[int], rig: Rig) -> Canvas | None:
    """Draw the evidence for a rig.

    Parameters
    ----------
    recording : Recording
    keys : sequence of int
        Frames that may be looked at.
    rig : Rig

    Returns
    -------
    ndarray of uint8, shape (H, W, 3), or None
        R, G, B; None where the clock is not known or no two keys can be compared.
    """
    if rig.offset_us.value is None:
        return None
    seen = on_sensor(recording, view_of(rig, recording))
    in_place = Quantity(np.eye(3).tolist())
    alone = Rig(**{**vars(rig), "registration": in_place, "frame_lens": Quantity(None), "event_lens": Quantity(None)})
    events = _events(seen, alone)
    pairs = [p for p in gather_pairs(seen.frames, keys) if events.covers(p.first.start_us, p.second.end_us)]
    if not pairs:
        return None
    strongest = sorted(pairs, key=lambda pair: -float(np.abs(pair.change).sum()))[:PAIRS]
    panels = (
        _maps(strongest[0], events, alone),
        _curve(strongest, events, alone),
        _thresholds(strongest, events, alone),
    )
    return np.concatenate(panels)


def _panel(height: int, *lines: str) -> Canvas:
    canvas = np.full((height, WIDTH, 3), 24, np.uint8)
    for row, line in enumerate(lines):
        cv2.putText(canvas, line, (10, 18 + 17 * row), cv2.FONT_HERSHEY_SIMPLEX, TEXT, _WHITE, 1, cv2.LINE_AA)
    return canvas


def _maps(pair: Pair, events: EventSource, rig: Rig) -> Canvas:
    told = predicted_change(pair, events, rig.contrast, pair.change.shape)
    sides = [np.abs(pair.change), np.abs(told) * pair.usable]
    # each on its own scale: the bright tenth of what changes is full
    red, cyan = (np.clip(side / max(float(np.percentile(side, 98)), 1e-3), 0, 1) for side in sides)
    image = np.rint(255 * np.stack([red, cyan, cyan], axis=-1)).astype(np.uint8)
    top = 44
    scale = min(WIDTH / image.shape[1], (MAP_HEIGHT - top) / image.shape[0])
    size = (max(1, int(image.shape[1] * scale)), max(1, int(image.shape[0] * scale)))
    shown = np.asarray(cv2.resize(image, size, interpolation=cv2.INTER_AREA if scale < 1 else cv2.INTER_NEAREST))
    start = (pair.first.time_us, pair.second.time_us)
    canvas = _panel(
        MAP_HEIGHT,
        f"change of light from {start[0] / 1e6:.3f} s to {start[1] / 1e6:.3f} s on the event pixels: "
        f"frames red, events cyan, both grey",
        f"correlation {_correlation([pair.change], [told * pair.usable]):.3f}",
    )
    left = (WIDTH - size[0]) // 2
    canvas[top : top + size[1], left : left + size[0]] = shown
    return canvas


def _curve(pairs: Sequence[Pair], events: EventSource, rig: Rig) -> Canvas:
    offsets = np.linspace(-REACH_US, REACH_US, OFFSETS).round().astype(np.int64)
    changes = [pair.change for pair in pairs]
    told = [
        [predicted_change(p, events, rig.contrast, p.change.shape, int(o)) * p.usable for p in pairs] for o in offsets
    ]
    value = np.array([_correlation(changes, each) for each in told])
    known = rig.offset_us
    doubt = "" if known.uncertainty is None else f" +/- {known.uncertainty:.0f}"
    canvas = _panel(
        PLOT_HEIGHT,
        f"clock: correlation of the two for offsets around {known.value} us{doubt} ({known.method[:60]})",
        f"-{REACH_US / 1000:.0f} ms to +{REACH_US / 1000:.0f} ms; height 0 to 1",
    )
    return _drawn(canvas, offsets / REACH_US, np.clip(value, 0, 1), _CYAN)


def _thresholds(pairs: Sequence[Pair], events: EventSource, rig: Rig) -> Canvas:
    samples: list[list[NDArray[np.float64]]] = [[], []]
    for pair in pairs:
        for sign, found in enumerate(_pixel_thresholds(pair, events, rig)):
            samples[sign].append(found)
    edges = np.linspace(0, HIGHEST, 61)
    plus, minus = rig.contrast_positive.value, rig.contrast_negative.value
    canvas = _panel(
        PLOT_HEIGHT,
        f"thresholds of single pixels (log light an event), 0 to {HIGHEST:g}: brighter red, {plus:.3f} taken; darker "
        f"cyan, {minus:.3f} taken",
        "single pixels read high: the part-filled thresholds at either end are theirs alone",
    )
    for single, colour, taken in zip(samples, (_RED, _CYAN), (plus, minus), strict=True):
        count = np.histogram(np.concatenate(single), edges)[0].astype(np.float64)
        centre = 2 * (edges[:-1] + edges[1:]) / 2 / HIGHEST - 1
        _drawn(canvas, centre, count / max(count.max(), 1.0), colour, 2 * float(taken) / HIGHEST - 1)
    return canvas


def _pixel_thresholds(pair: Pair, events: EventSource, rig: Rig) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Log change an event, of pixels between whose deblurred keys events of one sign alone fired."""
    one, two, shape, contrast = pair.first, pair.second, pair.change.shape, rig.contrast
    seen = events.between(one.start_us - contrast.ramp_us, two.end_us + 2 * contrast.ramp_us)
    first = log_blur_ratio(seen, one.start_us, one.end_us, one.time_us, contrast, shape)
    second = log_blur_ratio(seen, two.start_us, two.end_us, two.time_us, contrast, shape)
    change = pair.change - (second - first)
    between = seen.between(one.time_us, two.time_us)
    plus, minus = event_counts(between.x, between.y, between.polarity, shape)
    rising = pair.usable & (plus >= LEAST_EVENTS) & (minus == 0)
    falling = pair.usable & (minus >= LEAST_EVENTS) & (plus == 0)
    return change[rising] / plus[rising], -change[falling] / minus[falling]


def _correlation(one: Sequence[NDArray[np.float64]], two: Sequence[NDArray[np.floating]]) -> float:
    cross = sum(float((a * b).sum()) for a, b in zip(one, two, strict=True))
    energy = sum(float((a * a).sum()) for a in one) * sum(float((b * b).sum()) for b in two)
    return float(cross / np.sqrt(max(energy, 1e-30)))


def _drawn(
    canvas: Canvas, x: NDArray[np.floating], y: NDArray[np.floating], colour: tuple[int, int, int], mark: float = 0.0
) -> Canvas:
    """Draw a curve, x from -1 to 1, y from 0 to 1, and a mark on the x axis."""
    height, width, _ = canvas.shape
    left, right, top, bottom = 30, width - 30, 48, height - 14
    cv2.line(canvas, (left, bottom), (right, bottom), _GREY, 1)
    at = round(left + (np.clip(mark, -1, 1) + 1) / 2 * (right - left))
    cv2.line(canvas, (at, top), (at, bottom), colour, 1)
    points = np.stack([left + (x + 1) / 2 * (right - left), bottom - y * (bottom - top)], axis=-1)
    cv2.polylines(canvas, [np.rint(points).astype(np.int32)], False, colour, 1, cv2.LINE_AA)
    return canvas
