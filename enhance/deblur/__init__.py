"""The event double integral, for one frame or many."""

from enhance.deblur.evidence import Evidence, change_evidence, own_evidence
from enhance.deblur.integral import deblur
from enhance.deblur.multi_frame import WINDOW, couple

__all__ = ["WINDOW", "Evidence", "change_evidence", "couple", "deblur", "own_evidence"]
