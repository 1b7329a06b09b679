"""A clip measured, on one page: the stages in order, each a pure function of what the one before returned."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path

from vision.frames import Clip, Frame
from vision.ground import GroundWatcher
from vision.records import ClipResult, MarkerSetup
from vision.result import assemble
from vision.self_check import check_rotation
from vision.shutter import at_one_moment, line_delay, scan_axis
from vision.steady import calibrate_steadied, camera_path
from vision.track import track_pair
from vision.turns import moving_frames, split_turns, usable_frames, with_moving_part
from vision.views import further_views, in_first_view, solve_views

Progress = Callable[[float, float | None], None]
"""Called now and then with the time reached in the clip and the clip's length, both in s."""


def measure_clip(
    path: str | Path,
    setup: MarkerSetup,
    *,
    progress: Progress | None = None,
    threads: int | None = None,
    sparse: bool = False,
) -> ClipResult:
    """Measure the turns in one clip.

    Parameters
    ----------
    path : path-like
    setup : MarkerSetup
    progress : callable, optional
    threads : int or None
        Threads that decode the clip; None for a few more than there are cores.
    sparse : bool
        Whether still stretches need not be decoded in full.

    Raises
    ------
    vision.errors.VisionError
        If the clip cannot be read, or the markers or the plane not be found.
    """
    ground = GroundWatcher()
    with Clip(path, threads=threads) as clip:
        corners = track_pair(_reported(clip, progress, sparse=sparse), setup, ground)
        info, problems, passed_over = clip.info, tuple(clip.problems), tuple(clip.passed_over)
    path_seen = camera_path(corners, ground.path())
    corners, calibration = calibrate_steadied(corners, path_seen)
    views = further_views(corners, path_seen)
    poses, cov = solve_views(corners, calibration, views)
    seen = usable_frames(corners, poses, passed_over)
    knocks = path_seen.spans if path_seen.loose else ()
    split = split_turns(seen, cov, camera_still=not path_seen.held, knocks=knocks)
    moving = moving_frames(split, seen, len(corners.time_s)) & in_first_view(corners.time_s, views)
    axis = scan_axis(info.rotation_deg)
    delay = line_delay(corners, calibration, poses, moving, axis, setup.line_delay_s)
    if delay.delay_s:
        corners = at_one_moment(corners, calibration, poses, moving, axis, delay.delay_s)
        seen = usable_frames(corners, solve_views(corners, calibration, views)[0], passed_over)
        again = split_turns(seen, cov, camera_still=not path_seen.held, knocks=knocks)
        split = with_moving_part(split, again)
    first = in_first_view(corners.time_s, views)
    check = check_rotation(corners, calibration, poses) if first.all() else None
    return assemble(
        info, setup, corners, calibration, seen, split, path_seen, problems, delay, views, cov, check
    )


def _reported(clip: Clip, progress: Progress | None, *, sparse: bool) -> Iterator[Frame]:
    for frame in clip.frames(sparse=sparse):
        if progress is not None and frame.index % 8 == 0:
            progress(frame.time_s, clip.info.duration_s)
        yield frame
