"""Pictures between keys and of keys: candidates carried and moved by events, weighed by the fusion network."""

from enhance.interpolate.blend import analytic_blend, with_colour
from enhance.interpolate.candidates import NAMES, Candidates, Span
from enhance.interpolate.key import in_colour, key_candidates
from enhance.interpolate.rows import rows_at_one_instant

__all__ = [
    "NAMES",
    "Candidates",
    "Span",
    "analytic_blend",
    "in_colour",
    "key_candidates",
    "rows_at_one_instant",
    "with_colour",
]
