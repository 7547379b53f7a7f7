"""A measurement made by hand, for what is built on top of one: an invented angle and box seen at a slant."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from cutface.props.result import Contribution, Notice, Quantity
from cutface.props.section import Part, Section
from cutface.props.uncertainty import OutlineUncertainty
from cutface.vision.measure import Measurement, Member, ReferenceSummary
from cutface.vision.photo import Photo

WIDTH, HEIGHT = 1200, 900

ANGLE = Section((Part(np.array([[0, 0], [60, 0], [60, 8], [8, 8], [8, 90], [0, 90]], float)),))
BOX = Section(
    (
        Part(
            np.array([[90, 5], [160, 5], [160, 75], [90, 75]], float),
            (
                np.array([[97, 12], [122, 12], [122, 68], [97, 68]], float),
                np.array([[128, 12], [153, 12], [153, 68], [128, 68]], float),
            ),
        ),
    )
)

# mm to pixels: a slant view, so that nothing that takes the picture for the plane passes.
_PLANE = np.array([[5.2, 0.35, 170.0], [0.15, -5.6, 720.0], [0.0004, 0.0007, 1.0]])


def to_pixels(points: np.ndarray) -> np.ndarray:
    x, y, w = _PLANE @ np.column_stack([points, np.ones(len(points))]).T
    return np.stack([x / w, y / w], axis=-1)


def dense(loop: np.ndarray, step: float = 0.5) -> np.ndarray:
    pieces = []
    for start, end in zip(loop, np.roll(loop, -1, axis=0), strict=True):
        count = max(2, round(float(np.hypot(*(end - start))) / step))
        pieces.append(start + np.linspace(0, 1, count, endpoint=False)[:, None] * (end - start))
    return np.concatenate(pieces)


def quantity(value: float, unit: str, relative: float = 0.0042, *, std: float | None = None) -> Quantity:
    u = abs(value) * relative if std is None else std
    return Quantity(
        value=value,
        unit=unit,
        std=u,
        interval95=(value - 1.9 * u, value + 1.9 * u),
        pixel_bounds=(value - 2.5 * u, value + 2.5 * u),
        budget=(
            Contribution("print scale", u * 0.8, 0.64),
            Contribution("edge location (common)", u * 0.55, 0.3025),
            Contribution("reference corners", u * 0.24, 0.0575),
        ),
    )


def photo_of(*sections: Section) -> Photo:
    """Light brown faces on grey, drawn pixel by pixel through the plane's inverse."""
    from shapely import contains_xy

    rows, columns = np.indices((HEIGHT, WIDTH))
    x, y, w = np.linalg.inv(_PLANE) @ np.stack([columns.ravel(), rows.ravel(), np.ones(rows.size)])
    pixels = np.empty((HEIGHT, WIDTH, 3), np.uint8)
    pixels[...] = (205, 205, 200)
    for section in sections:
        inside = contains_xy(section.to_polygon(), x / w, y / w).reshape(HEIGHT, WIDTH)
        pixels[inside] = (92, 84, 78)
    return Photo(
        path=Path("/somewhere/else/yard 7.jpg"),
        sha256="5e" * 32,
        pixels=pixels,
        file_format="JPEG",
        bits=8,
        resolution_dpi=None,
        orientation=1,
        make="Nonesuch",
        model="Box 1",
        focal_length_mm=5.6,
        focal_length_35mm=26.0,
        taken=None,
        icc_name=None,
    )


def member_of(number: int, section: Section, quantities: dict[str, Quantity], *, poor: slice = slice(0)) -> Member:
    traces = tuple(to_pixels(dense(loop)) for loop in section.loops)
    flags = tuple(np.zeros(len(trace), bool) for trace in traces)
    flags[0][poor] = True
    count = len(section.vertices)
    return Member(
        number=number,
        section=section,
        uncertainty=OutlineUncertainty(modes=(), noise=None, edge_bound=np.full(count, 0.1), simplification={}),
        quantities=quantities,
        trace_px=traces,
        poorly_located=flags,
        notices=(
            Notice(
                "poorly-located",
                "4 % of the outline could not be located well; the interval is wider for it.",
                "Light that edge and take the picture again.",
            ),
        )
        if flags[0].any()
        else (),
    )


def angle_quantities() -> dict[str, Quantity]:
    return {
        "area": quantity(1136.0, "mm^2"),
        "perimeter": quantity(300.0, "mm", 0.002),
        "width": quantity(60.0, "mm", 0.0031),
        "depth": quantity(90.0, "mm", 0.0031),
        "centroid_x": quantity(14.985, "mm", 0.0042),
        "centroid_y": quantity(29.986, "mm", 0.0042),
        "second_moment_x": quantity(921500.0, "mm^4", 0.011),
        "second_moment_y": quantity(333800.0, "mm^4", 0.011),
        "product_moment": quantity(-322700.0, "mm^4", 0.011),
        "second_moment_major": quantity(1064000.0, "mm^4", 0.011),
        "second_moment_minor": quantity(191100.0, "mm^4", 0.011),
        "principal_angle": quantity(0.4165, "rad", 0.003),
    }


def box_quantities() -> dict[str, Quantity]:
    return {
        "area": quantity(2100.0, "mm^2"),
        "centroid_x": quantity(125.0, "mm", std=0.2),
        "centroid_y": quantity(40.0, "mm", std=0.2),
        "second_moment_major": quantity(1270000.0, "mm^4", 0.011),
        "second_moment_minor": quantity(1150000.0, "mm^4", 0.011),
        "principal_angle": quantity(0.0, "rad", std=0.002),
    }


def measurement_of(*members: Member, notices: tuple[Notice, ...] = ()) -> Measurement:
    corners = np.array([[-20, -25], [180, -25], [180, 110], [-20, 110]], float)
    return Measurement(
        photo=photo_of(*(member.section for member in members)),
        reference=ReferenceSummary(
            kind="sheet", label="A4", mm_per_px=0.19, residual_px=0.06, plane_offset_mm=0.0, details={"corners": 204}
        ),
        members=members,
        notices=notices,
        to_pixels=to_pixels,
        corners_px=to_pixels(corners),
    )


def one_member() -> Measurement:
    return measurement_of(member_of(1, ANGLE, angle_quantities(), poor=slice(300, 420)))


def two_members() -> Measurement:
    return measurement_of(
        member_of(1, ANGLE, angle_quantities()),
        member_of(2, BOX, box_quantities()),
        notices=(Notice("bent-sheet", "The sheet is not quite flat.", "Tape its edges down."),),
    )
