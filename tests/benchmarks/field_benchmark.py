"""Accuracy, time and unknowns of the torsion and shear solution, family by family.

Run: python tests/benchmarks/field_benchmark.py
Error: against a solution to 0.001 %; estimate: the error the result states; both in % of the value, of the larger
overall size for the shear centre. Seconds: wall clock of a second call, mesh and sensitivities included.
"""

import sys
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))

from cutface.props.field import FieldProperties, field_properties
from cutface.props.section import Part, Section
from cutface.props.shapes import angle, channel, hollow_rectangle, rectangle, rolled_i, tee
from section_drawing import arc_strip, ellipse, polygon, walls

SHOWN = ("torsion_constant", "warping_constant", "shear_centre_x", "shear_area_y")
TOLERANCES = (1e-2, 1e-3, 1e-4)
BEST = 1e-5


def traced(section: Section, vertices: int, noise: float) -> Section:
    """The section as a tracer gives it: points at equal distances, moved across the outline by random amounts, mm."""
    random = np.random.default_rng(5)
    loops = section.loops
    length = [float(np.hypot(*(loop - np.roll(loop, 1, axis=0)).T).sum()) for loop in loops]

    def divided(loop, own):
        count = round(vertices * own / sum(length))
        closed = np.concatenate([loop, loop[:1]])
        way = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(closed, axis=0).T))])
        at = own * np.arange(count) / count
        points = np.stack([np.interp(at, way, closed[:, 0]), np.interp(at, way, closed[:, 1])], axis=1)
        along = np.roll(points, -1, axis=0) - np.roll(points, 1, axis=0)
        normal = np.stack([along[:, 1], -along[:, 0]], axis=1) / np.hypot(*along.T)[:, None]
        return points + noise * random.normal(size=(count, 1)) * normal

    shell, *holes = (divided(loop, own) for loop, own in zip(loops, length, strict=True))
    return Section((Part(shell, tuple(holes)),))


BLOCK_WITH_HOLES = polygon(
    [(0, 0), (100, 0), (110, 60), (50, 90), (0, 60)],
    [(20, 20), (40, 20), (40, 40), (20, 40)],
    [(60, 20), (80, 20), (80, 40), (60, 40)],
)
TWO_CELLS = walls([[(0, 0), (58, 0), (58, 38), (0, 38), (0, 0)], [(29, 0), (29, 38)]], 2.0)

FAMILIES = {
    "rectangle 50 x 200": lambda: rectangle(200.0, 50.0),
    "ellipse 100 x 60": lambda: polygon(ellipse(50.0, 30.0)),
    "sharp L, 60 x 60 x 30": lambda: polygon([(0, 0), (60, 0), (60, 30), (30, 30), (30, 60), (0, 60)]),
    "rolled I 200 x 100": lambda: rolled_i(200.0, 100.0, 5.6, 8.5, 12.0),
    "channel, tapered": lambda: channel(120.0, 55.0, 7.0, 9.0, 9.0, 4.5, 0.08),
    "angle 100 x 65 x 8": lambda: angle(100.0, 65.0, 8.0, 10.0, 5.0),
    "tee 100 x 100": lambda: tee(100.0, 100.0, 6.0, 9.0, 8.0),
    "hollow 100 x 50 x 4": lambda: hollow_rectangle(100.0, 50.0, 4.0, 6.0, 4.0),
    "thin channel, t = 0.1": lambda: walls([[(60, -60), (0, -60), (0, 60), (60, 60)]], 0.1),
    "slit tube, r/t = 100": lambda: polygon(arc_strip(100.0, np.pi - 0.001, 1.0)),
    "two cells": lambda: TWO_CELLS,
    "traced I, 400 points": lambda: traced(rolled_i(200.0, 100.0, 5.6, 8.5, 12.0), 400, 0.05),
    "traced I, 7000 points": lambda: traced(rolled_i(200.0, 100.0, 5.6, 8.5, 12.0), 7000, 0.002),
    "traced cells, 400 points": lambda: traced(TWO_CELLS, 400, 0.03),
    "traced block, 400 points": lambda: traced(BLOCK_WITH_HOLES, 400, 0.05),
}


def percent(found: FieldProperties, best: FieldProperties, name: str) -> tuple[float, float]:
    """Error against the best solution, and the estimate, both in percent."""
    scale = found.error[name] / found.relative_error[name]
    return 100 * abs(found.values[name] - best.values[name]) / scale, 100 * found.relative_error[name]


def main() -> None:
    """Print the table."""
    start = time.perf_counter()
    field_properties(rectangle(2.0, 1.0))
    print(f"first call, with imports: {time.perf_counter() - start:.2f} s")
    print(f"{'':26}{'tolerance':>10}{'unknowns':>10}{'seconds':>9}   " + "".join(f"{name:>26}" for name in SHOWN))
    print(f"{'':58}" + f"{'error    estimate, %':>26}" * len(SHOWN))
    for family, draw in FAMILIES.items():
        section = draw()
        best = field_properties(section, tolerance=BEST)
        for tolerance in TOLERANCES:
            start = time.perf_counter()
            found = field_properties(section, tolerance=tolerance)
            seconds = time.perf_counter() - start
            cells = "".join("{:>16.5f}{:>10.5f}".format(*percent(found, best, name)) for name in SHOWN)
            label = family if tolerance == TOLERANCES[0] else ""
            print(f"{label:26}{tolerance:>10.4%}{found.unknowns:>10}{seconds:>9.2f}   {cells}")


if __name__ == "__main__":
    main()
