"""The event double integral, for one frame or many."""

from enhance.deblur.evidence import Evidence, at_least, change_evidence, log_noise, own_evidence
from enhance.deblur.integral import deblur
from enhance.deblur.multi_frame import WINDOW, couple
from enhance.deblur.rows import latent_at_one_instant, row_change

__all__ = [
    "WINDOW",
    "Evidence",
    "at_least",
    "change_evidence",
    "couple",
    "deblur",
    "latent_at_one_instant",
    "log_noise",
    "own_evidence",
    "row_change",
]
