"""How the two sensors relate: clock, contrast thresholds, hot pixels, frame noise."""

from enhance.calibrate.rig import calibrate, known_rig
from enhance.calibrate.rig_file import read_rig, rig_text

__all__ = ["calibrate", "known_rig", "read_rig", "rig_text"]
