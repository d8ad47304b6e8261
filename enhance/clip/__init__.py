"""ONE recording through the rooms: the only part that knows their order.

::

    source.py    opens a recording
    keys.py      calibrate, deblur     -> sharp keys
    plan.py      which instants, when
    pictures.py  interpolate           -> a picture at any instant
    held_out.py  measure               -> the second pass
    outputs.py   write
    passes.py    all of it, in order: the pass that is delivered, and the second one
    check.py     what can be known before; preview.py: three pictures to look at first
"""

from enhance.clip.check import Findings, check
from enhance.clip.passes import ClipResult, calibrate, run
from enhance.clip.preview import preview

__all__ = ["ClipResult", "Findings", "calibrate", "check", "preview", "run"]
