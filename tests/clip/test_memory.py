"""Memory follows the window, never the recording: a minute of 30 and of 300 million events, the whole process."""

import subprocess
import sys
from pathlib import Path

import cv2
import h5py
import numpy as np
import pytest

pytestmark = pytest.mark.slow
WIDTH, HEIGHT, SECONDS, RATE = 346, 260, 60, 10
JOB = """
title = "A minute"
[frames]
source = "frames"
times = "frames.csv"
light_curve = "linear"
[events]
source = "events.h5"
[rig]
contrast = [0.2, 0.2]
clock = "shared"
[slow_motion]
factor = 2
[measure]
hold_out = 0
[output]
folder = "out"
stills = "none"
"""


def write_frames(folder: Path) -> None:
    (folder / "frames").mkdir()
    rng = np.random.default_rng(1)
    texture = cv2.GaussianBlur(rng.uniform(0, 255, (HEIGHT, 2 * WIDTH)).astype(np.float32), (9, 9), 0)
    lines = ["frame,start_us,end_us"]
    for k in range(SECONDS * RATE):
        shifted = np.roll(texture, 3 * k, axis=1)[:, :WIDTH]
        cv2.imwrite(str(folder / "frames" / f"{k:06d}.png"), shifted.astype(np.uint8))
        lines.append(f"{k},{k * 100_000},{k * 100_000 + 20_000}")
    (folder / "frames.csv").write_text("\n".join(lines) + "\n")


def write_events(path: Path, count: int) -> None:
    """Write events evenly in time, at random pixels: what they say does not matter to memory."""
    rng = np.random.default_rng(2)
    block = 1_000_000
    with h5py.File(path, "w") as file:
        kinds = {"t": np.int64, "x": np.uint16, "y": np.uint16, "p": np.int8}
        columns = {n: file.create_dataset(n, (count,), d, chunks=(16_384,)) for n, d in kinds.items()}
        for first in range(0, count, block):
            rows = slice(first, first + block)
            columns["t"][rows] = np.arange(first, first + block) * (SECONDS * 1_000_000) // count
            columns["x"][rows] = rng.integers(0, WIDTH, block)
            columns["y"][rows] = rng.integers(0, HEIGHT, block)
            columns["p"][rows] = rng.choice(np.array([-1, 1], np.int8), block)


def peak_mib(job: Path) -> float:
    """Run a job in a process of its own and give the most memory it ever held."""
    code = (
        "import resource, sys; from enhance.cli import main; status = main(['run', sys.argv[1]]); "
        "print('PEAK', resource.getrusage(resource.RUSAGE_SELF).ru_maxrss); sys.exit(status)"
    )
    done = subprocess.run([sys.executable, "-c", code, str(job)], capture_output=True, text=True, check=True)
    return int(done.stdout.rsplit("PEAK", 1)[1]) / 1024


def test_ten_times_the_events_cost_hardly_more_memory(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    write_frames(tmp_path)
    (tmp_path / "job.toml").write_text(JOB)
    peaks = []
    for count in (30_000_000, 300_000_000):
        write_events(tmp_path / "events.h5", count)
        peaks.append(peak_mib(tmp_path / "job.toml"))
    with capsys.disabled():
        print(f"\npeak memory: 30 M events {peaks[0]:.0f} MiB, 300 M events {peaks[1]:.0f} MiB")
    assert peaks[1] <= 1.1 * peaks[0]
    assert max(peaks) < 1500
