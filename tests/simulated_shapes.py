"""Sections for simulated pictures: rolled, hollow, extruded, sawn, corroded, irregular.

Arcs are chains of 64 chords a quarter; the chain itself is the truth. Drawn independently of the
package's own shapes. All lengths mm, each shape about the middle of its bounding box.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from cutface.props.section import Section
from numpy.typing import NDArray
from shapely import LinearRing, MultiPolygon, Polygon, affinity, box
from shapely.geometry.base import BaseGeometry

Floats = NDArray[np.float64]
CHORDS = 64


def rounded(corners: Sequence[tuple[float, float]], radii: Sequence[float] | float = 0.0) -> Floats:
    """The polygon through `corners` with each corner replaced by a tangent arc of its radius."""
    points = np.asarray(corners, float)
    radius = np.broadcast_to(np.asarray(radii, float), len(points))
    chain: list[Floats] = []
    for before, here, after, r in zip(np.roll(points, 1, 0), points, np.roll(points, -1, 0), radius, strict=True):
        if r <= 0:
            chain.append(here[None])
            continue
        u, v = (before - here) / np.linalg.norm(before - here), (after - here) / np.linalg.norm(after - here)
        half = 0.5 * np.arccos(np.clip(u @ v, -1, 1))
        centre = here + (u + v) / np.linalg.norm(u + v) * r / np.sin(half)
        start, end = here + u * r / np.tan(half) - centre, here + v * r / np.tan(half) - centre
        a0 = np.arctan2(start[1], start[0])
        sweep = (np.arctan2(end[1], end[0]) - a0 + np.pi) % (2 * np.pi) - np.pi
        n = max(int(np.ceil(CHORDS * abs(sweep) / (np.pi / 2))), 8)
        angle = a0 + sweep * np.linspace(0, 1, n + 1)
        chain.append(centre + r * np.stack([np.cos(angle), np.sin(angle)], axis=-1))
    return np.concatenate(chain)


def circle(x: float, y: float, radius: float) -> Floats:
    """A circle as four times 64 chords."""
    angle = np.arange(4 * CHORDS) * (np.pi / 2 / CHORDS)
    return np.stack([x + radius * np.cos(angle), y + radius * np.sin(angle)], axis=-1)


def rings(polygon: Polygon) -> list[Floats]:
    """The polygon's shell counter-clockwise, then its holes clockwise; (n, 2) each, not closed."""
    loops = []
    for number, ring in enumerate((polygon.exterior, *polygon.interiors)):
        loop = np.asarray(ring.coords)[:-1, :2]
        loops.append(loop if ring.is_ccw == (number == 0) else loop[::-1])
    return loops


def _section(shape: BaseGeometry) -> Section:
    x0, y0, x1, y1 = shape.bounds
    shape = affinity.translate(shape, -(x0 + x1) / 2, -(y0 + y1) / 2)
    if not isinstance(shape, Polygon | MultiPolygon):
        raise TypeError(f"not an area: {shape.geom_type}")
    return Section.from_polygons(shape)


def rolled_i(h: float, b: float, tw: float, tf: float, r: float) -> Section:
    """Doubly symmetric I with root radii r."""
    x, y, w, f = b / 2, h / 2, tw / 2, h / 2 - tf
    corners = [
        (-x, -y),
        (x, -y),
        (x, -f),
        (w, -f),
        (w, f),
        (x, f),
        (x, y),
        (-x, y),
        (-x, f),
        (-w, f),
        (-w, -f),
        (-x, -f),
    ]
    return _section(Polygon(rounded(corners, [0, 0, 0, r, r, 0, 0, 0, 0, r, r, 0])))


def channel(h: float, b: float, tw: float, tf: float, r: float) -> Section:
    """Parallel flange channel, back of the web to the left."""
    corners = [(0, 0), (b, 0), (b, tf), (tw, tf), (tw, h - tf), (b, h - tf), (b, h), (0, h)]
    return _section(Polygon(rounded(corners, [0, 0, 0, r, r, 0, 0, 0])))


