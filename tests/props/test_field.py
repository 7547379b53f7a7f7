"""Parts, refusals, thinned outlines, and the effect of a moving boundary on the field quantities."""

import numpy as np
import pytest
from cutface.props import field as field_module
from cutface.props import part_field as part_field_module
from cutface.props.errors import OutlineError, UsageError
from cutface.props.field import field_properties
from cutface.props.properties import section_properties
from cutface.props.section import Material, Part, Section
from cutface.props.shapes import angle, channel, rectangle, rolled_i, tube
from cutface.props.shapes.placing import placed
from cutface.props.uncertainty import Mode, OutlineUncertainty, quantify
from section_drawing import ellipse, polygon, walls

SLANTED_CHANNEL = polygon([(0, 0), (60, 0), (58, 10), (8, 9), (8, 90), (70, 92), (70, 102), (0, 104)])
TWO_HOLES = polygon(
    [(0, 0), (60, 5), (50, 70), (-5, 60)],
    [(10, 10), (30, 15), (25, 30), (12, 28)],
    [(20, 40), (35, 41), (35, 55), (18, 50)],
)


def flat(x: float, width: float = 100.0, thickness: float = 6.0, y: float = 0.0) -> Part:
    left, right = x - thickness / 2, x + thickness / 2
    return Part(
        np.array([(left, y - width / 2), (right, y - width / 2), (right, y + width / 2), (left, y + width / 2)])
    )


def test_separate_parts_add_up_and_have_no_common_shear_centre():
    one = field_properties(Section((flat(0.0),)))
    two = field_properties(Section((flat(-40.0), flat(40.0))))
    for name in ("torsion_constant", "warping_constant", "shear_area_x", "shear_area_y"):
        assert two.values[name] == pytest.approx(2 * one.values[name], rel=1e-9)
    assert "shear_centre_x" not in two.values
    assert "connected" in two.missing["shear_centre_x"]
    assert "monosymmetry_x" in two.missing
    assert any("not joined" in sentence for sentence in two.assumptions)
    assert two.torsion_bounds == pytest.approx(tuple(2 * bound for bound in one.torsion_bounds))


def test_connected_parts_twist_about_where_their_stiffnesses_balance():
    # Two flats 80 apart, the second twice as stiff: like the flanges of an I without a web, Cw = I1 I2 h^2/(I1 + I2).
    section = Section((flat(-40.0, thickness=6.0), flat(40.0, thickness=12.0)))
    found = field_properties(section, connected=True)
    assert found.values["shear_centre_x"] == pytest.approx(-40.0 + 80.0 * 2 / 3, abs=1e-6)
    assert found.values["shear_centre_y"] == pytest.approx(0.0, abs=1e-6)
    single = 6.0 * 100.0**3 / 12
    own = field_properties(section).values["warping_constant"]
    assert found.values["warping_constant"] - own == pytest.approx(single * 2 / 3 * 80.0**2, rel=1e-6)
    assert any("diaphragms" in sentence for sentence in found.assumptions)


def test_parts_of_several_materials_are_counted_alike_and_that_is_said():
    steel, timber = Material("steel", elastic_modulus=210e3), Material("timber", elastic_modulus=11e3)
    parts = [Part(flat(x).shell, material=material) for x, material in ((-40.0, steel), (40.0, timber))]
    found = field_properties(Section(tuple(parts)))
    assert any("one material" in sentence for sentence in found.assumptions)


@pytest.mark.parametrize("section", [
    polygon([(0, 0), (10, 10), (10, 0), (0, 10.5)]),
    polygon([(0, 0), (100, 0), (100, 100), (0, 100)], [(0, 50), (50, 20), (50, 80)]),
    polygon([(0, 0), (100, 0), (100, 100), (0, 100)], [(20, 20), (60, 20), (60, 60)], [(40, 40), (80, 40), (80, 80)]),
], ids=["crosses itself", "hole touches the shell", "holes cross"])  # fmt: skip
def test_outlines_that_cross_or_touch_are_refused(section):
    with pytest.raises(OutlineError) as refused:
        field_properties(section)
    assert refused.value.code == "outline-crosses"


