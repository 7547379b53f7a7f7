"""Simulated photos of a member beside references that a surveyor has at hand, and what a person types of them.

    scene = draw("rule", seed=3)
    measure(scene.photo, references=scene.texts)

Everything that a person cannot know (lens, focal length, sizes within their limits, how flush a reference lies, how
square the photo was taken, how well points were picked) is drawn from the distributions that the measuring assumes.
Looks are plain; what is hard about light is in the benchmark's own group.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from cutface.props.section import Section
from cutface.vision.photo import Photo
from cutface.vision.references.rectangle import SIZES
from cutface.vision.references.setting import LENS_STD
from plain_scene import DARK, PAPER, Shape, box, drawn_camera, photograph, ring, rounded_box, turned
from simulated_shapes import channel, rectangular_hollow, rolled_i, timber
from simulated_view import Camera, Floats

GREY = 0.6


@dataclass(frozen=True)
class Looks:
    """How a picture comes out: optical blur px, noise and tones in linear light, curve of the stored values.

    shadow : share of the light that a shadow takes which lies across half of the picture, its edge a tenth wide
    glare : light that a lamp adds in a spot, of a quarter of the picture's width, on the member
    """

    blur: float = 0.7
    noise: float = 0.004
    member: float = DARK
    table: float = 0.3
    shadow: float = 0.0
    glare: float = 0.0
    tone: str = "sRGB"

    def lamp(self, x: Floats, y: Floats) -> Floats:
        """Share of the light at (x, y), 0 to 1 across and down."""
        across = np.clip((x + 0.3 * y - 0.6) / 0.1 + 0.5, 0, 1)
        return 1 - self.shadow * across * across * (3 - 2 * across)

    def spot(self, x: Floats, y: Floats) -> Floats:
        """Light added at (x, y)."""
        return self.glare * np.exp(-0.5 * ((x - 0.3) ** 2 + (0.75 * (y - 0.4)) ** 2) / 0.12**2)


@dataclass(frozen=True, eq=False)
class SurveyedScene:
    """A picture and its truth.

    texts : of `--reference`; seed_px : a pixel on the member; section : true, mm
    """

    seed: int
    photo: Photo
    texts: tuple[str, ...]
    seed_px: tuple[float, float]
    section: Section
    camera: Camera
    drawn: dict[str, object] = field(default_factory=dict)


@dataclass(frozen=True)
class Laid:
    """A reference on the table: shapes to paint, and the text of it once the camera is known."""

    shapes: Sequence[Shape]
    text: Callable[[Camera, np.random.Generator], str]


Height = Callable[[Floats], Floats]


def flush(rng: np.random.Generator, place: Floats, lift: float = 0.0) -> Height:
    """The height of a reference laid level with the face by hand: off by 0.5 mm and half a degree there, 1 sigma."""
    rise, slope = rng.normal(0, 0.5) + lift, rng.normal(0, np.deg2rad(0.5), 2)
    return lambda points: rise + (points - place) @ slope


def _pixel(camera: Camera, place: Floats | Sequence[float], height: Height | None = None) -> Floats:
    point = np.array([place], float)
    z = np.zeros(1) if height is None else height(point)
    return camera.project(np.column_stack([point, z]))[0]


def _at(pixel: Floats) -> str:
    return f"{pixel[0]:.1f},{pixel[1]:.1f}"


def rectangle(
    rng: np.random.Generator, place: Floats, size: str = "A5", stated: str | None = None, **lift: float
) -> Laid:
    """A sheet of paper, card or tile; its true sides lie within what is said of it."""
    height = flush(rng, place, **lift)
    if size in SIZES:
        known = SIZES[size]
        limits = np.array([k.std for k in known.known]) * np.sqrt(3)
        width, depth = known.sides + rng.uniform(-limits, limits)
        outline = rounded_box(width, depth, 3.18) if size == "ID-1" else box(width, depth)
    else:
        width, depth = np.array([float(v) for v in size.split("x")]) + rng.normal(0, 0.05, 2)
        outline = box(width, depth)
    outline = turned(outline, float(rng.uniform(-0.2, 0.2))) + place

    def text(camera: Camera, _: np.random.Generator) -> str:
        u = "" if size in SIZES else " u=0.05"
        return f"rectangle size={stated or size}{u} at={_at(_pixel(camera, place, height))}"

    return Laid([Shape([outline], PAPER, height)], text)


def rule(
    rng: np.random.Generator, place: Floats, division: float = 5.0, count: int = 40, wrong: float = 1.0, **lift: float
) -> Laid:
    """A steel rule whose graduations are thin dark lines from its left edge; upright beside the member."""
    height = flush(rng, place, **lift)
    length = division * count
    # Class II: 0.5 mm over a metre at most.
    true = division * (1 + rng.uniform(-0.5, 0.5) / length)
    turn = float(rng.uniform(-0.05, 0.05))
    centre = place

    def on(points: Floats) -> Floats:
        return turned(points - (0.0, length / 2), turn) + centre

    body = box(28.0, length + 30.0, (14.0, length / 2))
    shapes = [Shape([on(body)], GREY, height)]
    for index in range(count + 1):
        reach = 12.0 if index % 10 == 0 else 8.0
        shapes.append(Shape([on(box(reach, 0.8, (reach / 2, index * true)))], DARK, height))

    def text(camera: Camera, picks: np.random.Generator) -> str:
        ends = [
            _pixel(camera, on(np.array([[0.3, i * true]]))[0], height) + picks.normal(0, 0.5, 2) for i in (0, count)
        ]
        # The picks lie a little inside the body.
        stated = division * wrong
        return f"rule from={_at(ends[0])} to={_at(ends[1])} division={stated:g} length={length:g} class=II tilt=5"

    return Laid(shapes, text)


def rod(rng: np.random.Generator, place: Floats, division: float = 20.0, count: int = 12, **lift: float) -> Laid:
    """A two-tone rod, blocks in turn dark and light."""
    height = flush(rng, place, **lift)
    length = division * count
    true = division * (1 + rng.uniform(-1.0, 1.0) / length)
    turn = float(rng.uniform(-0.05, 0.05))

    def on(points: Floats) -> Floats:
        return turned(points - (0.0, length / 2), turn) + place

    shapes = [
        Shape([on(box(24.0, true, (0.0, (i + 0.5) * true)))], DARK if i % 2 else PAPER, height)
        for i in range(-1, count + 1)
    ]

    def text(camera: Camera, picks: np.random.Generator) -> str:
        ends = [
            _pixel(camera, on(np.array([[0.0, i * true]]))[0], height) + picks.normal(0, 0.5, 2) for i in (0, count)
        ]
        return f"rod from={_at(ends[0])} to={_at(ends[1])} division={division:g} length={length:g} tilt=5"

    return Laid(shapes, text)


def picked(rng: np.random.Generator, places: Floats, u: float = 0.3, wrong: int | None = None) -> Laid:
    """Points on the face's own plane whose positions were taken with a rule."""

    def text(camera: Camera, picks: np.random.Generator) -> str:
        pixels = camera.project(np.column_stack([places, np.zeros(len(places))])) + picks.normal(0, 1, places.shape)
        if len(places) == 2:
            length = float(np.linalg.norm(places[1] - places[0])) + picks.normal(0, u)
            return f"distance from={_at(pixels[0])} to={_at(pixels[1])} length={length:.3f} u={u:g} tilt=5"
        stated = places + picks.normal(0, u, places.shape)
        if wrong is not None:
            stated[wrong] += (20.0, -15.0)
        points = [f"point={_at(p)},{x:.3f},{y:.3f}" for p, (x, y) in zip(pixels, stated, strict=True)]
        return " ".join(["points", *points, f"u={u:g}"])

    return Laid([], text)


