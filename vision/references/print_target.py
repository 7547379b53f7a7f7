"""Points of a print as something to adjust together with other references.

Knows the print's own scale, which is uncertain along both of its axes, and that paper bows. Does not know what was
printed.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from ..plane import Correspondences, Plane
from ..posed_plane import PosedPlane
from .adjustment import Target, Unknown
from .printed import FLATNESS_STD_MM
from .setting import Setting

Array = NDArray[np.float64]

# Corners are never better than this, px: what the pixels' own noise leaves of a saddle point.
_LEAST_STD_PX = 0.02
# A scale taken as exact.
_LEAST_SCALE_STD = 1e-9


def print_target(
    label: str,
    points: Correspondences,
    plane: Plane | PosedPlane,
    scale_std: float,
    outline: Array,
    setting: Setting,
    shared: str = "",
) -> Target:
    """The points of a print to which `plane` was fitted.

    scale_std : relative standard uncertainty of the print's scale, per axis and independent
    outline : (m, 2) mm around it
    shared : a name that prints of one printer have in common; their scale is then one
    """
    target = points.target
    count = len(target)
    about = target - target.mean(axis=0)
    # The lens and the plane took some of the scatter with them.
    noise = max(_LEAST_STD_PX, plane.residual_px * float(np.sqrt(2 * count / max(1, 2 * count - 10))))

    def misses(places: Array, unknowns: Array) -> tuple[Array, Array, Array]:
        by = np.zeros((len(places), 2, 2))
        by[:, 0, 0], by[:, 1, 1] = -about[:, 0], -about[:, 1]
        return places - target - about * unknowns, np.broadcast_to(np.eye(2), (len(places), 2, 2)), by

    std = max(scale_std, _LEAST_SCALE_STD)
    unknowns = tuple(
        Unknown("print scale", std, "normal", f"the print of {label} {way}", f"{shared}-{way}" if shared else "")
        for way in ("across", "upwards")
    )
    return Target(
        label=label,
        pixels=points.pixels,
        std=np.full(count, noise),
        misses=misses,
        start=points,
        outline=outline,
        setting=setting,
        unknowns=unknowns,
        noise="reference corners",
        bow_std=FLATNESS_STD_MM,
    )
