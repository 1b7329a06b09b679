"""Clips for benches and tests, made of a bundled clip's packets without coding anything again."""

from __future__ import annotations

from fractions import Fraction
from pathlib import Path

import av


def lengthen(clip: Path, seconds: float, target: Path) -> None:
    """Write copies of a clip's packets one after the other until `seconds` are reached."""
    with av.open(str(target), "w") as out:
        stream, base_s, shift_s = None, 0.0, 0.0
        while shift_s < seconds:
            with av.open(str(clip)) as source:
                video = source.streams.video[0]
                stream = stream or out.add_stream_from_template(video)
                for packet in source.demux(video):
                    if packet.dts is None:
                        continue
                    shift = round(shift_s / video.time_base)
                    base_s = max(base_s, float((packet.pts + packet.duration) * video.time_base) + shift_s)
                    packet.pts, packet.dts, packet.stream = packet.pts + shift, packet.dts + shift, stream
                    out.mux(packet)
                shift_s = float(Fraction(base_s).limit_denominator(90000))


def shorten(clip: Path, seconds: float, target: Path) -> None:
    """Write a clip's packets up to the first key frame at or after `seconds`."""
    with av.open(str(clip)) as source, av.open(str(target), "w") as out:
        video = source.streams.video[0]
        stream = out.add_stream_from_template(video)
        for packet in source.demux(video):
            if packet.dts is None or (packet.is_keyframe and float(packet.pts * video.time_base) >= seconds):
                break
            packet.stream = stream
            out.mux(packet)
