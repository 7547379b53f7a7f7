"""SVG drawings: paths, rectangles, circles, ellipses, polygons and lines, with transforms of groups and elements.

The scale comes from width, height and viewBox; a drawing sized in pixels or not at all has none until the person
names it. Strokes' widths, text, clipping and style sheets are passed over. A layer is a group's or an element's id
or label.
"""

from __future__ import annotations

import math
import re
from collections import Counter
from collections.abc import Iterator
from pathlib import Path
from xml.etree import ElementTree

import numpy as np

from ..errors import FileError, UsageError
from ..result import Notice
from ..section import Points
from .curves import bezier, elliptical_arc, full_ellipse
from .reading import Reading, Request, Stroke

Affine = np.ndarray
"""(2, 3): the columns of the linear part, then the translation."""

# Lengths of CSS Values and Units, mm; px and plain numbers carry no size of their own.
ABSOLUTE_UNITS = {"mm": 1.0, "cm": 10.0, "in": 25.4, "pt": 25.4 / 72.0, "pc": 25.4 / 6.0, "q": 0.25}

_NUMBER = re.compile(r"[\s,]*([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)")
_FLAG = re.compile(r"[\s,]*([01])")
_COMMAND = re.compile(r"[\s,]*([MmZzLlHhVvCcSsQqTtAa])")
_TRANSFORM = re.compile(r"\s*,?\s*(matrix|translate|scale|rotate|skewX|skewY)\s*\(([^)]*)\)")
_NOT_DRAWN = {"defs", "clipPath", "mask", "symbol", "marker", "pattern", "metadata", "title", "desc", "style"}
_SIZES = ("x", "y", "width", "height", "cx", "cy", "r", "rx", "ry")
_LABEL = "{http://www.inkscape.org/namespaces/inkscape}label"
_HREF = "{http://www.w3.org/1999/xlink}href"


def read_svg(path: Path, request: Request) -> Reading:
    """The strokes of an SVG drawing, mm, y upwards.

    Raises FileError if the file is no SVG, holds a path that cannot be read, or has no scale; UsageError for a layer
    that is not there.
    """
    try:
        root = ElementTree.parse(path).getroot()
    except (ElementTree.ParseError, UnicodeDecodeError) as error:
        raise FileError("not-svg", f"{path.name} is no SVG ({error}).", "Export the drawing again as SVG.") from None
    if _kind(root) != "svg":
        raise FileError("not-svg", f"{path.name} is no SVG.", "Export the drawing again as SVG.")
    try:
        scale = request.unit or _scale(root, path.name)
    except ValueError:
        raise FileError(
            "bad-svg", f"The viewBox of {path.name} is not four numbers.", "Export the drawing again as SVG."
        ) from None
    page = np.array([[scale, 0.0, 0.0], [0.0, -scale, 0.0]])
    notices: list[Notice] = []
    strokes: list[Stroke] = []
    passed_over: Counter[str] = Counter()
    layers: list[str] = []
    ids = {element.get("id"): element for element in root.iter() if element.get("id")}
    for element, to_page, names in _drawn(root, page, (), ids):
        kind = _kind(element)
        layers += [name for name in names if name not in layers]
        if request.layer is not None and request.layer.casefold() not in {name.casefold() for name in names}:
            continue
        if any(element.get(name, "").endswith("%") for name in _SIZES):
            # Sized by the sheet: a background, not an outline.
            passed_over[kind] += 1
            continue
        size = math.sqrt(abs(np.linalg.det(to_page[:, :2])))
        if size == 0.0:
            continue
        where = f"<{kind}{' id=' + repr(element.get('id')) if element.get('id') else ''}>"
        try:
            runs = _outlines(element, kind, request.chord_tolerance / size, f"{where} of {path.name}")
        except (ValueError, ArithmeticError):  # numbers without bound
            raise FileError(
                "bad-svg", f"The {where} of {path.name} has a number that cannot be read.", "Export the drawing again."
            ) from None
        if runs is None:
            passed_over[kind] += 1
            continue
        layer = names[0] if names else ""
        for points, closed in runs:
            if len(points) > 1:
                strokes.append(Stroke(points @ to_page[:, :2].T + to_page[:, 2], closed, layer, where))
    if request.layer is not None and not strokes:
        raise UsageError(
            "no-such-layer",
            f"{path.name} has no outline in a group or element named {request.layer!r}.",
            f"Choose one of {', '.join(layers[:20]) or 'none: nothing in the file is named'}.",
        )
    if passed_over:
        kinds = ", ".join(f"{count} <{kind}>" for kind, count in sorted(passed_over.items()))
        notices.append(Notice("elements-passed-over", f"Passed over, being no outline: {kinds}.", ""))
    return Reading(strokes=tuple(strokes), notices=tuple(notices))