def angle(h: float, b: float, t: float, r1: float, r2: float) -> Section:
    """Angle, heel at the lower left, root radius r1, toe radii r2."""
    corners = [(0, 0), (b, 0), (b, t), (t, t), (t, h), (0, h)]
    return _section(Polygon(rounded(corners, [0, 0, r2, r1, r2, 0])))


def tee(h: float, b: float, tw: float, tf: float, r: float) -> Section:
    """Tee, flange on top."""
    x, w = b / 2, tw / 2
    corners = [(-w, 0), (w, 0), (w, h - tf), (x, h - tf), (x, h), (-x, h), (-x, h - tf), (-w, h - tf)]
    return _section(Polygon(rounded(corners, [0, 0, r, 0, 0, 0, 0, r])))


def rectangular_hollow(h: float, b: float, t: float, r: float) -> Section:
    """Rectangular hollow section, outer radius r, inner r - t (sharp if less than nothing)."""

    def outline(w: float, d: float, radius: float) -> Floats:
        return rounded([(-w / 2, -d / 2), (w / 2, -d / 2), (w / 2, d / 2), (-w / 2, d / 2)], max(radius, 0.0))

    return _section(Polygon(outline(b, h, r), [outline(b - 2 * t, h - 2 * t, r - t)]))


def circular_hollow(d: float, t: float) -> Section:
    """Circular hollow section."""
    return _section(Polygon(circle(0, 0, d / 2), [circle(0, 0, d / 2 - t)]))


def extrusion(w: float, h: float, t: float, cells: int, fin: float) -> Section:
    """Several closed cells side by side with a screw channel and two fins of length `fin`."""
    inner = (w - (cells + 1) * t) / cells
    holes = []
    for n in range(cells):
        x = t + n * (inner + t)
        holes.append(rounded([(x, t), (x + inner, t), (x + inner, h - t), (x, h - t)], min(1.0, inner / 4)))
    body = Polygon(rounded([(0, 0), (w, 0), (w, h), (0, h)], 0.8), holes)
    fins = [box(x, h - t / 2, x + 1.2 * t, h + fin) for x in (w * 0.12, w * 0.88 - 1.2 * t)]
    r = min(1.6 * t, 0.3 * inner)
    boss = Polygon(circle(t + r * 0.9, t + r * 0.9, 1.5 * r), [circle(t + r * 0.9, t + r * 0.9, 0.7 * r)])
    shape = body
    for piece in fins:
        shape = shape.union(piece)
    shape = shape.union(boss).difference(Polygon(circle(t + r * 0.9, t + r * 0.9, 0.7 * r)))
    return _section(shape.intersection(box(-1, 0, w + 1, h + fin)))


def timber(b: float, h: float, notch: tuple[float, float] = (0.0, 0.0), arris: float = 0.0) -> Section:
    """Sawn rectangle, with a notch (width, depth) out of the lower right corner and worn arrises."""
    nw, nd = notch
    if nw > 0 and nd > 0:
        corners = [(0, 0), (b - nw, 0), (b - nw, nd), (b, nd), (b, h), (0, h)]
        return _section(Polygon(rounded(corners, [arris, arris, 0, arris, arris, arris])))
    return _section(Polygon(rounded([(0, 0), (b, 0), (b, h), (0, h)], arris)))


def flitch(b: float, h: float, plate: float, shorter: float = 0.0) -> Section:
    """A plate between two timbers: three parts touching (timber, plate, timber)."""
    left = box(-plate / 2 - b, -h / 2, -plate / 2, h / 2)
    right = box(plate / 2, -h / 2, plate / 2 + b, h / 2)
    middle = box(-plate / 2, -h / 2 + shorter, plate / 2, h / 2 - shorter)
    return Section.from_polygons([left, middle, right])


def blob(size: float, rng: np.random.Generator) -> Section:
    """An irregular smooth outline about `size` across."""
    a = np.arange(720) * (np.pi / 360)
    r = np.ones_like(a)
    for k in range(2, 7):
        r += rng.normal(0, 0.16 / k) * np.cos(k * a + rng.uniform(0, 2 * np.pi))
    return _section(Polygon(size / 2 * r[:, None] * np.stack([np.cos(a), np.sin(a)], axis=-1)))