def disc(
    rng: np.random.Generator, place: Floats, diameter: float = 60.0, coin: str | None = None, **lift: float
) -> Laid:
    """A washer without its hole, or a coin."""
    height = flush(rng, place, **lift)
    true = diameter + rng.uniform(-0.1, 0.1) if coin else diameter + rng.uniform(-0.05, 0.05)

    def text(camera: Camera, _: np.random.Generator) -> str:
        at = _at(_pixel(camera, place, height))
        return (f"coin name={coin} at={at}" if coin else f"disc diameter={diameter:g} at={at}") + " tilt=8"

    return Laid([Shape([ring(true, (float(place[0]), float(place[1])))], PAPER, height)], text)


def printed(rng: np.random.Generator, place: Floats, kind: str, **lift: float) -> Laid:
    """A chessboard, or a grid of marks, of a print nobody measured: 0.3 % an axis and 0.3 mm of bow, one sigma."""
    level, bow = flush(rng, place, **lift), rng.normal(0, 0.3, 3)

    def height(points: Floats) -> Floats:
        x, y = ((points - place) / 65.0).T
        return level(points) + np.column_stack([x * x - 1 / 3, y * y - 1 / 3, x * y]) @ bow

    scale = 1 + rng.normal(0, 0.003, 2)
    turn = float(rng.uniform(-0.2, 0.2))
    if kind in ("chessboard", "checker"):
        columns, rows, pitch = 5, 7, 16.0
        squares = [
            box(pitch, pitch, ((i + 0.5) * pitch, (j + 0.5) * pitch))
            for i in range(columns + 1)
            for j in range(rows + 1)
            if (i + j) % 2 == 0
        ]
        middle, half = np.array([3.0, 4.0]) * pitch, np.array([3.7, 4.7]) * pitch
        stated = (
            f"chessboard columns={columns} rows={rows} pitch={pitch:g}" if kind == "chessboard" else "checker pitch=16"
        )
    else:
        columns, rows, pitch, size = 4, 5, 26.0, 15.0
        centres = [(i * pitch, j * pitch) for i in range(columns) for j in range(rows)]
        squares = [ring(size, c) if kind == "disc-grid" else box(size, size, c) for c in centres]
        middle, half = np.array([1.5, 2.0]) * pitch, np.array([2.2, 2.7]) * pitch
        side = "diameter" if kind == "disc-grid" else "side"
        stated = f"{kind} columns={columns} rows={rows} pitch={pitch:g} {side}={size:g}"

    def on(points: Floats) -> Floats:
        return turned((points - middle) * scale, turn) + place

    paper = on(middle + half * np.array([[-1, -1], [1, -1], [1, 1], [-1, 1]]))
    shapes = [Shape([paper], PAPER, height), *(Shape([on(s)], DARK, height) for s in squares)]
    return Laid(shapes, lambda camera, _: stated)