def _kind(element: ElementTree.Element) -> str:
    return element.tag.rpartition("}")[2] if isinstance(element.tag, str) else ""


def _scale(root: ElementTree.Element, name: str) -> float:
    """mm per user unit, from the sheet's stated size and its viewBox."""
    size = [_length(root.get(side, "")) for side in ("width", "height")]
    box = [float(n) for n in re.split(r"[\s,]+", root.get("viewBox", "").strip()) if n]
    if all(s is None for s in size):
        raise FileError(
            "unit-unknown",
            f"{name} states no size in mm, cm or in (width {root.get('width')!r}, height {root.get('height')!r}).",
            "Name the unit of its coordinates when reading, or export it with a sheet size in mm.",
        )
    if len(box) != 4:
        # Without a viewBox a user unit is a CSS pixel, 1/96 in.
        return 25.4 / 96.0
    scales = [s / extent for s, extent in zip(size, box[2:], strict=True) if s is not None and extent > 0.0]
    if not scales:
        raise FileError("bad-svg", f"{name} has an empty viewBox.", "Export the drawing again as SVG.")
    # The drawing keeps its shape and is fitted into the sheet (preserveAspectRatio "meet").
    if root.get("preserveAspectRatio", "").startswith("none") and max(scales) > (1.0 + 1e-3) * min(scales):
        raise FileError(
            "bad-svg", f"{name} stretches its two axes differently.", "Export it with preserveAspectRatio unset."
        )
    return min(scales)


def _length(text: str) -> float | None:
    """A length in mm; None without an absolute unit."""
    found = re.fullmatch(r"\s*([+-]?[\d.]+(?:[eE][+-]?\d+)?)\s*([a-zA-Z%]*)\s*", text)
    unit = found.group(2).lower() if found else ""
    return float(found.group(1)) * ABSOLUTE_UNITS[unit] if found and unit in ABSOLUTE_UNITS else None


def _drawn(
    element: ElementTree.Element,
    outer: Affine,
    names: tuple[str, ...],
    ids: dict[str | None, ElementTree.Element],
    used: tuple[str, ...] = (),
) -> Iterator[tuple[ElementTree.Element, Affine, tuple[str, ...]]]:
    """Elements that are drawn, each with its transform to the page and the names of it and its groups, inmost first."""
    for child in element:
        kind = _kind(child)
        style = child.get("style", "").replace(" ", "")
        if kind in _NOT_DRAWN or not kind or child.get("display") == "none" or "display:none" in style:
            continue
        to_page = _combined(outer, _transform(child.get("transform", "")))
        own = tuple(n for n in (child.get(_LABEL), child.get("id")) if n)
        if kind in ("g", "svg", "a", "switch"):
            yield from _drawn(child, to_page, own + names, ids, used)
        elif kind == "use":
            target = (child.get("href") or child.get(_HREF) or "").removeprefix("#")
            if target in ids and target not in used:
                shift = np.array([[1.0, 0.0, _plain(child, "x")], [0.0, 1.0, _plain(child, "y")]])
                holder = ElementTree.Element("g")
                holder.append(ids[target])
                yield from _drawn(holder, _combined(to_page, shift), own + names, ids, (*used, target))
        else:
            yield child, to_page, own + names


def _combined(outer: Affine, inner: Affine) -> Affine:
    return np.column_stack([outer[:, :2] @ inner[:, :2], outer[:, :2] @ inner[:, 2] + outer[:, 2]])


