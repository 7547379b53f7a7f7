"""References as a person types them: every form that is taken, and every one that is told to be wrong."""

from __future__ import annotations

from pathlib import Path

import pytest
from cutface.cli.app import app
from cutface.cli.show_references import reference_lines
from cutface.props.errors import FileError, UsageError
from cutface.vision.references.bar import Bar
from cutface.vision.references.chessboard import Chessboard
from cutface.vision.references.disc import Disc
from cutface.vision.references.kinds import KINDS, stated_references
from cutface.vision.references.points import Points
from cutface.vision.references.rectangle import Rectangle
from cutface.vision.references.squares import Squares
from cutface.vision.references.stated import Given
from typer.testing import CliRunner


def typed(text: str, **given: float):
    (kind,) = stated_references([text], Given(**given))
    return kind


@pytest.mark.parametrize("name", sorted(KINDS))
def test_the_example_of_every_kind_is_taken(name: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    (tmp_path / "points.csv").write_text("x,y,mm,mm\n1,2,0,0\n900,5,100,0\n910,800,100,90\n3,790,0,90\n")
    assert KINDS[name].example.split()[0] == name
    assert typed(KINDS[name].example).locate
    assert KINDS[name].uncertainty


def test_a_rectangle_of_standard_and_of_stated_size() -> None:
    paper, card, tile = (typed(f"rectangle size={s}") for s in ("a4", "id-1", "6x4in"))
    assert isinstance(paper, Rectangle)
    assert paper.size.sides == (210, 297)
    # ISO 216 allows 2 mm between 150 and 600 mm.
    assert paper.size.known[0].std == pytest.approx(2 / 3**0.5)
    assert card.size.radius > 2
    assert tile.size.sides == pytest.approx((152.4, 101.6))
    assert tile.size.known[0].std == pytest.approx(0.5 / 3**0.5)
    stated = typed("rectangle size=A4 u=0.1 at=30,40")
    assert (stated.size.known[0].std, stated.size.known[0].shape, stated.near) == (0.1, "normal", (30, 40))
    assert typed("rectangle size=150x100 tolerance=0.3").size.known[1].shape == "rectangular"
    corners = typed("rectangle size=A4 corner=1,2 corner=3,2 corner=3,9 corner=1,9").corners
    assert corners == ((1, 2), (3, 2), (3, 9), (1, 9))


def test_rules_rods_and_distances() -> None:
    rule = typed("rule from=10,20 to=900,25 division=1cm class=I")
    assert isinstance(rule, Bar)
    assert (rule.division, rule.accuracy, rule.marks, rule.ends) == (10, "I", "lines", ((10, 20), (900, 25)))
    assert typed("rod from=10,20 to=900,25 division=50 tilt=2").marks == "blocks"
    two = typed("distance from=10,20 to=900,25 length=0.5m u=0.2 tilt=3")
    assert isinstance(two, Points)
    assert two.positions[1][0] - two.positions[0][0] == 500
    assert two.position_std * 2**0.5 == pytest.approx(0.2)
    assert two.tilt_deg == 3


def test_discs_and_boards() -> None:
    disc = typed("disc diameter=24 at=300,200 u=0.02")
    assert isinstance(disc, Disc)
    assert (disc.diameter, disc.known.std) == (24, 0.02)
    assert typed("coin name=2-Euro at=1,2").diameter == 25.75
    board = typed("chessboard columns=9 rows=6 pitch=25 pitch-up=24.9 u=0.1")
    assert isinstance(board, Chessboard)
    assert board.sides == (25, 24.9)
    assert board.scale_std == pytest.approx(0.1 / (5 * 24.9))
    grid = typed("square-grid columns=3 rows=4 pitch=60 side=30 role=on-face")
    assert isinstance(grid, Squares)
    assert grid.role == "on face"


def test_points_from_a_table_and_typed(tmp_path: Path) -> None:
    file = tmp_path / "the points.csv"
    file.write_text("# picked by hand\npx;py;mm;mm\n1;2;0;0\n900;5;100,5;0\n910;800;100;90\n3;790;0;90\n")
    read = typed(f'points file="{file}" u=0.2')
    assert read.pixels == ((1, 2), (900, 5), (910, 800), (3, 790))
    assert read.positions[1] == (100.5, 0)
    assert typed("points point=1,2,0,0 point=900,5,100,0").positions == ((0, 0), (100, 0))
    file.write_text("1,2,3\n4,5,6\n")
    with pytest.raises(UsageError, match="four numbers"):
        typed(f'points file="{file}"')
    with pytest.raises(FileError):
        typed("points file=missing.csv")


def test_what_is_stated_for_all_goes_to_each_that_does_not_say() -> None:
    one = typed("rectangle size=A4", face_height=12.0, focal_35mm=28.0)
    assert (one.setting.height, one.setting.focal_35mm) == (12, 28)
    own = typed("rectangle size=A4 face-height=-3 face-height-u=0.2", face_height=12.0)
    assert (own.setting.height, own.setting.height_std) == (-3, 0.2)
    assert typed("checker pitch=20", face_height=5.0).face_height == 5


@pytest.mark.parametrize(
    ("text", "told"),
    [
        ("", "No reference"),
        ("rectangel size=A4", "no kind"),
        ("rectangle", "needs size"),
        ("rectangle size=A9", "no standard size"),
        ("rectangle size=0x100", "cannot be used"),
        ("rectangle size=A4 u=0.1 tolerance=1", "Both"),
        ("rectangle size=A4 u=-1", "none"),
        ("rectangle size=A4 at=12", "cannot be '12'"),
        ("rectangle size=A4 at=1,2 at=3,4", "twice"),
        ("rectangle size=A4 colour=red", "no key"),
        ("rectangle size=A4 corner=1,2", "four corners"),
        ("rectangle size=A4 role=behind", "cannot be"),
        ("rectangle size=A4 face-height-u=0", "none"),
        ('rectangle size="A4', "quotation mark"),
        ("rule from=1,2 to=800,4 division=nan", "cannot be"),
        ("rule from=1,2 to=800,4 division=10 length=45", "whole number"),
        ("rule from=1,2 to=800,4 division=1 class=IV", "I or II or III"),
        ("rule from=1,2 to=800,4 division=1 tilt=50", "no bound"),
        ("distance from=1,1 to=1,1 length=3", "same"),
        ("distance from=1,1 to=9,1 length=-3", "none"),
        ("points point=1,2,3,4", "do not belong"),
        ("disc diameter=0 at=1,2", "cannot be used"),
        ("coin name=3-euro at=1,2", "no coin"),
        ("chessboard columns=2 rows=6 pitch=25", "cannot be used"),
        ("chessboard columns=9.5 rows=6 pitch=25", "cannot be"),
        ("checker pitch=0", "none"),
        ("disc-grid columns=3 rows=4 pitch=10 diameter=12", "cannot be used"),
    ],
)
def test_slips_are_wrong_use_and_say_what_to_do(text: str, told: str) -> None:
    with pytest.raises(UsageError, match=told) as raised:
        typed(text)
    assert raised.value.remedy


def test_the_list_names_every_kind_key_and_source() -> None:
    text = "\n".join(reference_lines())
    assert max(map(len, text.splitlines())) <= 80
    for kind in KINDS.values():
        assert f"{kind.name}: " in text
        assert kind.example in text
        for key in kind.keys:
            assert f"{key.name}=" in text
    assert "ISO 216" in text
    assert "OIML R 35-1" in text
    assert "ISO/IEC 7810" in text
    assert len(reference_lines("rule")) < len(reference_lines()) / 3
    with pytest.raises(UsageError):
        reference_lines("ruler")
    assert CliRunner().invoke(app, ["references", "rod"]).exit_code == 0
