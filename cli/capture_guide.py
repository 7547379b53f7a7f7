"""The page that tells how to print, place and photograph, for the desk and the site.

Knows good practice of taking the picture; knows no option of the program.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from .drawing import Boxes, Drawing, Item, Polygon, Text, line, wrapped

_SIZE, _HEADING, _TITLE = 3.0, 3.4, 5.0
_LEADING = 1.38
_COLUMN, _COMPOSED_WIDTH = 170.0, 215.9
_PALE, _MIDDLE = 0.82, 0.45

_SECTIONS: tuple[tuple[str, tuple[str, ...]], ...] = (
    (
        "Print and check",
        (
            "Print at 100 % on plain matt paper. Choose 'actual size', never 'fit to page'.",
            "With a calliper or steel rule measure both check lengths, from edge to the same edge: what the printer "
            "adds to every black edge then cancels. Keep the two figures; the program takes them.",
            "Fix the print flat on a stiff plate. A bow of 0.3 mm costs about 0.1 % of area.",
        ),
    ),
    (
        "Place",
        (
            "Clean and deburr the cut face; wipe off dust. Remove scale and loose rust, or say that they are on it.",
            "Bring the black squares into the plane of the cut face, within half a millimetre. Cards: two or more, on "
            "opposite sides, close to the face but not on it. Sheet: a slice lies in the blank window, or the "
            "window is cut out and the member reaches through it.",
            "Where the face stands proud of the reference or behind it (a slice lies as high as it is thick), measure "
            "that offset and state it.",
            "Put something of another tone behind the face: a dark face on white paper, a bright one on dark card.",
        ),
    ),
    (
        "Photograph",
        (
            "Stand back at least three times the depth of the face, and use a longer focal length (2x) rather than "
            "wide angle. Let face and reference fill some 60 % of the picture.",
            "Hold the camera square on, within about 10 degrees. Everything sharp; no digital zoom, no portrait mode.",
            "Soft light from all round: shade, an overcast sky, two lamps from the sides. No flash, no glare, no hard "
            "shadow at the edge. Expose so that the white paper is not burnt out.",
            "Take a second picture with the camera turned a quarter: the two must agree.",
            "Keep the original file. Messengers and editors make it smaller and sharpen its edges.",
        ),
    ),
    (
        "Measure one thing by hand",
        (
            "One thickness of the face by calliper, and where it was taken. It frees the result of what lens, light "
            "and sharpening do to every edge; nothing else improves thin walls as much.",
        ),
    ),
    (
        "Before you cut",
        (
            "Cut, load or enter nothing on the strength of this sheet. An engineer releases the cut, and the member "
            "is propped and isolated first. Mind sharp burrs, old paint, dust and hot work.",
        ),
    ),
)


def guide_page(width: float, height: float) -> Drawing:
    """The guide on paper of the given size, mm."""
    # Composed for a narrow page; larger paper carries larger type.
    factor = max(1.0, width / _COMPOSED_WIDTH)
    items = [_enlarged(item, factor) for item in _guide(width / factor, height / factor)]
    return Drawing("From print to picture", width, height, tuple(items))


def _enlarged(item: Item, factor: float) -> Item:
    if isinstance(item, Text):
        return replace(item, x=item.x * factor, y=item.y * factor, size=item.size * factor)
    if isinstance(item, Polygon):
        return Polygon(item.points * factor, item.grey)
    return Boxes(item.boxes * factor, item.grey)


def _guide(width: float, height: float) -> list[Item]:
    left = (width - _COLUMN) / 2
    y = height - 24.0
    items: list[Item] = [Text(left, y, "From print to picture", _TITLE, bold=True)]
    y -= 47
    items += _front_view(left + 8, y)
    items += _side_view(left + 96, y)
    y -= 7
    for heading, steps in _SECTIONS:
        y -= 1.9 * _HEADING
        items.append(Text(left, y, heading, _HEADING, bold=True))
        y -= 0.25 * _SIZE
        for step in steps:
            items.append(Boxes(np.array([[left + 0.8, y - 1.2 * _SIZE, left + 1.8, y - 1.2 * _SIZE + 1.0]])))
            for words in wrapped(step, _SIZE, _COLUMN - 5):
                y -= _LEADING * _SIZE
                items.append(Text(left + 5, y, words, _SIZE))
            y -= 0.25 * _SIZE
    return items


def _front_view(x: float, y: float) -> list[Item]:
    """A beam's end between two cards, inside the frame of the picture; 66 by 40 mm."""
    frame = [
        line(x, y, x + 66, y),
        line(x, y + 40, x + 66, y + 40),
        line(x, y, x, y + 40),
        line(x + 66, y, x + 66, y + 40),
    ]
    face = Boxes(
        np.array([[22, 6, 44, 8.5], [22, 31.5, 44, 34], [32, 8.5, 34, 31.5]]) + np.array([x, y, x, y]), _MIDDLE
    )
    items: list[Item] = [*frame, face, *_card(x + 5, y + 14), *_card(x + 49, y + 14)]
    items.append(Text(x + 33, y - 4.2, "In the picture", _SIZE, "centre"))
    return items


def _card(x: float, y: float) -> list[Item]:
    side = 2.0
    squares = [(c, r) for r in range(5) for c in range(6) if (c + r) % 2 == 0]
    boxes = np.array([[x + c * side, y + r * side, x + (c + 1) * side, y + (r + 1) * side] for c, r in squares])
    white = [(c, r) for r in range(5) for c in range(6) if (c + r) % 2]
    marks = np.array(
        [[x + c * side + 0.5, y + r * side + 0.5, x + c * side + 1.5, y + r * side + 1.5] for c, r in white]
    )
    return [Boxes(boxes), Boxes(marks, 0.3)]


def _side_view(x: float, y: float) -> list[Item]:
    """The member from the side, cards level with its face, the camera square on; 70 by 40 mm."""
    items: list[Item] = [
        Boxes(np.array([[x, y + 10, x + 14, y + 30]]), _PALE),
        line(x + 14, y + 10, x + 14, y + 30, 0.5),
        line(x + 14, y + 2, x + 14, y + 9, 1.0),
        line(x + 14, y + 31, x + 14, y + 38, 1.0),
        # Camera: body and lens.
        Boxes(np.array([[x + 58, y + 14, x + 66, y + 26], [x + 54.5, y + 17, x + 58, y + 23]]), 0.15),
        line(x + 15.5, y + 20, x + 53, y + 20, 0.15, _MIDDLE),
        Polygon(np.array([[x + 14.8, y + 20], [x + 17.3, y + 19], [x + 17.3, y + 21]]), _MIDDLE),
        Polygon(np.array([[x + 53.8, y + 20], [x + 51.3, y + 19], [x + 51.3, y + 21]]), _MIDDLE),
        Text(x + 34.3, y + 21.5, "3 depths or more", 2.6, "centre"),
        Text(x + 17, y + 33.4, "reference level with the face", 2.6),
        Text(x + 7, y + 19.1, "member", 2.4, "centre"),
        Text(x + 60.5, y + 9.5, "camera", 2.4, "centre"),
        Text(x + 33, y - 4.2, "From the side", _SIZE, "centre"),
    ]
    return items
