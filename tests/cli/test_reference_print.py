import base64
import io
import itertools
import re
import zlib
from xml.etree import ElementTree

import cv2
import numpy as np
import pytest
from cutface.cli.capture_guide import guide_page
from cutface.cli.drawing import Boxes, Drawing, Polygon, Text, pdf, png, svg
from cutface.cli.reference_print import (
    CARD_PAPERS,
    PAPERS_MM,
    PRINTER_MARGIN,
    QUIET_ZONE,
    black_boxes,
    card_origins,
    card_page_drawings,
    reference_pages,
    sheet_drawing,
    sheet_origin,
    write_reference,
)
from cutface.props.errors import UsageError
from cutface.vision.references.board import CARD_SETS, DICTIONARY, SHEETS
from PIL import Image, ImageFont

SHEET_PAGES = [("sheet", name) for name in SHEETS]
CARD_PAGES = [("small cards", paper) for paper in CARD_PAPERS] + [("large cards", paper) for paper in CARD_PAPERS]
REFERENCES = SHEET_PAGES + CARD_PAGES


def boards_of(kind: str, paper: str):
    """The boards on every page with the place of their checker's lower left corner, mm."""
    if kind == "sheet":
        return [[(SHEETS[paper], sheet_origin(SHEETS[paper]))]]
    cards = CARD_SETS[kind.split()[0]]
    origins = card_origins(cards[0], paper)
    return [
        list(zip(cards[start : start + len(origins)], origins, strict=False))
        for start in range(0, len(cards), len(origins))
    ]


def pixels(page: Drawing, dpi: float) -> tuple[np.ndarray, float]:
    """The page as a picture, and its own statement of pixels per mm."""
    image = Image.open(io.BytesIO(png(page, dpi)))
    x, y = image.info["dpi"]
    assert x == y == pytest.approx(dpi, rel=1e-4)
    return np.asarray(image), x / 25.4


def in_pixels(points, origin, height, scale):
    """Points of a board as pixels (centres at integers) of its page."""
    page = np.asarray(points) + origin
    return np.stack([page[..., 0] * scale - 0.5, (height - page[..., 1]) * scale - 0.5], axis=-1)


@pytest.mark.parametrize(("kind", "paper"), REFERENCES)
def test_every_marker_is_found_with_its_number_at_its_place(kind, paper):
    dictionary = cv2.aruco.getPredefinedDictionary(getattr(cv2.aruco, DICTIONARY))
    detector = cv2.aruco.ArucoDetector(dictionary)
    for page, boards in zip(reference_pages(kind, paper), boards_of(kind, paper), strict=True):
        picture, scale = pixels(page, 150)
        corners, numbers, _ = detector.detectMarkers(picture)
        found = {int(number): quad[0] for number, quad in zip(np.ravel(numbers), corners, strict=True)}
        assert sorted(found) == [number for board, _ in boards for number in board.ids]
        for board, origin in boards:
            expected = in_pixels(board.marker_corners, origin, page.height, scale)
            got = np.array([found[number] for number in board.ids])
            # The detector's corners lie on border pixels, up to a pixel inside.
            assert np.abs(got - expected).max() < 1.5


@pytest.mark.parametrize(("kind", "paper"), [("sheet", "A4"), ("small cards", "Letter")])
def test_checker_corners_of_the_picture_are_true_to_size(kind, paper):
    page, boards = reference_pages(kind, paper)[0], boards_of(kind, paper)[0]
    picture, scale = pixels(page, 600)
    # The corner finder expects the blur of a lens.
    blurred = cv2.GaussianBlur(picture, (0, 0), 1.0)
    assert picture.shape == (np.ceil(page.height * scale), np.ceil(page.width * scale))
    for board, origin in boards:
        expected = in_pixels(board.saddles, origin, page.height, scale)
        start = expected.astype(np.float32)[:, None]
        found = cv2.cornerSubPix(blurred, start.copy(), (9, 9), (-1, -1), (3, 40, 1e-4))[:, 0]
        assert np.abs(found - expected).max() < 0.05


