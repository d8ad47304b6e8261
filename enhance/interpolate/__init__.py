"""Pictures between keys: candidates carried and moved by events, weighed by the fusion network."""
