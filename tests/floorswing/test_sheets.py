"""The printed sheets: true scale, and codes that a detector reads.

Rendered by PDFium at 600 dots per inch and read by OpenCV: neither had a part in making the pages.
"""

from __future__ import annotations

import functools
from pathlib import Path

import cv2
import numpy as np
import pypdfium2
import pytest
from click.testing import CliRunner, Result
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from numpy.testing import assert_allclose

from floorswing.cli import cli
from floorswing.sheets.advice import BAR_MM, SHORT_BAR_MM, side_table
from floorswing.sheets.layout import LABEL_MM, PAPERS, DoesNotFit, Piece, arranged
from floorswing.sheets.making import SheetOrder, make_sheets
from floorswing.sheets.outline import outlines

DOTS_PER_INCH = 600
PX_PER_MM = DOTS_PER_INCH / 25.4
SIDE_TOLERANCE_MM = 0.05

ORDER = SheetOrder(
    dictionary="APRILTAG_36h11",
    fore_id=0,
    aft_id=1,
    card_ids=range(10, 16),
    marker_sides_mm=(30.0, 40.0, 60.0),
    card_side_mm=60.0,
)


@functools.cache
def rendered(paper: str) -> list[np.ndarray]:
    document = pypdfium2.PdfDocument(make_sheets(ORDER, PAPERS[paper]))
    return [page.render(scale=DOTS_PER_INCH / 72, grayscale=True).to_numpy().squeeze() for page in document]


def detected(picture: np.ndarray, dictionary: str) -> list[tuple[int, np.ndarray]]:
    """Return the id and the corners (mm from the top left of the paper) of every code."""
    settings = cv2.aruco.DetectorParameters()
    settings.minMarkerPerimeterRate = 0.02
    known = cv2.aruco.getPredefinedDictionary(getattr(cv2.aruco, f"DICT_{dictionary}"))
    corners, ids, _ = cv2.aruco.ArucoDetector(known, settings).detectMarkers(picture)
    found = [] if ids is None else ids.ravel().tolist()
    stop = (cv2.TERM_CRITERIA_EPS + cv2.TERM_CRITERIA_MAX_ITER, 100, 1e-4)
    refined = [cv2.cornerSubPix(picture, quad.reshape(4, 1, 2), (9, 9), (-1, -1), stop) for quad in corners]
    # a pixel's centre is at whole numbers, the paper's corner half a pixel before the first one
    return [(number, (quad.reshape(4, 2) + 0.5) / PX_PER_MM) for number, quad in zip(found, refined, strict=True)]


@functools.cache
def readings(paper: str) -> list[list[tuple[int, np.ndarray]]]:
    return [detected(picture, ORDER.dictionary) for picture in rendered(paper)]


def sides_mm(corners_mm: np.ndarray) -> np.ndarray:
    return np.hypot(*(np.roll(corners_mm, -1, axis=0) - corners_mm).T)


@pytest.mark.parametrize("paper", PAPERS)
def test_every_code_is_read_and_every_side_is_true(paper: str):
    found: list[tuple[int, float]] = []
    for page in readings(paper):
        for number, corners_mm in page:
            sides = sides_mm(corners_mm)
            nominal_mm = min((30.0, 40.0, 60.0), key=lambda mm: abs(mm - sides.mean()))
            assert_allclose(sides, nominal_mm, rtol=0, atol=SIDE_TOLERANCE_MM)
            # printed upright: the first corner is the top left one
            assert_allclose(corners_mm[0], corners_mm.min(axis=0), rtol=0, atol=SIDE_TOLERANCE_MM)
            found.append((number, nominal_mm))
    pairs = [(number, side) for side in (30.0, 40.0, 60.0) for number in (0, 1)]
    assert sorted(found) == sorted(pairs + [(number, 60.0) for number in range(10, 16)])


@pytest.mark.parametrize("paper", PAPERS)
def test_both_bars_on_every_sheet_are_true(paper: str):
    pages = rendered(paper)
    assert len(pages) >= 3
    for picture in pages:
        _, _, stats, _ = cv2.connectedComponentsWithStats((picture < 128).astype(np.uint8))
        sizes_mm = stats[1:, [cv2.CC_STAT_WIDTH, cv2.CC_STAT_HEIGHT]] / PX_PER_MM
        for length_mm, along in ((BAR_MM, 0), (SHORT_BAR_MM, 1)):
            is_bar = (np.abs(sizes_mm[:, along] - length_mm) < 0.1) & (np.abs(sizes_mm[:, 1 - along] - 3.0) < 0.1)
            assert is_bar.sum() == 1


