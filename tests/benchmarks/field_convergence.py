"""The figure of how fast the torsion solution converges: `props/field_convergence.svg`.

Run: python tests/benchmarks/field_convergence.py (a minute)
Filled marks: the error, against a closed form where there is one, else against a solution to 0.0001 %. Open marks: the
error that the result states. Rectangle: Saint-Venant's series (Timoshenko and Goodier, Theory of Elasticity, from
memory).
"""

import math
import sys
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))

from cutface.props.field import field_properties
from cutface.props.section import Section
from cutface.props.shapes import channel, rectangle, rolled_i
from section_drawing import polygon, walls

FIGURE = Path(__file__).parents[2] / "props" / "field_convergence.svg"
TOLERANCES = np.geomspace(0.05, 2e-5, 9)
BEST = 1e-6
PANELS = (("torsion_constant", "Torsion constant"), ("warping_constant", "Warping constant"))
GOAL = 1e-3


def rectangle_torsion(width: float, depth: float) -> float:
    """Saint-Venant's series for a rectangle no deeper than wide."""
    series = sum(math.tanh(0.5 * n * math.pi * width / depth) / n**5 for n in range(1, 200, 2))
    return width * depth**3 / 3.0 * (1.0 - 192.0 / math.pi**5 * depth / width * series)


@dataclass(frozen=True)
class Family:
    """A section, its colour in the figure, and what is known of it exactly."""

    name: str
    colour: str
    draw: Callable[[], Section]
    exact: float | None = None


FAMILIES = (
    Family("rectangle 2 : 1", "#1b6ca8", lambda: rectangle(50.0, 100.0), rectangle_torsion(100.0, 50.0)),
    Family("sharp L", "#a0305a", lambda: polygon([(0, 0), (60, 0), (60, 30), (30, 30), (30, 60), (0, 60)])),
    Family("rolled I", "#3c7d3c", lambda: rolled_i(200.0, 100.0, 5.6, 8.5, 12.0)),
    Family("tapered channel", "#c2571a", lambda: channel(120.0, 55.0, 7.0, 9.0, 9.0, 4.5, 0.08)),
    Family(
        "two cells", "#6a4fa0", lambda: walls([[(0, 0), (58, 0), (58, 38), (0, 38), (0, 0)], [(29, 0), (29, 38)]], 2)
    ),
)

# (unknowns, error, stated error) by panel and family
Points = dict[tuple[str, str], list[tuple[int, float, float]]]


def solved() -> Points:
    """Errors of every family over the unknowns that the tolerances take."""
    points: Points = {}
    for family in FAMILIES:
        section = family.draw()
        best = field_properties(section, tolerance=BEST)
        print(f"{family.name}: best with {best.unknowns} unknowns", flush=True)
        for tolerance in TOLERANCES:
            found = field_properties(section, tolerance=float(tolerance))
            for name, _ in PANELS:
                true = best.values[name]
                if name == "torsion_constant" and family.exact is not None:
                    true = family.exact
                scale = found.error[name] / found.relative_error[name]
                error = abs(found.values[name] - true) / scale
                row = points.setdefault((name, family.name), [])
                if not row or row[-1][0] != found.unknowns:
                    row.append((found.unknowns, error, found.relative_error[name]))
    return points


WIDTH, HEIGHT, LEFT, TOP, SIDE, GAP = 900, 470, 84, 46, 340, 92
UNKNOWNS, ERRORS = (5e1, 5e4), (1e-7, 1e-1)
_RAISED = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


def figure(points: Points) -> str:
    """The figure as SVG."""
    shapes: list[str] = []
    for panel, (name, title) in enumerate(PANELS):
        left = LEFT + panel * (SIDE + GAP)

        def place(unknowns: float, error: float, left: int = left) -> tuple[float, float]:
            x = math.log(unknowns / UNKNOWNS[0]) / math.log(UNKNOWNS[1] / UNKNOWNS[0])
            y = math.log(max(error, ERRORS[0]) / ERRORS[0]) / math.log(ERRORS[1] / ERRORS[0])
            return left + SIDE * x, TOP + SIDE * (1.0 - y)

        shapes.append(_text(left + SIDE / 2, TOP - 16, title, "middle", bold=True))
        shapes.append(f'<rect x="{left}" y="{TOP}" width="{SIDE}" height="{SIDE}" fill="none" stroke="#444"/>')
        for power in range(-7, 0):
            x, y = place(UNKNOWNS[0], 10.0**power)
            shapes.append(_line(x, y, x + SIDE, y, "#ddd"))
            shapes.append(_text(x - 8, y + 4, "10" + str(power).translate(_RAISED), "end"))
        for power in range(2, 5):
            x, y = place(10.0**power, ERRORS[0])
            shapes.append(_line(x, y, x, y - SIDE, "#ddd"))
            shapes.append(_text(x, y + 20, "10" + str(power).translate(_RAISED), "middle"))
        shapes.append(_text(left + SIDE / 2, TOP + SIDE + 42, "unknowns", "middle"))
        x, y = place(UNKNOWNS[0], GOAL)
        shapes.append(_line(x, y, x + SIDE, y, "#000", "6 4"))
        shapes.append(_text(x + SIDE - 6, y - 6, "default tolerance, 0.1 %", "end"))
        for family in FAMILIES:
            rows = points[name, family.name]
            for column, dash in ((1, ""), (2, "2 3")):
                chain = [place(row[0], row[column]) for row in rows]
                way = " ".join(f"{x:.1f},{y:.1f}" for x, y in chain)
                shapes.append(
                    f'<polyline points="{way}" fill="none" stroke="{family.colour}" stroke-dasharray="{dash}"/>'
                )
                fill = family.colour if column == 1 else "#fff"
                shapes += [
                    f'<circle cx="{x:.1f}" cy="{y:.1f}" r="3.5" fill="{fill}" stroke="{family.colour}"/>'
                    for x, y in chain
                ]
    for number, family in enumerate(FAMILIES):
        x, y = LEFT + number * 132, HEIGHT - 16
        shapes.append(f'<circle cx="{x}" cy="{y - 4}" r="4.5" fill="{family.colour}"/>')
        shapes.append(_text(x + 10, y, family.name))
    shapes.append(_text(LEFT + len(FAMILIES) * 132, HEIGHT - 16, "● error   ○ stated"))
    return (
        f'<svg xmlns="http://www.w3.org/2000/svg" width="{WIDTH}" height="{HEIGHT}" viewBox="0 0 {WIDTH} {HEIGHT}" '
        'font-family="sans-serif" font-size="13">\n<title>Relative error of the torsion solution over its unknowns'
        f'</title>\n<rect width="{WIDTH}" height="{HEIGHT}" fill="#fff"/>\n' + "\n".join(shapes) + "\n</svg>\n"
    )


def _line(x0: float, y0: float, x1: float, y1: float, colour: str, dash: str = "") -> str:
    return (
        f'<line x1="{x0:.1f}" y1="{y0:.1f}" x2="{x1:.1f}" y2="{y1:.1f}" stroke="{colour}" stroke-dasharray="{dash}"/>'
    )


def _text(x: float, y: float, words: str, anchor: str = "start", *, bold: bool = False) -> str:
    weight = ' font-weight="bold"' if bold else ""
    return f'<text x="{x:.1f}" y="{y:.1f}" text-anchor="{anchor}"{weight}>{words}</text>'


if __name__ == "__main__":
    FIGURE.write_text(figure(solved()), encoding="utf-8", newline="\n")
    print(f"Written: {FIGURE}")
