"""What every output says about pictures that no camera took."""

from __future__ import annotations

from enhance.recording import Kind

#: One line: for clip metadata, PNG text and a closing line.
SHORT = (
    "Made pictures, not evidence: inserted pictures are estimates of what happened between the frames. "
    "Never accept or release a machine on them alone."
)

#: For the record and the report.
LONG = (
    "Inserted pictures are made, not captured: detail between the frames is an estimate from the frames and the "
    "events, and may be wrong or missing. Deblurred pictures are computed from a captured frame and the events "
    "during its exposure. Never accept or release a machine on a made picture alone: go back to the captured "
    "frames, follow the rules that hold at your site, and have a licensed or otherwise competent person decide."
)

#: What one picture is, in words, by its kind.
OF_KIND: dict[Kind, str] = {
    Kind.CAPTURED: "As the camera captured it.",
    Kind.DEBLURRED: (
        "Computed from one captured frame and its events, not captured: compare with the captured frame, and never "
        "accept or release a machine on it alone."
    ),
    Kind.INSERTED: (
        "Made, not captured: detail between the frames is an estimate. Never accept or release a machine on it alone; "
        "follow local rules and have a licensed or competent person decide."
    ),
}