@pytest.mark.parametrize(
    "options", [{"poisson_ratio": -0.1}, {"poisson_ratio": 0.6}, {"tolerance": 0.0}, {"tolerance": 1.0}]
)
def test_options_out_of_range_are_refused(options):
    with pytest.raises(UsageError):
        field_properties(SLANTED_CHANNEL, **options)


def finely_divided(section: Section, step: float, noise: float, seed: int = 0) -> Section:
    """The section with points every `step` mm along its edges, moved across them by a smooth random amount."""
    random = np.random.default_rng(seed)
    window = np.exp(-0.5 * np.linspace(-3, 3, 31) ** 2)

    def divided(loop):
        closed = np.concatenate([loop, loop[:1]])
        way = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(closed, axis=0).T))])
        count = int(way[-1] / step)
        at = way[-1] * np.arange(count) / count
        points = np.stack([np.interp(at, way, closed[:, 0]), np.interp(at, way, closed[:, 1])], axis=1)
        along = np.roll(points, -1, axis=0) - np.roll(points, 1, axis=0)
        normal = np.stack([along[:, 1], -along[:, 0]], axis=1) / np.hypot(*along.T)[:, None]
        wave = np.convolve(random.normal(size=count + 30), window, "valid") / np.sqrt(np.sum(window**2))
        return points + noise * wave[:, None] * normal

    return Section(tuple(Part(divided(p.shell), tuple(divided(hole) for hole in p.holes)) for p in section.parts))


def test_thousands_of_short_edges_cost_no_accuracy_and_few_unknowns():
    section = finely_divided(rolled_i(200.0, 100.0, 5.6, 8.5, 12.0), 0.1, 0.0)
    assert len(section.vertices) > 7000
    quick, exact = field_properties(section), field_properties(section, tolerance=5e-5)
    assert quick.within_tolerance
    assert quick.unknowns < 10_000
    for name, value in exact.values.items():
        assert abs(quick.values[name] - value) <= quick.error[name] + exact.error[name], name


def test_a_traced_outline_with_two_cells():
    cells = walls([[(0, 0), (58, 0), (58, 38), (0, 38), (0, 0)], [(29, 0), (29, 38)]], 2.0)
    section = finely_divided(cells, 0.9, 0.02)
    found, exact = field_properties(section), field_properties(section, tolerance=1e-4)
    assert found.within_tolerance
    for name, value in exact.values.items():
        assert abs(found.values[name] - value) <= found.error[name] + exact.error[name], name


@pytest.mark.parametrize("poisson_ratio", [0.0, 0.3])
@pytest.mark.parametrize("section", [SLANTED_CHANNEL, TWO_HOLES], ids=["channel", "two holes"])
def test_sensitivities_equal_differences(section, poisson_ratio):
    random, vertices, step = np.random.default_rng(7), section.vertices, 1e-3
    options = {"poisson_ratio": poisson_ratio}
    found = field_properties(section, **options)
    movement = random.uniform(-1, 1, vertices.shape)
    ahead = field_properties(section.with_vertices(vertices + step * movement), **options)
    behind = field_properties(section.with_vertices(vertices - step * movement), **options)
    change = found.sensitivity.change(movement)
    for name in found.values:
        difference = (ahead.values[name] - behind.values[name]) / (2 * step)
        assert change[name] == pytest.approx(difference, rel=0.01, abs=1e-4 * abs(found.values[name]) / 10), name


def test_sensitivities_of_connected_parts_equal_differences():
    section = Section(
        (angle(80.0, 60.0, 7.0).parts[0], Part(channel(100.0, 50.0, 6.0, 8.0).parts[0].shell + np.array([120.0, 30.0])))
    )
    random, step = np.random.default_rng(3), 1e-3
    movement = random.uniform(-1, 1, section.vertices.shape)
    found = field_properties(section, connected=True)
    ahead = field_properties(section.with_vertices(section.vertices + step * movement), connected=True)
    behind = field_properties(section.with_vertices(section.vertices - step * movement), connected=True)
    change = found.sensitivity.change(movement)
    for name in found.values:
        difference = (ahead.values[name] - behind.values[name]) / (2 * step)
        assert change[name] == pytest.approx(difference, rel=0.01), name


