"""The only module that writes clips: H.264 that browsers play, there whole or not at all."""

from __future__ import annotations

import os
from contextlib import AbstractContextManager
from fractions import Fraction
from pathlib import Path
from types import TracebackType
from typing import Any

import av
import numpy as np
from numpy.typing import NDArray

from floorswing.errors import FileError, one_line, why

TICKS_HZ = 90_000
"""Resolution of the time stamps, fine enough for any camera."""
OPTIONS = {"crf": "23", "preset": "veryfast"}


class Recorder(AbstractContextManager["Recorder"]):
    """Writes a clip beside its place under a hidden name, and puts it there once it is complete.

    Parameters
    ----------
    path : Path
        Ends in ``.mp4``.
    width_px, height_px : int
        Even numbers.
    rate_hz : float
        Nominal; each picture is shown at its own time.

    Raises
    ------
    FileError
        If the clip cannot be written.
    """

    def __init__(self, path: Path, width_px: int, height_px: int, rate_hz: float) -> None:
        self.path = path
        self._hidden = path.with_name(f".{path.name}.{os.getpid()}")
        self._last = -1
        try:
            self._hidden.unlink(missing_ok=True)  # it might be a link
            self._hidden.open("xb").close()
            self._container: Any = av.open(
                str(self._hidden), mode="w", format="mp4", options={"movflags": "+faststart"}
            )
        except (av.error.FFmpegError, OSError) as error:
            raise FileError(f"{path}: cannot be written ({why(error)})") from error
        rate = Fraction(max(rate_hz, 1.0)).limit_denominator(1001)
        self._stream: Any = self._container.add_stream("libx264", rate=rate, options=OPTIONS)
        self._stream.width, self._stream.height, self._stream.pix_fmt = width_px, height_px, "yuv420p"
        self._stream.codec_context.time_base = Fraction(1, TICKS_HZ)

    def write(self, planes: NDArray[np.uint8], time_s: float) -> None:
        """Add a picture.

        Parameters
        ----------
        planes : ndarray, shape (height * 3 / 2, width)
            Luma rows, then the two chroma planes.
        time_s : float
            When it is shown; later than all before.
        """
        frame = av.VideoFrame.from_ndarray(planes, format="yuv420p")
        self._last = max(round(time_s * TICKS_HZ), self._last + 1)
        frame.pts, frame.time_base = self._last, Fraction(1, TICKS_HZ)
        self._mux(frame)

    def _mux(self, frame: Any) -> None:
        try:
            self._container.mux(self._stream.encode(frame))
        except (av.error.FFmpegError, OSError) as error:
            raise FileError(f"{self.path}: cannot be written ({one_line(error).lower()})") from error

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        try:
            if kind is None:
                self._mux(None)
            self._container.close()
            if kind is None:
                os.replace(self._hidden, self.path)
        except (av.error.FFmpegError, OSError) as problem:
            if kind is None:
                raise FileError(f"{self.path}: cannot be written ({why(problem)})") from problem
        finally:
            self._hidden.unlink(missing_ok=True)
