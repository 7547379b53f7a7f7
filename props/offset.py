"""An outline moved inward or outward by small distances, corners kept sharp (mitred).

Knows outlines only; why and by how much they move is known elsewhere.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .integrals import Boundary, boundary, following
from .section import Section

Floats = NDArray[np.float64]

# A corner drawn out further than this, in distances moved, is cut off.
MITRE_LIMIT = 5.0


def edge_normals(edges: Boundary) -> tuple[Floats, Floats]:
    """Lengths (n,), mm, and unit normals (2, n) out of the material, of the edges."""
    along = edges.end - edges.start
    lengths = np.hypot(*along)
    return lengths, np.stack([along[1], -along[0]]) / lengths


def mitre(normals_before: Floats, normals_after: Floats, before: Floats, after: Floats) -> Floats:
    """Movements (2, n) of vertices whose two edges move outward by the distances before and after, (n,).

    The corner is where the moved edges meet. Its movement outward and its movement along the outline are each held
    to MITRE_LIMIT times the larger distance: a spike is cut off, and on a nearly straight stretch, whose edges meet
    far away or nowhere, the vertex stays beside its edges.
    """
    outward = normals_before + normals_after
    half = 0.5 * np.hypot(*outward)
    # Of a hairpin, whose normals cancel, the direction of the tip.
    hairpin = half < 1e-9
    tip = np.stack([-normals_before[1], normals_before[0]])
    outward = np.where(hairpin, tip, outward / np.where(hairpin, 1.0, 2.0 * half))
    along = np.stack([-outward[1], outward[0]])
    sine = np.sum(normals_after * along, axis=0)
    limit = MITRE_LIMIT * np.maximum(np.abs(before), np.abs(after))
    with np.errstate(divide="ignore", invalid="ignore"):
        out = np.clip(np.nan_to_num((before + after) / (2.0 * half)), -limit, limit)
        slide = np.clip(np.nan_to_num((after - before) / (2.0 * sine)), -limit, limit)
    return out * outward + slide * along


def pixel_bracket(section: Section, edge_bound: ArrayLike) -> tuple[Section | None, Section]:
    """The section with its whole outline moved inward and outward by a bound on the edges' position.

    edge_bound : (n,) mm, at every vertex
    Every edge moves by the larger bound of its ends. Where that folds the outline (short edges, sharp corners), all
    edges move by the largest bound, so that the bracket is never too narrow.
    Parts that touch move as one: a joint between them stays where it is.
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
    sharp = np.sum(normals[:, before] * normals, axis=0) < 2.0 / MITRE_LIMIT**2 - 1.0
    if kept.all() and not sharp.any() and not boundary(section).shared.any():
        candidate = section.with_vertices(moved)
        if candidate.to_polygon().is_valid:
            return candidate
    largest = float(distance[np.argmax(np.abs(distance))])
    polygon = section.joined().buffer(largest, join_style="mitre", mitre_limit=MITRE_LIMIT)
    return None if polygon.is_empty else Section.from_polygons(polygon)