def test_sensitivities_know_growth_turning_and_shifting():
    found = field_properties(TWO_HOLES, poisson_ratio=0.3)
    vertices = TWO_HOLES.vertices
    grown = found.sensitivity.change(vertices)
    # The change is that of the upper bound, the value the middle of both.
    assert grown["torsion_constant"] == pytest.approx(4 * found.torsion_bounds[1], rel=1e-6)
    assert grown["warping_constant"] == pytest.approx(6 * found.values["warping_constant"], rel=1e-6)
    assert grown["shear_centre_x"] == pytest.approx(found.values["shear_centre_x"], rel=1e-5)
    assert grown["shear_area_y"] == pytest.approx(2 * found.values["shear_area_y"], rel=1e-6)
    assert grown["monosymmetry_major"] == pytest.approx(found.values["monosymmetry_major"], rel=1e-4)
    turned = found.sensitivity.change(vertices @ np.array([[0.0, 1.0], [-1.0, 0.0]]))
    assert turned["torsion_constant"] == pytest.approx(0.0, abs=1e-6 * found.values["torsion_constant"])
    assert turned["shear_centre_x"] == pytest.approx(-found.values["shear_centre_y"], rel=1e-5)
    assert turned["monosymmetry_major"] == pytest.approx(0.0, abs=1e-3)
    shifted = found.sensitivity.change(np.broadcast_to([1.0, 0.0], vertices.shape))
    assert shifted["shear_centre_x"] == pytest.approx(1.0, rel=1e-5)
    assert shifted["torsion_constant"] == pytest.approx(0.0, abs=1e-6 * found.values["torsion_constant"])


def test_density_along_the_outline_is_hadamards():
    # A disc: the stress at the edge is the radius, so a mm^2 more adds the radius squared. And a rectangle 30 x 10: its
    # torsion constant grows by 4986.70 mm^4 per mm all round (finite differences of the Saint-Venant series).
    disc = field_properties(polygon(ellipse(50.0, 50.0))).sensitivity
    assert disc.density("torsion_constant") == pytest.approx(2500.0, rel=0.01)
    bar = field_properties(polygon([(0, 0), (30, 0), (30, 10), (0, 10)]), tolerance=1e-4).sensitivity
    assert np.sum(bar.weights) == pytest.approx(80.0)
    outward = np.array([(-1, -1), (1, -1), (1, 1), (-1, 1)])
    assert bar.change(outward)["torsion_constant"] == pytest.approx(4986.70, rel=1e-4)
    nodes, weights = np.polynomial.legendre.leggauss(40)
    length = np.array([30.0, 10.0, 30.0, 10.0])
    total = sum(
        length[edge] / 2 * weights @ bar.density_at("torsion_constant", np.full(40, edge), 0.5 * (nodes + 1))
        for edge in range(4)
    )
    assert total == pytest.approx(4986.70, rel=0.01)


def test_density_is_found_on_the_right_loop():
    sensitivity = field_properties(TWO_HOLES).sensitivity
    loops = [len(loop) for loop in TWO_HOLES.loops]
    first = np.cumsum([0, *loops])[:-1]
    for start, size in zip(first, loops, strict=True):
        own = (sensitivity.before >= start) & (sensitivity.before < start + size)
        density = sensitivity.density("torsion_constant")
        found = sensitivity.density_at("torsion_constant", sensitivity.before[own], sensitivity.fraction[own])
        assert found == pytest.approx(density[own])