@pytest.mark.parametrize(("paper", "size_mm"), [("A4", (210.0, 297.0)), ("Letter", (215.9, 279.4))])
def test_papers_have_their_standard_size(paper: str, size_mm: tuple[float, float]):
    """Source: ISO 216:2007, A4 210 mm x 297 mm; ANSI/ASME Y14.1, size A 8.5 in x 11 in."""
    page = pypdfium2.PdfDocument(make_sheets(ORDER, PAPERS[paper]))[0]
    assert_allclose(np.array(page.get_size()) * 25.4 / 72, size_mm, rtol=0, atol=0.01)


def test_codes_are_vectors_not_pictures():
    document = pypdfium2.PdfDocument(make_sheets(ORDER, PAPERS["A4"]))
    kinds = {item.type for page in document for item in page.get_objects()}
    assert pypdfium2.raw.FPDF_PAGEOBJ_PATH in kinds
    assert pypdfium2.raw.FPDF_PAGEOBJ_IMAGE not in kinds


def test_the_viewer_is_told_not_to_scale():
    assert b"/PrintScaling /None" in make_sheets(ORDER, PAPERS["A4"])


@pytest.mark.parametrize("paper", PAPERS)
def test_nothing_is_printed_in_the_margin_or_over_something_else(paper: str):
    """Common practice, no source: printers leave up to about 6.4 mm (a quarter of an inch) blank."""
    edge = round(6.4 * PX_PER_MM)
    for picture in rendered(paper):
        inner = picture[edge:-edge, edge:-edge]
        assert (picture < 128).sum() == (inner < 128).sum()


@pytest.mark.parametrize("paper", PAPERS)
def test_the_white_border_is_white(paper: str):
    for picture, page in zip(rendered(paper), readings(paper), strict=True):
        for _, corners_mm in page:
            low, high = corners_mm.min(axis=0), corners_mm.max(axis=0)
            module_mm = (high - low).mean() / 8
            outer = np.round((np.array([low - module_mm + 0.3, high + module_mm - 0.3])) * PX_PER_MM).astype(int)
            inner = np.round((np.array([low - 0.3, high + 0.3])) * PX_PER_MM).astype(int)
            patch = picture[outer[0, 1] : outer[1, 1], outer[0, 0] : outer[1, 0]].copy()
            (x0, y0), (x1, y1) = inner - outer[0]
            patch[y0:y1, x0:x1] = 255
            assert patch.min() > 250


@pytest.mark.parametrize("dictionary", ["4X4_50", "5X5_100", "APRILTAG_16h5", "ARUCO_MIP_36h12", "ARUCO_ORIGINAL"])
def test_other_dictionaries_are_true_as_well(dictionary: str):
    order = SheetOrder(
        dictionary=dictionary, fore_id=3, aft_id=4, card_ids=[10], marker_sides_mm=[35.0], card_side_mm=50.0
    )
    pages = pypdfium2.PdfDocument(make_sheets(order, PAPERS["A4"]))
    found = {}
    for page in pages:
        picture = page.render(scale=DOTS_PER_INCH / 72, grayscale=True).to_numpy().squeeze()
        for number, corners_mm in detected(picture, dictionary):
            found[number] = sides_mm(corners_mm)
    assert {3, 4, 10} <= set(found)
    for number, side_mm in ((3, 35.0), (4, 35.0), (10, 50.0)):
        assert_allclose(found[number], side_mm, rtol=0, atol=SIDE_TOLERANCE_MM)


@given(hnp.arrays(bool, st.integers(1, 9).map(lambda n: (n, n))))
def test_outlines_fill_to_the_same_picture(black: np.ndarray):
    """Against OpenCV's polygon filling (even-odd) as the reference, on a grid of 4 pixels a module."""
    n = len(black)
    picture = np.zeros((4 * n, 4 * n), dtype=np.uint8)
    loops = outlines(black)
    # fillPoly paints its border too, so the filled centre of each module is what is compared
    if loops:
        cv2.fillPoly(picture, [np.array(loop, dtype=np.int32) * 4 for loop in loops], 1)
    centres = picture[2::4, 2::4]
    assert (centres.astype(bool) == black).all()
    for loop in loops:
        turns = zip(loop, loop[1:] + loop[:1], strict=True)
        assert all((a[0] == b[0]) != (a[1] == b[1]) for a, b in turns)


