"""What can stop the measurement of a clip.

::

    VisionError
    ├── ClipError          the file cannot be read as a clip
    ├── MarkersNotFound    one or both robot markers were never found
    └── PlaneError         the floor plane cannot be determined from what was seen

A failed frame is data (a row with NaN and a state); only a failed run is an exception.
"""

from __future__ import annotations


class VisionError(Exception):
    """A clip could not be measured; the message is one line for the user."""


class ClipError(VisionError):
    """The file is missing, unreadable, or not a clip."""


class MarkersNotFound(VisionError):
    """The robot's markers were not found often enough to measure anything."""


class PlaneError(VisionError):
    """The map from picture to deck plane cannot be determined."""
