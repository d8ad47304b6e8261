"""The event double integral, for one frame or many."""

from enhance.deblur.integral import deblur
from enhance.deblur.multi_frame import WINDOW, couple

__all__ = ["WINDOW", "couple", "deblur"]