# What makes a picture hard, each by itself: the keywords of `draw` for it.
HARD: dict[str, dict[str, object]] = {
    "shadow": {"looks": Looks(shadow=0.6)},
    "low contrast": {"looks": Looks(member=0.2)},
    "glare": {"looks": Looks(glare=0.15)},
    "blur": {"looks": Looks(blur=2.5)},
    "noise": {"looks": Looks(noise=0.02)},
    "linear tone": {"looks": Looks(tone="linear")},
    "strong distortion": {"lens_std": 3 * LENS_STD},
    "45 degrees": {"tilt_deg": 45.0},
}

RIGHT = np.array([125.0, 0.0])


def _laid(kind: str, rng: np.random.Generator) -> list[Laid]:
    if kind == "distance":
        return [picked(rng, np.array([[-150.0, -90.0], [190.0, 95.0]]))]
    if kind == "four points":
        return [picked(rng, np.array([[-160.0, -105.0], [170.0, -110.0], [175.0, 115.0], [-150.0, 110.0]]))]
    if kind == "six points":
        ring_of = np.array([[-160, -105], [10, -120], [170, -110], [175, 115], [5, 120], [-150, 110]], float)
        return [picked(rng, ring_of)]
    if kind == "paper":
        return [rectangle(rng, RIGHT, "A5")]
    if kind == "card":
        return [rectangle(rng, RIGHT, "ID-1")]
    if kind == "tile":
        return [rectangle(rng, RIGHT, "150x100")]
    if kind == "rule":
        return [rule(rng, RIGHT - (30.0, 0.0))]
    if kind == "rod":
        return [rod(rng, RIGHT - (20.0, 0.0))]
    if kind == "disc":
        return [disc(rng, RIGHT)]
    if kind == "coin":
        return [disc(rng, RIGHT - (40.0, 0.0), 25.75, "2-euro")]
    return [printed(rng, RIGHT, kind)]


