"""What can go wrong, as one tree.

::

    EnhanceError
    ├── JobError          (ValueError)   a job file or a setting is wrong; carries every mistake found
    ├── ReadError         (OSError)      an input cannot be used
    │   ├── FramesError                  frames, their times, or a video
    │   └── EventsError                  an event file
    ├── CalibrationError  (ValueError)   the relation of the two sensors cannot be told, or a rig file does not fit
    ├── MeasureError      (ValueError)   two pictures cannot be compared, or a picture holds nothing to measure
    ├── ModelError        (OSError)      a weights file is missing, damaged or not ours
    ├── WriteError        (OSError)      an output cannot be written
    └── PackageError      (ImportError)  an optional package is not installed

Each class also derives from the builtin a caller expects. A message says what is wrong, where (file, frame, time), what
was found, what was expected and what to do next.
"""

from __future__ import annotations

from collections.abc import Sequence


class EnhanceError(Exception):
    """Base of every error this package raises on purpose."""


class JobError(EnhanceError, ValueError):
    """A job file or a setting is wrong.

    Parameters
    ----------
    message : str
        The first line.
    mistakes : sequence of str, optional
        Every mistake found, each with its key and, where it can be told, its line.
    """

    def __init__(self, message: str, mistakes: Sequence[str] = ()) -> None:
        self.mistakes = tuple(mistakes)
        super().__init__("\n".join([message, *(f"  - {mistake}" for mistake in self.mistakes)]))


class ReadError(EnhanceError, OSError):
    """An input cannot be used."""


class FramesError(ReadError):
    """Frames, their times or a video cannot be used."""


class EventsError(ReadError):
    """An event file cannot be used."""


class CalibrationError(EnhanceError, ValueError):
    """The relation of the two sensors cannot be told, or a rig file does not fit."""


class MeasureError(EnhanceError, ValueError):
    """Two pictures cannot be compared, or a picture holds nothing to measure."""


class ModelError(EnhanceError, OSError):
    """A weights file is missing, damaged or not one of ours."""


class WriteError(EnhanceError, OSError):
    """An output cannot be written."""


class PackageError(EnhanceError, ImportError):
    """An optional package is not installed; the message carries the command that installs it."""
