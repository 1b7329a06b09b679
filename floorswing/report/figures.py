"""All plots of a subject."""

from __future__ import annotations

from floorswing.report.clip_figures import budget_picture, heading_picture, path_picture
from floorswing.report.fit_figures import order_picture, relation_picture, start_picture, tyre_picture
from floorswing.report.gather import Subject
from floorswing.report.marks import Picture
from floorswing.report.repeat_figures import repeats_picture


def pictures_of(subject: Subject) -> list[Picture]:
    """Return all plots of a subject that its data allow."""
    n_clips = range(len(subject.measurements))
    found = [
        relation_picture(subject),
        tyre_picture(subject),
        budget_picture(subject, 0),
        repeats_picture(subject),
        order_picture(subject),
        start_picture(subject),
        *(heading_picture(subject, n) for n in n_clips),
        *(path_picture(subject, n) for n in n_clips),
        *(budget_picture(subject, n) for n in n_clips[1:]),
    ]
    return [one for one in found if one is not None]
