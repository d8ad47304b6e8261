"""Makes README's pictures from a finished demo: `python tests/readme_pictures.py enhance-demo .readme`."""

import csv
import sys
from pathlib import Path

import cv2
import numpy as np

#: The key shown, and the part of the picture: rows, columns.
KEY, PART = 5, (slice(20, 200), slice(40, 300))


def shown(path: Path) -> np.ndarray:
    """Read an image of linear code values, 8 or 16 bit, as a screen shows it."""
    image = cv2.imread(str(path), cv2.IMREAD_UNCHANGED)
    return image.astype(np.float64) / (255 if image.dtype == np.uint8 else 65535)


def write(path: Path, left: np.ndarray, right: np.ndarray) -> None:
    gap = np.ones((left[PART].shape[0], 6))
    both = np.hstack([left[PART], gap, right[PART]])
    signal = np.rint(255 * np.clip(both, 0, 1) ** (1 / 2.2)).astype(np.uint8)
    cv2.imwrite(str(path), cv2.resize(signal, None, fx=2, fy=2, interpolation=cv2.INTER_CUBIC))


def main(demo: Path, target: Path) -> None:
    target.mkdir(exist_ok=True)
    with (demo / "out" / "pictures.csv").open(newline="") as file:
        rows = list(csv.DictReader(file))
    keys = [i for i, row in enumerate(rows) if row["kind"] != "inserted"]
    frames = [shown(demo / "frames" / f"{k:06d}.png") for k in (KEY, KEY + 1)]
    still = [shown(demo / "out" / rows[i]["still"]) for i in (keys[KEY], (keys[KEY] + keys[KEY + 1]) // 2)]
    write(target / "deblurred.png", frames[0], still[0])
    write(target / "inserted.png", 0.5 * (frames[0] + frames[1]), still[1])


if __name__ == "__main__":
    main(Path(sys.argv[1]), Path(sys.argv[2]))