def corroded(section: Section, loss: float, rng: np.random.Generator, spacing: float = 0.4) -> Section:
    """The section with a ragged loss of `loss` mm on average from its outline, deeper in patches."""
    from scipy.ndimage import gaussian_filter1d

    parts = []
    for polygon in section.to_polygon().geoms:
        loops = []
        for loop in rings(polygon):
            ring = LinearRing(loop)
            n = max(int(ring.length / spacing), 60)
            p = np.array([ring.interpolate(s).coords[0] for s in np.linspace(0, ring.length, n, endpoint=False)])
            tangent = np.roll(p, -1, 0) - np.roll(p, 1, 0)
            # The material lies to the left of shells and of holes alike.
            inward = np.stack([-tangent[:, 1], tangent[:, 0]], -1) / np.linalg.norm(tangent, axis=1)[:, None]
            depth = np.zeros(n)
            for scale, share in ((25.0, 0.6), (6.0, 0.3), (1.5, 0.12)):
                smooth = gaussian_filter1d(rng.normal(size=n), scale / spacing, mode="wrap")
                depth += share * smooth / smooth.std()
            depth = loss * np.clip(1 + 0.8 * depth, 0.05, 2.6)
            loops.append(p + depth[:, None] * inward)
        shape = Polygon(loops[0], loops[1:]).buffer(0)
        parts.append(max(shape.geoms, key=lambda g: g.area) if isinstance(shape, MultiPolygon) else shape)
    return _section(MultiPolygon(parts))


FAMILIES = (
    "rolled_i",
    "channel",
    "angle",
    "tee",
    "rectangular_hollow",
    "circular_hollow",
    "extrusion",
    "timber",
    "corroded",
    "blob",
)


def random_section(rng: np.random.Generator, family: str, size: tuple[float, float]) -> Section:
    """A section of the family that fits `size` (width, height) mm, of believable proportions.

    Raises ValueError for an unknown family.
    """
    width, height = size
    u = rng.uniform
    if family in ("rolled_i", "corroded"):
        h = height * u(0.6, 0.95)
        b = min(width * 0.95, h * u(0.45, 1.0))
        tf = h * u(0.05, 0.09)
        section = rolled_i(h, b, tf * u(0.55, 0.8), tf, tf * u(0.8, 1.4))
        return corroded(section, 0.12 * tf, rng) if family == "corroded" else section
    if family == "channel":
        h = height * u(0.6, 0.95)
        tf = h * u(0.05, 0.09)
        return channel(h, min(width * 0.9, h * u(0.35, 0.5)), tf * u(0.6, 0.8), tf, tf * u(0.8, 1.2))
    if family == "angle":
        h = height * u(0.5, 0.9)
        t = h * u(0.08, 0.13)
        return angle(h, min(width * 0.9, h * u(0.6, 1.0)), t, t * u(0.8, 1.3), t * u(0.3, 0.6))
    if family == "tee":
        h = height * u(0.5, 0.9)
        tf = h * u(0.08, 0.12)
        return tee(h, min(width * 0.95, h * u(0.8, 1.2)), tf * u(0.7, 1.0), tf, tf * u(0.8, 1.2))
    if family == "rectangular_hollow":
        h = height * u(0.5, 0.9)
        b = min(width * 0.9, h * u(0.4, 1.0))
        t = min(h, b) * u(0.05, 0.12)
        return rectangular_hollow(h, b, t, t * u(1.2, 2.2))
    if family == "circular_hollow":
        d = min(width, height) * u(0.5, 0.9)
        return circular_hollow(d, d * u(0.04, 0.12))
    if family == "extrusion":
        w = width * u(0.6, 0.9)
        h = min(height * 0.7, w * u(0.5, 1.0))
        return extrusion(w, h, max(0.03 * w, 1.6) * u(0.9, 1.4), int(rng.integers(2, 4)), 0.12 * h)
    if family == "timber":
        h = height * u(0.55, 0.95)
        b = min(width * 0.9, h * u(0.25, 0.7))
        notch = (b * u(0.2, 0.4), h * u(0.1, 0.25)) if rng.random() < 0.6 else (0.0, 0.0)
        return timber(b, h, notch, 0.6)
    if family == "blob":
        return blob(0.75 * min(width, height), rng)
    raise ValueError(f"unknown family {family!r}")