# What a person is told of, or asked for, by the command's own list of kinds.
KINDS = (
    "paper",
    "card",
    "tile",
    "rule",
    "rod",
    "distance",
    "four points",
    "six points",
    "disc",
    "coin",
    "chessboard",
    "checker",
    "square-grid",
    "disc-grid",
)
# Nothing of these tells the tilt, or not all of it: photos are taken square within what is stated.
FRONTAL = frozenset({"rule", "rod", "distance", "disc", "coin"})


def draw(
    kind: str | Sequence[Callable[[np.random.Generator], Laid]],
    seed: int,
    *,
    megapixels: float = 1.5,
    tilt_deg: float | None = None,
    frontal: bool | None = None,
    lens_std: float = LENS_STD,
    looks: Looks | None = None,
    focal_known: bool = True,
) -> SurveyedScene:
    """A scene with one reference of a kind, or with those that functions lay.

    tilt_deg : None draws it; frontal : square within 5 degrees either way, by default for the kinds that need it
    """
    rng = np.random.default_rng([seed, 77])
    looks = looks or Looks()
    width = int(np.sqrt(megapixels * 1e6 * 4 / 3))
    if frontal is None:
        frontal = isinstance(kind, str) and kind in FRONTAL
    if tilt_deg is None:
        # Within the bound either way; the hypotenuse of both stays below it.
        tilt_deg = float(np.hypot(*rng.uniform(-5.0, 5.0, 2))) if frontal else min(30.0, abs(rng.normal(0, 12.0)))
    true = drawn_camera(
        rng,
        width=width,
        height=width * 3 // 4,
        distance=rng.uniform(430, 520) * (1 + 0.004 * tilt_deg),
        tilt_deg=tilt_deg,
        lens_std=lens_std,
    )
    camera = replace(true.camera, position=np.add(true.camera.position, (30.0, 0.0, 0.0)))
    laid = _laid(kind, rng) if isinstance(kind, str) else [lay(rng) for lay in kind]
    section = _member(rng)
    section = section.with_vertices(np.add(turned(section.vertices, float(rng.uniform(-0.15, 0.15))), (-75.0, 0.0)))
    shapes = [*(s for one in laid for s in one.shapes), Shape(section.loops, looks.member)]
    photo = photograph(
        camera,
        shapes,
        focal_35mm=true.stated_35mm if focal_known else None,
        blur=looks.blur,
        noise=looks.noise,
        seed=seed,
        table=looks.table,
        lamp=looks.lamp if looks.shadow else None,
        glare=looks.spot if looks.glare else None,
        tone=looks.tone,
    )
    texts = tuple(one.text(camera, rng) for one in laid)
    point = section.to_polygon().representative_point()
    x, y = _pixel(camera, (point.x, point.y))
    return SurveyedScene(
        seed, photo, texts, (float(x), float(y)), section, camera, {"tilt_deg": tilt_deg, "kind": kind}
    )


def _member(rng: np.random.Generator) -> Section:
    which = int(rng.integers(4))
    size = float(rng.uniform(0.9, 1.15))
    if which == 0:
        return rolled_i(150 * size, 85 * size, 9, 12, 10)
    if which == 1:
        return channel(140 * size, 70 * size, 9, 12, 9)
    if which == 2:
        return rectangular_hollow(130 * size, 90 * size, 10, 12)
    return timber(80 * size, 140 * size, (25, 30), 1.0)