def test_pixels_hold_the_share_of_paper_left_white():
    # A box of 2.3 by 1.6 pixels at 254 dpi (10 pixels a millimetre).
    page = Drawing("box", 1.0, 1.0, (Boxes(np.array([[0.15, 0.32, 0.38, 0.48]])),))
    picture, scale = pixels(page, 254)
    assert scale == pytest.approx(10)
    black = (255.0 - picture) / 255
    assert black.sum() == pytest.approx(2.3 * 1.6, abs=0.01)
    assert black[5, 1:4] == pytest.approx([0.4, 0.8, 0.64], abs=0.003)
    assert black[6, 2] == pytest.approx(0.8, abs=0.003)


def test_neighbouring_boxes_leave_no_seam():
    boxes = np.array([[0.1, 0.1, 0.433, 0.9], [0.433, 0.1, 0.9, 0.9]])
    picture, _ = pixels(Drawing("pair", 1.0, 1.0, (Boxes(boxes),)), 254)
    assert picture[1:9, 1:9].max() <= 1


def test_a_polygon_covers_its_area():
    points = np.array([[0.12, 0.1], [0.87, 0.17], [0.5, 0.93]])
    picture, _ = pixels(Drawing("triangle", 1.0, 1.0, (Polygon(points),)), 254)
    (x0, y0), (x1, y1), (x2, y2) = points
    area = abs((x1 - x0) * (y2 - y0) - (x2 - x0) * (y1 - y0)) / 2
    assert (255.0 - picture).sum() / 255 == pytest.approx(area * 100, rel=0.02)


@pytest.mark.parametrize("turned", [False, True])
def test_text_stands_where_its_bounds_say(turned):
    item = Text(20, 20, "Hamburg gjpq 140", 4, "centre", turned=turned)
    picture, scale = pixels(Drawing("text", 40, 40, (item,)), 300)
    y, x = np.nonzero(picture < 128)
    x0, y0, x1, y1 = item.bounds
    assert x0 - 0.1 <= x.min() / scale
    assert x.max() / scale <= x1 + 0.1
    assert 40 - y1 - 0.1 <= y.min() / scale
    assert y.max() / scale <= 40 - y0 + 0.1
    # It fills them along the line, but for the side bearings of its first and last letter.
    along = y if turned else x
    assert (along.max() - along.min()) / scale == pytest.approx(item.width, abs=0.9)


@pytest.mark.parametrize(("kind", "paper"), REFERENCES)
def test_document_states_the_paper_and_is_not_to_be_scaled(kind, paper):
    pages = reference_pages(kind, paper)
    document = pdf(pages, "Reference")
    width, height = PAPERS_MM[paper]
    boxes = re.findall(rb"/MediaBox \[ ([\d. ]+) \]", document)
    assert len(boxes) == len(pages)
    for box in boxes:
        assert np.array(box.split(), float) * 25.4 / 72 == pytest.approx([0, 0, width, height], abs=1e-3)
    assert b"/PrintScaling /None" in document


def content_streams(document: bytes) -> list[str]:
    return [
        zlib.decompress(base64.a85decode(stream, adobe=False)).decode("latin-1")
        for stream in re.findall(
            rb"/ASCII85Decode /FlateDecode \].*?stream\r?\n(.*?)~>\s*endstream", document, re.DOTALL
        )
        if b" re " in zlib.decompress(base64.a85decode(stream, adobe=False))
    ]


def test_squares_of_the_document_are_true_to_size():
    board = SHEETS["A4"]
    (stream,) = content_streams(pdf([sheet_drawing(board)], "Reference"))
    scales = np.array(re.findall(r"([\d.]+) 0 0 ([\d.]+) 0 0 cm", stream), float)
    assert scales.prod(axis=0) == pytest.approx([72 / 25.4] * 2, rel=1e-5)
    boxes = np.array(re.findall(r"([-\d.]+) ([-\d.]+) ([-\d.]+) ([-\d.]+) re", stream), float)
    expected = black_boxes(board) + np.tile(sheet_origin(board), 2)
    expected[:, 2:] -= expected[:, :2]
    assert boxes[: len(expected)] == pytest.approx(expected, abs=2e-3)


