"""The event double integral, for one frame or many."""

from enhance.deblur.integral import deblur, log_blur_ratio, log_sum
from enhance.deblur.multi_frame import WINDOW, couple

__all__ = ["WINDOW", "couple", "deblur", "log_blur_ratio", "log_sum"]