def test_pieces_do_not_overlap_and_stay_on_the_page():
    pieces = [
        Piece(marker_id=i, side_mm=20.0 + 7 * (i % 8), n_modules=8, title="card", has_arrow=False) for i in range(40)
    ]
    for paper in PAPERS.values():
        pages = arranged([pieces[:10], pieces[10:]], paper)
        assert [placed.piece.marker_id for page in pages for placed in page] == list(range(40))
        for page in pages:
            boxes = [(p.left_mm, p.top_mm, p.left_mm + p.piece.width_mm, p.top_mm + p.piece.height_mm) for p in page]
            for i, a in enumerate(boxes):
                assert a[0] >= paper.side_mm
                assert a[2] <= paper.width_mm - paper.side_mm
                assert a[3] <= paper.height_mm - paper.foot_mm
                for b in boxes[:i]:
                    assert a[0] >= b[2] or b[0] >= a[2] or a[1] >= b[3] or b[1] >= a[3]


def test_what_is_too_large_is_refused_with_what_would_do():
    too_large = Piece(marker_id=0, side_mm=200.0, n_modules=8, title="FORE", has_arrow=True)
    with pytest.raises(DoesNotFit, match="up to 147 mm"):
        arranged([[too_large]], PAPERS["A4"])
    largest = Piece(marker_id=0, side_mm=147.0, n_modules=8, title="FORE", has_arrow=True)
    assert largest.height_mm == largest.width_mm + LABEL_MM
    assert len(arranged([[largest]], PAPERS["A4"])) == 1


def test_side_table_is_the_rule_of_three():
    head, *rows = side_table([40.0])
    assert head == ["150 mm bar measures", "40 mm side"]
    assert ["147.0 mm", "39.20"] in rows  # printed at 98 %
    assert ["150.0 mm", "40.00"] in rows


# the command


def sheets(*arguments: object) -> Result:
    return CliRunner().invoke(cli, ["sheets", *map(str, arguments)])


def test_the_command_writes_a_pdf_and_says_what_is_in_it(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    monkeypatch.chdir(tmp_path)
    result = sheets("--paper", "letter")
    assert result.exit_code == 0, result.output
    assert result.stdout.splitlines()[0] == (
        "Wrote floorswing-sheets-Letter.pdf for Letter: robot markers of 30, 40 and 60 mm (ids 0 fore and 1 "
        "aft, APRILTAG_36h11), floor cards of 60 mm (ids 10 to 15)."
    )
    assert (tmp_path / "floorswing-sheets-Letter.pdf").read_bytes().startswith(b"%PDF")


def test_the_command_takes_ids_from_a_trial_file(tmp_path: Path, trial_file: Path):
    text = trial_file.read_text().replace("fore = 0", "fore = 5").replace("APRILTAG_36h11", "4X4_50")
    trial_file.write_text(text.replace("[10, 29]", "[20, 22]"))
    result = sheets("--trial", trial_file, "--out", tmp_path / "s.pdf", "--marker-mm", 25)
    assert result.exit_code == 0, result.output
    assert "robot markers of 25 mm (ids 5 fore and 1 aft, 4X4_50), floor cards of 60 mm (ids 20 to 22)" in result.stdout


def test_the_command_refuses_what_cannot_be(tmp_path: Path, trial_file: Path):
    out = tmp_path / "s.pdf"
    for arguments, words in [
        (("--paper", "A5"), "A5"),
        (("--marker-mm", 5), "15"),
        (("--marker-mm", 200), "up to 147 mm"),
        (("--dictionary", "9X9"), "4X4_50"),
        (("--dictionary", "4X4_50", "--trial", trial_file), "give one of them"),
        (("--trial", tmp_path / "no.toml"), "no such file"),
        (("--out", tmp_path / "no" / "s.pdf"), "no such file or directory"),
    ]:
        result = sheets("--out", out, *arguments)
        assert result.exit_code == 2, arguments
        assert words in result.stderr
        assert "Traceback" not in result.output
    assert not out.exists()


def test_the_command_never_overwrites_untold(tmp_path: Path):
    out = tmp_path / "s.pdf"
    out.write_text("precious")
    result = sheets("--out", out)
    assert result.exit_code == 2
    assert "--overwrite" in result.stderr
    assert out.read_text() == "precious"
    assert sheets("--out", out, "--overwrite").exit_code == 0
    assert out.read_bytes().startswith(b"%PDF")
