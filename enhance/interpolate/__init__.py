"""Pictures between keys: candidates carried and moved by events, weighed by the fusion network."""

from enhance.interpolate.blend import analytic_blend, with_colour
from enhance.interpolate.candidates import NAMES, Candidates, Span

__all__ = ["NAMES", "Candidates", "Span", "analytic_blend", "with_colour"]