@pytest.mark.parametrize("section", [
    rolled_i(200.0, 100.0, 5.6, 8.5, 12.0),
    channel(120.0, 55.0, 7.0, 9.0, 9.0, 4.5, 0.08),
    TWO_HOLES,
], ids=["rolled I", "channel", "two holes"])  # fmt: skip
def test_first_order_spread_agrees_with_monte_carlo(section):
    # Independent causes: size along x and y, a common edge bias, and a wave along the outline, each of some 0.1 mm.
    random = np.random.default_rng(11)
    vertices = section.vertices
    middle, size = vertices.mean(axis=0), np.ptp(vertices, axis=0).max()
    modes = [
        0.2 * (vertices - middle) / size * np.array([1.0, 0.0]),
        0.2 * (vertices - middle) / size * np.array([0.0, 1.0]),
        0.1 * outward(section),
        0.1 * outward(section) * np.sin(7 * vertices[:, :1] / size + 4 * vertices[:, 1:] / size),
    ]
    found = field_properties(section, tolerance=2e-3)
    effects = np.array([list(found.sensitivity.change(mode).values()) for mode in modes])
    draws = random.normal(size=(30, len(modes)))
    drawn = [
        field_properties(section.with_vertices(vertices + np.tensordot(draw, modes, axes=1)), tolerance=2e-3).values
        for draw in draws
    ]
    for index, name in enumerate(found.values):
        sampled = np.array([values[name] for values in drawn])
        predicted = found.values[name] + draws @ effects[:, index]
        spread = np.std(predicted)
        # Left over: second order, and the numerical error of every draw.
        allowed = 0.08 * spread + found.error[name]
        assert np.std(sampled) == pytest.approx(spread, abs=allowed), name
        assert np.std(sampled - predicted) <= allowed, name


def outward(section: Section) -> np.ndarray:
    """Movement (n, 2) of the vertices that shifts every edge outward by 1 mm."""
    moved = []
    for loop in section.loops:
        along = np.roll(loop, -1, axis=0) - loop
        normal = np.stack([along[:, 1], -along[:, 0]], axis=1) / np.hypot(*along.T)[:, None]
        before = np.roll(normal, 1, axis=0)
        moved.append((normal + before) / (1.0 + np.sum(normal * before, axis=1))[:, None])
    return np.concatenate(moved)


def test_torsion_and_shear_alone_are_quantified():
    section = rectangle(100.0, 50.0)
    field = field_properties(section)
    uncertainty = OutlineUncertainty((Mode("scale", 0.01 * section.vertices),))
    alone = quantify(section, field.values, uncertainty, field)
    together = quantify(section, {**section_properties(section), **field.values}, uncertainty, field)
    assert alone.keys() == field.values.keys()
    assert {name: q.std for name, q in alone.items()} == pytest.approx({n: together[n].std for n in alone})


def test_walls_too_thin_for_a_mesh_are_refused_before_any_work(monkeypatch):
    monkeypatch.setattr(field_module, "solve_part", lambda *arguments: pytest.fail("a mesh was tried"))
    for thin in (rectangle(1000.0, 0.15), tube(2000.0, 0.5)):
        with pytest.raises(OutlineError, match="too thin to solve torsion") as caught:
            field_properties(thin)
        assert caught.value.code == "too-thin-for-torsion"
    # As thin beside a stout part.
    with pytest.raises(OutlineError, match=r"0\.15 mm thick"):
        field_properties(Section((*rectangle(100.0, 50.0).parts, *placed(rectangle(2000.0, 0.15), 200.0).parts)))


def test_the_thinnest_sheet_in_use_is_solved():
    # 300 x 1 mm, as a cold-formed web: b t^3/3 less what its two ends lose, 0.21 t^4 each (Timoshenko and Goodier,
    # Theory of Elasticity, from memory).
    found = field_properties(rectangle(300.0, 1.0))
    assert found.values["torsion_constant"] == pytest.approx((300.0 - 0.63) / 3.0, rel=1e-3)
    assert found.within_tolerance


def test_a_figure_that_says_little_is_refused(monkeypatch):
    monkeypatch.setattr(part_field_module, "_MOST_UNKNOWNS", 10)
    monkeypatch.setattr(field_module, "_LOOSEST", 1e-4)
    with pytest.raises(OutlineError, match="still up to") as caught:
        field_properties(SLANTED_CHANNEL, tolerance=1e-4)
    assert caught.value.code == "torsion-not-solved"