def _transform(text: str) -> Affine:
    result = np.array([[1.0, 0.0, 0.0], [0.0, 1.0, 0.0]])
    if _TRANSFORM.sub("", text).strip(", \t\r\n"):
        raise FileError("bad-svg", f"The transform {text[:60]!r} cannot be read.", "Export the drawing again as SVG.")
    for kind, arguments in _TRANSFORM.findall(text):
        n = [float(v) for v in _NUMBER.findall(arguments)]
        rest = _NUMBER.sub("", arguments).strip(", \t\r\n")
        if rest or len(n) < (6 if kind == "matrix" else 1) or not np.isfinite(n).all():
            raise FileError(
                "bad-svg", f"The transform {kind}({arguments[:40]}) cannot be read.", "Export the drawing again as SVG."
            )
        match kind:
            case "matrix":
                step = np.array([[n[0], n[2], n[4]], [n[1], n[3], n[5]]])
            case "translate":
                step = np.array([[1.0, 0.0, n[0]], [0.0, 1.0, n[1] if len(n) > 1 else 0.0]])
            case "scale":
                step = np.array([[n[0], 0.0, 0.0], [0.0, n[1] if len(n) > 1 else n[0], 0.0]])
            case "rotate":
                c, s = math.cos(math.radians(n[0])), math.sin(math.radians(n[0]))
                x, y = n[1:3] if len(n) > 2 else (0.0, 0.0)
                step = np.array([[c, -s, x - c * x + s * y], [s, c, y - s * x - c * y]])
            case "skewX":
                step = np.array([[1.0, math.tan(math.radians(n[0])), 0.0], [0.0, 1.0, 0.0]])
            case _:
                step = np.array([[1.0, 0.0, 0.0], [math.tan(math.radians(n[0])), 1.0, 0.0]])
        result = _combined(result, step)
    return result


def _plain(element: ElementTree.Element, name: str, default: float = 0.0) -> float:
    """A coordinate or length in user units; absolute units are converted at 96 px to the inch."""
    text = element.get(name)
    if text is None:
        return default
    absolute = _length(text)
    if absolute is not None:
        return absolute * 96.0 / 25.4
    try:
        return float(text.removesuffix("px"))
    except ValueError:
        raise FileError(
            "bad-svg", f"The {name} of a <{_kind(element)}> is {text!r}.", "Give it as a plain number."
        ) from None