def test_drawing_file_is_in_millimetres():
    board = CARD_SETS["small"][0]
    page = card_page_drawings("small", "A4")[0]
    root = ElementTree.fromstring(svg(page))
    assert (root.get("width"), root.get("height"), root.get("viewBox")) == ("210mm", "297mm", "0 0 210 297")
    # The largest black path of the page starts with the card's squares.
    path = next(e.get("d") for e in root.iter("{http://www.w3.org/2000/svg}path") if e.get("fill") == "#000000")
    assert path is not None
    first = re.match(r"M([\d.]+) ([\d.]+)H([\d.]+)V([\d.]+)", path)
    assert first is not None
    x, y = card_origins(board, "A4")[0]
    expected = black_boxes(board)[0] + np.array([x, y, x, y])
    left, top, right, bottom = map(float, first.groups())
    assert [left, 297 - bottom, right, 297 - top] == pytest.approx(expected, abs=1e-4)


@pytest.mark.parametrize(("kind", "paper"), [("sheet", "Letter"), ("small cards", "A4")])
def test_same_bytes_every_time(kind, paper):
    def run():
        pages = reference_pages(kind, paper)
        return pdf([*pages, guide_page(*PAPERS_MM[paper])], "x"), svg(pages[0]), png(pages[0], 100)

    assert run() == run()


def item_bounds(item):
    if isinstance(item, Text):
        return [item.bounds]
    if isinstance(item, Polygon):
        return [(*item.points.min(axis=0), *item.points.max(axis=0))]
    return [tuple(box) for box in item.boxes]


def gap(a, b):
    """Distance between two rectangles, negative by how far they overlap."""
    x = max(a[0], b[0]) - min(a[2], b[2])
    y = max(a[1], b[1]) - min(a[3], b[3])
    return max(x, y)


@pytest.mark.parametrize(("kind", "paper"), REFERENCES)
def test_nothing_touches_the_checker_the_paper_or_other_things(kind, paper):
    for page, boards in zip(reference_pages(kind, paper), boards_of(kind, paper), strict=True):
        checkers = [(*origin, origin[0] + b.size_mm[0], origin[1] + b.size_mm[1]) for b, origin in boards]
        for box in checkers:
            assert min(box[0], box[1], page.width - box[2], page.height - box[3]) >= PRINTER_MARGIN
        beside = [item for item in page.items if not (isinstance(item, Boxes) and len(item.boxes) > 20)]
        assert len(page.items) - len(beside) == len(boards)
        everything = [(item, bounds) for item in beside for bounds in item_bounds(item)]
        for item, (x0, y0, x1, y1) in everything:
            assert min(x0, y0, page.width - x1, page.height - y1) >= PRINTER_MARGIN - 1e-6, item
            for box in checkers:
                assert gap((x0, y0, x1, y1), box) >= QUIET_ZONE - 1e-6, item
        for (first, a), (second, b) in itertools.combinations(everything, 2):
            if isinstance(first, Text) or isinstance(second, Text):
                assert gap(a, b) >= 0.1, (first, second)


@pytest.mark.parametrize("paper", PAPERS_MM)
def test_guide_fits_its_page(paper):
    page = guide_page(*PAPERS_MM[paper])
    texts = [item for item in page.items if isinstance(item, Text)]
    for item in page.items:
        for x0, y0, x1, y1 in item_bounds(item):
            assert min(x0, y0, page.width - x1, page.height - y1) >= 12
    for first, second in itertools.combinations(texts, 2):
        assert gap(first.bounds, second.bounds) > 0, (first.text, second.text)


