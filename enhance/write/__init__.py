"""Video, stills, tables and records; each file appears whole or not at all."""

from enhance.write import cautions
from enhance.write.overlap import write_drawing, write_overlap
from enhance.write.stills import write_still
from enhance.write.strip import caption_line
from enhance.write.tables import write_json, write_table, write_text
from enhance.write.trust import write_trust
from enhance.write.video import ClipWriter
from enhance.write.whole import probe_folder, whole_file

__all__ = [
    "ClipWriter",
    "caption_line",
    "cautions",
    "probe_folder",
    "whole_file",
    "write_drawing",
    "write_json",
    "write_overlap",
    "write_still",
    "write_table",
    "write_text",
    "write_trust",
]