def _outlines(
    element: ElementTree.Element, kind: str, tolerance: float, where: str
) -> list[tuple[Points, bool]] | None:
    """Runs of points in the element's own coordinates and whether they close; None if it draws no outline."""
    match kind:
        case "path":
            return _path(element.get("d", ""), tolerance, where)
        case "rect":
            return [(_rectangle(element, tolerance), True)]
        case "circle" | "ellipse":
            centre = (_plain(element, "cx"), _plain(element, "cy"))
            rx = _plain(element, "r" if kind == "circle" else "rx")
            ry = _plain(element, "r" if kind == "circle" else "ry")
            return [(full_ellipse(centre, (rx, 0.0), (0.0, ry), tolerance), True)] if rx > 0.0 and ry > 0.0 else []
        case "polygon" | "polyline":
            numbers = [float(n) for n in _NUMBER.findall(element.get("points", ""))]
            points = np.array(numbers[: len(numbers) // 2 * 2]).reshape(-1, 2)
            return [_closed_if_it_returns(points, kind == "polygon")]
        case "line":
            ends = [[_plain(element, "x1"), _plain(element, "y1")], [_plain(element, "x2"), _plain(element, "y2")]]
            return [(np.array(ends), False)]
    return None


def _closed_if_it_returns(points: Points, closed: bool) -> tuple[Points, bool]:
    """The run without its repeated first point."""
    if len(points) > 2 and np.array_equal(points[0], points[-1]):
        return points[:-1], True
    return points, closed


def _rectangle(element: ElementTree.Element, tolerance: float) -> Points:
    x, y, w, h = (_plain(element, name) for name in ("x", "y", "width", "height"))
    rx, ry = _plain(element, "rx", math.nan), _plain(element, "ry", math.nan)
    rx, ry = (ry if math.isnan(rx) else rx), (rx if math.isnan(ry) else ry)
    if not (rx > 0.0 and ry > 0.0):
        return np.array([[x, y], [x + w, y], [x + w, y + h], [x, y + h]])
    rx, ry = min(rx, 0.5 * w), min(ry, 0.5 * h)
    quarter = 0.5 * math.pi
    corners = [(x + w - rx, y + h - ry), (x + rx, y + h - ry), (x + rx, y + ry), (x + w - rx, y + ry)]
    arcs = [elliptical_arc(c, (rx, 0.0), (0.0, ry), i * quarter, quarter, tolerance) for i, c in enumerate(corners)]
    return np.concatenate(arcs)


class _Pen:
    """Reads the numbers of a path one after the other."""

    def __init__(self, text: str, where: str) -> None:
        self.text, self.at, self.where = text, 0, where

    def command(self) -> str | None:
        """The next command letter, None if a number follows (or nothing)."""
        found = _COMMAND.match(self.text, self.at)
        if found:
            self.at = found.end()
        return found.group(1) if found else None

    def finished(self) -> bool:
        return not self.text[self.at :].strip(" \t\r\n,")

    def numbers(self, count: int) -> list[float]:
        return [float(self._take(_NUMBER)) for _ in range(count)]

    def flag(self) -> bool:
        return self._take(_FLAG) == "1"

    def _take(self, pattern: re.Pattern[str]) -> str:
        found = pattern.match(self.text, self.at)
        if not found:
            raise FileError(
                "bad-svg",
                f"The path {self.where} cannot be read from {self.text[self.at :].strip()[:20]!r} on.",
                "Export the drawing again, with paths in plain form.",
            )
        self.at = found.end()
        return found.group(1)


def _path(text: str, tolerance: float, where: str) -> list[tuple[Points, bool]]:
    """The subpaths of a path's data."""
    pen = _Pen(text, where)
    runs: list[tuple[Points, bool]] = []
    pieces: list[Points] = []
    here = start = np.zeros(2)
    control: Points | None = None
    command = ""

    def finish(closed: bool) -> None:
        nonlocal pieces
        if pieces:
            runs.append(_closed_if_it_returns(np.concatenate([pieces[0][:1], *(p[1:] for p in pieces)]), closed))
        pieces = []

    while not pen.finished():
        letter = pen.command()
        if letter is None:
            # Numbers without a letter repeat the command; after a move they are lines.
            letter = {"M": "L", "m": "l"}.get(command, command)
            if letter.upper() in ("", "Z"):
                pen.numbers(0 if letter else 1)
                letter = "L"
        base = here if letter.islower() else np.zeros(2)
        kind = letter.upper()
        last_control, control = control, None
        match kind:
            case "M":
                finish(False)
                here = start = base + pen.numbers(2)
            case "Z":
                finish(True)
                here = start
            case "L" | "H" | "V":
                if kind == "L":
                    end = base + pen.numbers(2)
                else:
                    axis = 0 if kind == "H" else 1
                    end = here.copy()
                    end[axis] = base[axis] + pen.numbers(1)[0]
                pieces.append(np.array([here, end]))
                here = end
            case "C" | "S" | "Q" | "T":
                smooth = kind in "ST"
                given = [base + pen.numbers(2) for _ in range({"C": 3, "S": 2, "Q": 2, "T": 1}[kind])]
                same = command.upper() in ("CS" if kind in "CS" else "QT")
                if smooth:
                    given.insert(0, 2.0 * here - last_control if same and last_control is not None else here)
                pieces.append(bezier([here, *given], tolerance))
                control, here = given[-2], given[-1]
            case "A":
                rx, ry, turn = pen.numbers(3)
                large, sweep = pen.flag(), pen.flag()
                end = base + pen.numbers(2)
                pieces.append(_arc(here, end, abs(rx), abs(ry), math.radians(turn), large, sweep, tolerance))
                here = end
        command = letter
    finish(False)
    return runs


def _arc(
    first: Points, last: Points, rx: float, ry: float, turn: float, large: bool, sweep: bool, tolerance: float
) -> Points:
    """The elliptical arc from first to last of the SVG endpoint form (SVG 1.1, appendix F.6)."""
    if rx == 0.0 or ry == 0.0 or np.array_equal(first, last):
        return np.array([first, last])
    axes = np.array([[math.cos(turn), math.sin(turn)], [-math.sin(turn), math.cos(turn)]])
    # In units of the half-axes the ellipse is a unit circle through a and b.
    radii = np.array([rx, ry])
    a, b = axes @ first / radii, axes @ last / radii
    half = 0.5 * float(np.hypot(*(b - a)))
    stretch = max(1.0, half)
    a, b, radii, half = a / stretch, b / stretch, radii * stretch, half / stretch
    offset = math.sqrt(max(0.0, 1.0 - half**2)) * (1.0 if large == sweep else -1.0)
    along = (b - a) / (2.0 * half)
    centre = 0.5 * (a + b) + offset * np.array([along[1], -along[0]])
    begin = math.atan2(*(a - centre)[::-1])
    turned = (math.atan2(*(b - centre)[::-1]) - begin) % (2.0 * math.pi)
    if not sweep:
        turned -= 2.0 * math.pi
    points = elliptical_arc(axes.T @ (centre * radii), axes[0] * radii[0], axes[1] * radii[1], begin, turned, tolerance)
    points[0], points[-1] = first, last
    return points
