"""An outline moved inward or outward by small distances, corners kept sharp (mitred).

Knows outlines only; why and by how much they move is known elsewhere.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .integrals import Boundary, following
from .section import Section

Floats = NDArray[np.float64]

# A corner sharper than this, in distances moved, is cut off instead of being drawn out to a point.
MITRE_LIMIT = 5.0


def edge_normals(edges: Boundary) -> tuple[Floats, Floats]:
    """Lengths (n,), mm, and unit normals (2, n) out of the material, of the edges."""
    along = edges.end - edges.start
    lengths = np.hypot(*along)
    return lengths, np.stack([along[1], -along[0]]) / lengths


def mitre(normals_before: Floats, normals_after: Floats, before: Floats, after: Floats) -> Floats:
    """Movements (2, n) of vertices whose two edges move outward by the distances before and after, (n,).

    The corner is where the moved edges meet; where they are nearly parallel, the mean of both movements along their
    normals. Movements are cut at MITRE_LIMIT times the larger distance.
    """
    cosine = np.sum(normals_before * normals_after, axis=0)
    sine_square = 1.0 - cosine * cosine
    # On nearly straight stretches the difference of the distances has nowhere to go but along the edge.
    straight = sine_square < 1e-6
    safe = np.where(straight, 1.0, sine_square)
    by_before = np.where(straight, before / 2.0, (before - cosine * after) / safe)
    by_after = np.where(straight, after / 2.0, (after - cosine * before) / safe)
    moved = by_before * normals_before + by_after * normals_after
    size = np.hypot(*moved)
    limit = MITRE_LIMIT * np.maximum(np.abs(before), np.abs(after))
    return moved * np.where(size > limit, limit / np.maximum(size, 1e-300), 1.0)


def pixel_bracket(section: Section, edge_bound: ArrayLike) -> tuple[Section | None, Section]:
    """The section with its whole outline moved inward and outward by a bound on the edges' position.

    edge_bound : (n,) mm, at every vertex
    Every edge moves by the larger bound of its ends. Where that folds the outline (short edges, sharp corners), all
    edges move by the largest bound, so that the bracket is never too narrow.
    Returns (inner, outer); inner is None where nothing is left.
    """
    bound = np.asarray(edge_bound, float)
    outer = _moved(section, bound)
    return _moved(section, -bound), section if outer is None else outer


def _moved(section: Section, distance: Floats) -> Section | None:
    vertices, after = section.vertices, following(section)
    along = vertices[after] - vertices
    lengths = np.hypot(*along.T)
    normals = np.stack([along[:, 1], -along[:, 0]]) / lengths
    of_edge = np.where(np.abs(distance) >= np.abs(distance[after]), distance, distance[after])
    before = np.empty_like(after)
    before[after] = np.arange(len(after))
    movement = mitre(normals[:, before], normals, of_edge[before], of_edge).T
    moved = vertices + movement
    kept = np.sum((moved[after] - moved) * along, axis=1) > 0.0
    full_corners = np.hypot(*movement.T) < MITRE_LIMIT * np.maximum(np.abs(of_edge[before]), np.abs(of_edge))
    if kept.all() and (full_corners | (of_edge == 0.0)).all():
        candidate = section.with_vertices(moved)
        if candidate.to_polygon().is_valid:
            return candidate
    largest = float(distance[np.argmax(np.abs(distance))])
    polygon = section.to_polygon().buffer(largest, join_style="mitre", mitre_limit=MITRE_LIMIT)
    return None if polygon.is_empty else Section.from_polygons(polygon)
