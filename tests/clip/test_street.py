"""A real recording as the judge: cars in a street, one pixel array behind one lens, frames of 500 us at 25 a second.

The figures to beat are those of simple methods on the same pixels (moving ones), stated beside the recording: nearest
frame 17.3 / 17.5 / 17.1 dB, blend 20.0 / 18.8 / 18.2, frame-only flow 28.0 / 27.1 / 21.1, plain event integration from
both sides 26.4 / 26.1 / 26.5, with every 2nd / 4th / 8th frame kept. Nothing was trained or tuned on it.
"""

import json
from pathlib import Path

import pytest

from enhance import clip
from enhance.settings import ClipSettings, EventsSettings, FramesSettings, OutputSettings

SIMPLE = {2: 28.0, 4: 27.1, 8: 26.5}
#: What is held; 30.0, 29.5 and 29.0 are aimed at. Keys moved by the flow from the held-out frame itself, which no tool
#: has, read 30.4 at every 2nd frame.
TARGET = {2: 29.4, 4: 28.8, 8: 28.6}


def figures(recordings: Path, out: Path, every: int, network: str) -> dict[str, float]:
    street = recordings / "street"
    settings = ClipSettings(
        "Street",
        FramesSettings(street / "frames", street / "frames.csv", light_curve="linear"),
        EventsSettings(street / "events.npz"),
        OutputSettings(out, video="none", stills="none"),
        hold_out=every,
        network=network,
    )
    clip.run(settings, lambda done, total, what: None)
    held_out = json.loads((out / "quality.json").read_text())["held_out"]
    ranked = {"ranked": held_out["rank_correlation"]["psnr_moving"]}
    return {name: figure["mean"] for name, figure in held_out["figures"].items()} | ranked


def test_every_2nd_frame_is_found_again_better_than_by_any_simple_method(recordings: Path, tmp_path: Path) -> None:
    found = figures(recordings, tmp_path, 2, "fusion")
    assert found["psnr_moving"] >= TARGET[2]
    assert found["psnr_moving"] > max(SIMPLE[2], found["flow_moving"])


@pytest.mark.slow
@pytest.mark.parametrize("network", ["fusion", "off"])
@pytest.mark.parametrize("every", [2, 4, 8])
def test_figures_at_every_gap(recordings: Path, tmp_path: Path, every: int, network: str, capsys) -> None:
    found = figures(recordings, tmp_path, every, network)
    with capsys.disabled():
        names = ("psnr_moving", "nearest_moving", "blend_moving", "flow_moving", "psnr", "ceiling", "ranked")
        print(f"\nstreet, every {every}., network {network}: " + ", ".join(f"{n} {found[n]:.2f}" for n in names))
    if network == "fusion":
        assert found["psnr_moving"] >= TARGET[every]
    assert found["psnr_moving"] > found["flow_moving"]
