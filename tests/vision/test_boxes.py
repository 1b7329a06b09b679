"""Whether an mp4 is whole, from its outermost boxes; layout from ISO/IEC 14496-12, 4.2 (size, type, long size)."""

import struct

import pytest

from vision.boxes import Boxes, boxes_of
from vision.errors import ClipError
from vision.frames import Clip


def box(kind: bytes, content: bytes = b"", *, claims: int | None = None) -> bytes:
    return struct.pack(">I", claims if claims is not None else 8 + len(content)) + kind + content


HEAD = box(b"ftyp", b"isom" + bytes(4))


@pytest.mark.parametrize(
    ("content", "says"),
    [
        (HEAD + box(b"moov", bytes(20)) + box(b"mdat", bytes(50)), Boxes(indexed=True, whole=True)),
        (HEAD + box(b"mdat", bytes(50)), Boxes(indexed=False, whole=True)),
        (HEAD + box(b"mdat", bytes(50), claims=5000), Boxes(indexed=False, whole=False)),
        (HEAD + box(b"moov", bytes(20)) + box(b"mdat", bytes(9), claims=0), Boxes(indexed=True, whole=True)),
        (HEAD + box(b"moov", bytes(20)) + b"\0\0", Boxes(indexed=True, whole=False)),
        (HEAD + struct.pack(">I4sQ", 1, b"mdat", 24) + bytes(8) + box(b"moov"), Boxes(indexed=True, whole=True)),
        (HEAD + struct.pack(">I4sQ", 1, b"mdat", 2**63) + bytes(8), Boxes(indexed=False, whole=False)),
        (HEAD + box(b"free", claims=3), Boxes(indexed=False, whole=False)),
        (b"\x1aE\xdf\xa3" + bytes(40), None),
        (b"", None),
        (b"RIFF", None),
    ],
)
def test_boxes(tmp_path, content, says):
    path = tmp_path / "clip.mp4"
    path.write_bytes(content)
    assert boxes_of(path) == says


def test_no_such_file(tmp_path):
    assert boxes_of(tmp_path / "none.mp4") is None


def test_a_recording_without_its_index_is_refused_with_the_reason(tmp_path):
    path = tmp_path / "clip.mp4"
    path.write_bytes(HEAD + box(b"mdat", bytes(500)))
    with pytest.raises(ClipError, match=r"its index is missing.*broke off"):
        Clip(path)