@pytest.mark.parametrize(("kind", "paper"), REFERENCES)
def test_page_says_which_it_is_and_how_to_print(kind, paper):
    for page, boards in zip(reference_pages(kind, paper), boards_of(kind, paper), strict=True):
        words = " ".join(item.text for item in page.items if isinstance(item, Text))
        assert "100 %" in words
        assert words.count("140 mm") == 2
        for board, _ in boards:
            assert (f"Reference sheet {board.name}" if kind == "sheet" else board.name.capitalize()) in words
            assert f"markers {board.ids[0]} to {board.ids[-1]}" in words


def check_marks(page: Drawing, axis: int):
    """Edges (lower, upper coordinate) of the two marks across a check length along an axis."""
    other = 1 - axis
    marks = [
        (box[axis], box[axis + 2])
        for item in page.items
        if isinstance(item, Boxes) and item.grey == 0 and len(item.boxes) == 1
        for box in item.boxes
        if box[axis + 2] - box[axis] < 0.25 and 2 < box[other + 2] - box[other] < 4
    ]
    return sorted(marks)


@pytest.mark.parametrize(("kind", "paper"), REFERENCES)
def test_check_lengths_are_what_they_say(kind, paper):
    for page in reference_pages(kind, paper):
        for axis in (0, 1):
            (low, low_end), (high, high_end) = check_marks(page, axis)
            assert high - low == pytest.approx(140, abs=1e-9)
            assert high_end - low_end == pytest.approx(140, abs=1e-9)


def test_all_letters_are_in_the_type():
    import reportlab

    folder = reportlab.__path__[0]
    missing = ImageFont.truetype(f"{folder}/fonts/Vera.ttf", 40).getmask("\uffff").getbbox()
    font = ImageFont.truetype(f"{folder}/fonts/Vera.ttf", 40)
    pages = [page for kind, paper in REFERENCES for page in reference_pages(kind, paper)]
    letters = {c for page in [*pages, guide_page(210, 297)] for i in page.items if isinstance(i, Text) for c in i.text}
    assert missing is not None
    assert not [c for c in letters if c != " " and font.getmask(c).getbbox() in (None, missing)]


def test_files_are_written_once(tmp_path):
    files = write_reference("small cards", "A4", tmp_path / "prints", ("pdf", "svg", "png"), dpi=100)
    assert [file.name for file in files] == [
        "reference_small_cards_A4.pdf",
        "reference_small_cards_A4_page_1.png",
        "reference_small_cards_A4_page_1.svg",
        "reference_small_cards_A4_page_2.png",
        "reference_small_cards_A4_page_2.svg",
    ]
    assert all(file.stat().st_size > 1000 for file in files)
    with pytest.raises(UsageError) as caught:
        write_reference("small cards", "A4", tmp_path / "prints")
    assert caught.value.code == "would-overwrite"
    # Another sheet goes beside it, the same one only when asked for.
    assert len(write_reference("sheet", "A4", tmp_path / "prints")) == 1
    assert write_reference("small cards", "A4", tmp_path / "prints", replace=True) == [files[0]]


@pytest.mark.parametrize(
    ("kind", "paper", "options", "code"),
    [
        ("poster", "A4", {}, "unknown-reference"),
        ("sheet", "A5", {}, "unknown-paper"),
        ("small cards", "A3", {}, "unknown-paper"),
        ("sheet", "A4", {"formats": ("docx",)}, "unknown-format"),
        ("sheet", "A4", {"formats": ()}, "unknown-format"),
        ("sheet", "A4", {"formats": ("png",), "dpi": 20}, "resolution"),
    ],
)
def test_what_there_is_not_is_said_and_nothing_written(tmp_path, kind, paper, options, code):
    with pytest.raises(UsageError) as caught:
        write_reference(kind, paper, tmp_path / "out", **options)
    assert caught.value.code == code
    assert not (tmp_path / "out").exists()
