"""How the two sensors relate: clock, contrast thresholds, hot pixels, frame noise."""

from enhance.calibrate.clipped import ClippedCount
from enhance.calibrate.even_light import evenly_lit
from enhance.calibrate.gain import find_gain
from enhance.calibrate.levelled import LevelledFrames, as_tabled
from enhance.calibrate.registered import calibrate
from enhance.calibrate.rig import known_rig
from enhance.calibrate.rig_file import read_rig, rig_text
from enhance.calibrate.rig_picture import rig_picture
from enhance.calibrate.steady import in_steady_light
from enhance.calibrate.stripes import find_stripes

__all__ = [
    "ClippedCount",
    "LevelledFrames",
    "as_tabled",
    "calibrate",
    "evenly_lit",
    "find_gain",
    "find_stripes",
    "in_steady_light",
    "known_rig",
    "read_rig",
    "rig_picture",
    "rig_text",
]
