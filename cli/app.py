"""The commands: take what a person typed, call the one function that does it, show what came back.

Nothing is computed here. What a command needs is imported within it, so that help comes at once.
"""

from __future__ import annotations

import io
import math
import sys
from enum import StrEnum
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, NamedTuple, NoReturn

import typer

from .. import __version__
from ..props.errors import UsageError
from . import failures

if TYPE_CHECKING:
    from .appraisal import Questions
    from .drawn import Drawn

app = typer.Typer(
    name="cutface",
    help="Section properties of a member from a photo or scan of its cut face, each with its uncertainty.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)
print_app = typer.Typer(
    help="Make reference sheets and cards to print.",
    no_args_is_help=True,
    rich_markup_mode=None,
)
app.add_typer(print_app, name="print")
calibrate_app = typer.Typer(
    help="Calibrate a camera or a scanner once, for every later measurement.",
    no_args_is_help=True,
    rich_markup_mode=None,
)
app.add_typer(calibrate_app, name="calibrate")


class Paper(StrEnum):
    """Papers that sheets are made for."""

    A4 = "A4"
    A3 = "A3"
    LETTER = "Letter"
    TABLOID = "Tabloid"


class CardSet(StrEnum):
    """Sizes of cards."""

    SMALL = "small"
    LARGE = "large"


class Format(StrEnum):
    """Formats of the printed references."""

    PDF = "pdf"
    SVG = "svg"
    PNG = "png"


class Units(StrEnum):
    """Units of the table."""

    MM = "mm"
    CM = "cm"
    IN = "in"


class Symbols(StrEnum):
    """Symbols of the table."""

    EN = "en"
    US = "us"


class Pair(NamedTuple):
    """Two numbers typed as one value."""

    first: float
    second: float


def _pair(text: str | Pair) -> Pair:
    if isinstance(text, Pair):
        return text
    parts = text.lower().replace("x", ",").split(",")
    if len(parts) != 2:
        raise typer.BadParameter(f"'{text}' is not two numbers such as 140.2,139.9.")
    return Pair(*(_number(part) for part in parts))


def _outline(text: str) -> tuple[tuple[float, float], ...]:
    corners = tuple(tuple(_pair(corner)) for corner in text.split())
    if len(corners) < 3:
        raise UsageError(
            "excluded-corners",
            f"'{text}' is no region: it has {len(corners)} corners.",
            'Write three corners or more in one text, as --exclude "100,80 220,80 220,190".',
        )
    return tuple((x, y) for x, y in corners)


def _number(text: str | float) -> float:
    try:
        value = float(text)
    except ValueError:
        raise typer.BadParameter(f"'{text}' is not a number.") from None
    if not math.isfinite(value):
        raise typer.BadParameter(f"'{text}' is not a number to measure with.")
    return value


def _positive(text: str | float) -> float:
    value = _number(text)
    if value <= 0:
        raise typer.BadParameter(f"'{text}' must be more than zero.")
    return value


class Counts(NamedTuple):
    """Two whole numbers typed as one value."""

    across: int
    up: int


def _counts(text: str | Counts) -> Counts:
    if isinstance(text, Counts):
        return text
    parts = text.lower().replace(",", "x").split("x")
    if len(parts) != 2 or not all(part.strip().isdecimal() for part in parts):
        raise typer.BadParameter(f"'{text}' is not two whole numbers such as 9x6.")
    return Counts(*(int(part) for part in parts))


def _resolution(text: str | Pair) -> Pair:
    if isinstance(text, Pair) or "," in text or "x" in text.lower():
        return _pair(text)
    return _pair(f"{text},{text}")


IntoOption = Annotated[Path, typer.Option("--into", metavar="DIR", help="Folder for the files; made if it is missing.")]
ReplaceOption = Annotated[bool, typer.Option("--replace", help="Write over files of an earlier run.")]
FormatOption = Annotated[
    list[Format] | None,
    typer.Option("--format", metavar="pdf|svg|png", show_default="pdf", help="May be given several times."),
]
CalibrationIntoOption = Annotated[
    Path | None,
    typer.Option(
        "--into",
        metavar="DIR",
        help="Folder for the calibration and its plots.",
        show_default="where later pictures look for it",
    ),
]
DensityOption = Annotated[
    float | None, typer.Option("--density", parser=_positive, metavar="KG/M3", help="Density, for the mass per metre.")
]
UnitsOption = Annotated[Units, typer.Option("--units", help="Units of the table; with cm, lengths stay in mm.")]
SymbolsOption = Annotated[
    Symbols | None,
    typer.Option(
        "--symbols", help="Symbols of EN 1993-1-1 or of US practice.", show_default="us for --units in, else en"
    ),
]
QuietOption = Annotated[bool, typer.Option("--quiet", help="No table.")]
PoissonOption = Annotated[
    float | None,
    typer.Option("--poisson", parser=_number, metavar="RATIO", help="Poisson ratio, for shear centre and areas."),
]
ToleranceOption = Annotated[
    float | None,
    typer.Option(
        "--tolerance", parser=_positive, metavar="PERCENT", help="Numerical error to reach.", show_default="0.1"
    ),
]
AxisOption = Annotated[
    str | None,
    typer.Option(
        "--axis", metavar="X,Y,ANGLE", help="Properties about your own axes too, mm and degrees; or centroid,ANGLE."
    ),
]
ForcesOption = Annotated[
    str | None,
    typer.Option(
        "--forces",
        metavar="N=..,Mx=..",
        help="Elastic stresses from N, Vx, Vy (kN), Mx, My, T (kN m); other units typed behind.",
    ),
]
LossOption = Annotated[
    str | None,
    typer.Option("--loss", metavar="MM", help="The section less MM on all faces; or outer=MM, or top=MM,left=MM,..."),
]
HoleOption = Annotated[
    list[str] | None,
    typer.Option("--hole", metavar="X,Y,DIAMETER", help="The section less a round hole too, mm. Repeatable."),
]
ReferenceMaterialOption = Annotated[
    str | None,
    typer.Option(
        "--reference-material",
        metavar="NAME",
        help="Express the transformed section in this material.",
        show_default="that of part 1",
    ),
]
MaterialOption = Annotated[
    list[str] | None,
    typer.Option(
        "--material",
        metavar="PART=NAME:E",
        help="Modulus of a part, MPa, for the transformed section; then :DENSITY and :STRENGTH. Repeatable.",
    ),
]
DrawnIntoOption = Annotated[
    Path | None,
    typer.Option("--into", metavar="DIR", help="Folder for result and drawing; without it, no files are written."),
]
DiaphragmsOption = Annotated[
    bool, typer.Option("--diaphragms", help="Separate parts are held to one shape by diaphragms, for torsion.")
]
WithoutTorsionOption = Annotated[
    bool, typer.Option("--skip-torsion", help="Leave out torsion, warping, shear centre and shear areas; quicker.")
]
DrawnJsonOption = Annotated[bool, typer.Option("--json", help="Print the result instead of the table, in one line.")]


def _show_version(wanted: bool) -> None:
    if wanted:
        typer.echo(f"cutface {__version__}")
        raise typer.Exit


@app.callback()
def _common(
    version: Annotated[
        bool, typer.Option("--version", callback=_show_version, is_eager=True, help="Print the version and stop.")
    ] = False,
) -> None:
    pass


@print_app.command("sheet")
def print_sheet(
    paper: Annotated[
        Paper, typer.Option(case_sensitive=False, metavar="A4|A3|Letter|Tabloid", help="Paper in your printer.")
    ] = Paper.A4,
    formats: FormatOption = None,
    into: IntoOption = Path(),
    replace: ReplaceOption = False,
) -> None:
    """A sheet: the cut face lies in its frame of squares."""
    _print_reference("sheet", paper, formats, into, replace)


@print_app.command("cards")
def print_cards(
    size: Annotated[CardSet, typer.Option(help="Small for joists and rolled sections, large for deep members.")] = (
        CardSet.SMALL
    ),
    paper: Annotated[
        Paper, typer.Option(case_sensitive=False, metavar="A4|Letter", help="Paper in your printer.")
    ] = Paper.A4,
    formats: FormatOption = None,
    into: IntoOption = Path(),
    replace: ReplaceOption = False,
) -> None:
    """Cards to cut out and fix around a cut face."""
    _print_reference(f"{size.value} cards", paper, formats, into, replace)


def _print_reference(kind: Any, paper: Paper, formats: list[Format] | None, into: Path, replace: bool) -> None:
    from .progress import working
    from .reference_print import write_reference

    with working("Drawing"):
        written = write_reference(kind, paper.value, into, [f.value for f in formats or [Format.PDF]], replace=replace)
    for file in written:
        typer.echo(f"Written: {file}")
    typer.echo(
        "Print at 100 % (actual size), then measure the two check lengths on the paper\n"
        "and state them when you measure: --check ACROSS,UP."
    )


@calibrate_app.command("camera")
def calibrate_camera(
    photos: Annotated[
        list[Path], typer.Argument(metavar="PHOTO", help="Eight to fifteen photos of one board, by one camera.")
    ],
    chessboard: Annotated[
        Counts | None,
        typer.Option(
            parser=_counts, metavar="COLUMNSxROWS", help="A plain chessboard: corners where four squares meet."
        ),
    ] = None,
    charuco: Annotated[
        Counts | None, typer.Option(parser=_counts, metavar="COLUMNSxROWS", help="A ChArUco board: its squares.")
    ] = None,
    pattern: Annotated[
        str | None,
        typer.Option(
            metavar='"KIND NAME=VALUE ..."', help="A print as --reference takes it, such as square-grid or disc-grid."
        ),
    ] = None,
    pitch: Annotated[
        Pair | None,
        typer.Option(
            parser=_resolution, metavar="MM", help="Side of a square, or X,Y.", show_default="25 for a chessboard"
        ),
    ] = None,
    marker: Annotated[
        float | None, typer.Option(parser=_positive, metavar="MM", help="Side of a marker of the ChArUco board.")
    ] = None,
    dictionary: Annotated[
        str | None,
        typer.Option(metavar="NAME", help="Dictionary of the ChArUco board's markers.", show_default="DICT_5X5_100"),
    ] = None,
    into: CalibrationIntoOption = None,
    replace: ReplaceOption = False,
    quiet: QuietOption = False,
) -> None:
    """Calibrate a camera from photos of a flat board, tilted to all sides.

    Without --chessboard, --charuco or --pattern the board is a sheet or card of cutface print.
    Exit codes: 0 calibrated, 2 wrong use, 3 refused, 4 a file that cannot be read or written.
    """
    from . import calibrate
    from .calibration_folder import VARIABLE

    board = calibrate.board_of(chessboard, charuco, pitch, marker, dictionary, pattern)
    done = calibrate.calibrate_camera(
        photos, board, into, replace=replace, true_size=chessboard is None or pitch is not None
    )
    if not quiet:
        from ..vision.references.printed import EXIF_FOCAL_STD
        from .show_calibration import camera_view

        _console().print(camera_view(done.device, EXIF_FOCAL_STD))
    _say_kept(done, "photos by this camera, at this focal length and picture size,", "--camera", VARIABLE)


@calibrate_app.command("scanner")
def calibrate_scanner(
    scans: Annotated[
        list[Path], typer.Argument(metavar="SCAN", help="Scans of the whole bed with a printed sheet on it.")
    ],
    check: Annotated[
        Pair, typer.Option(parser=_pair, metavar="W,H", help="What the sheet's check lengths really measure, mm.")
    ],
    check_u: Annotated[
        float | None, typer.Option("--check-u", parser=_positive, metavar="MM", help="Standard uncertainty of --check.")
    ] = None,
    resolution: Annotated[
        Pair | None, typer.Option(parser=_resolution, metavar="DPI", help="Resolution of the scans: DPI, or X,Y.")
    ] = None,
    into: CalibrationIntoOption = None,
    replace: ReplaceOption = False,
    quiet: QuietOption = False,
) -> None:
    """Calibrate a flatbed scanner from scans of a sheet whose check lengths were measured.

    Better two scans, the sheet turned by half a turn between them.
    Exit codes: 0 calibrated, 2 wrong use, 3 refused, 4 a file that cannot be read or written.
    """
    from . import calibrate
    from .calibration_folder import VARIABLE

    done = calibrate.calibrate_scanner(scans, check, check_u, resolution, into, replace=replace)
    if not quiet:
        from .show_calibration import scanner_view

        _console().print(scanner_view(done.device))
    _say_kept(done, "scans of the whole bed by this scanner", "--scanner", VARIABLE)


def _say_kept(done: Any, later: str, option: str, variable: str) -> None:
    typer.echo(f"\nWritten to {done.folder}: {', '.join(done.files)}")
    if done.by_itself:
        typer.echo(f"Later {later} find it there by themselves ({variable} names another folder).")
    else:
        typer.echo(f"State it when you measure: {option} {done.folder / done.main}")


@app.command("measure")
def measure_photo(
    photos: Annotated[
        list[Path],
        typer.Argument(metavar="PHOTO", help="Photo or scan of the cut face with its reference; several of one face."),
    ],
    into: Annotated[
        Path | None,
        typer.Option(
            "--into",
            metavar="DIR",
            help="Folder for result, drawing and picture.",
            show_default="the photo's name with -section",
        ),
    ] = None,
    replace: ReplaceOption = False,
    reference: Annotated[
        list[str] | None,
        typer.Option(
            "--reference",
            metavar='"KIND NAME=VALUE ..."',
            help='Another reference than sheet or cards, as "rectangle size=A4"; see cutface references.',
        ),
    ] = None,
    check: Annotated[
        Pair | None,
        typer.Option(parser=_pair, metavar="W,H", help="What the printed check lengths really measure, mm."),
    ] = None,
    check_u: Annotated[
        float | None, typer.Option("--check-u", parser=_positive, metavar="MM", help="Standard uncertainty of --check.")
    ] = None,
    face_height: Annotated[
        float | None,
        typer.Option(parser=_number, metavar="MM", help="Height of the face above the reference, towards the camera."),
    ] = None,
    face_height_u: Annotated[
        float | None,
        typer.Option("--face-height-u", parser=_positive, metavar="MM", help="Standard uncertainty of --face-height."),
    ] = None,
    focal_35mm: Annotated[
        float | None,
        typer.Option(
            "--focal-35mm", parser=_positive, metavar="MM", help="Focal length of the camera, 35 mm equivalent."
        ),
    ] = None,
    resolution: Annotated[
        Pair | None, typer.Option(parser=_resolution, metavar="DPI", help="Resolution of a scan: DPI, or X,Y.")
    ] = None,
    seed: Annotated[
        list[Pair] | None,
        typer.Option(parser=_pair, metavar="X,Y", help="A pixel on the face, when it is not found; repeatable."),
    ] = None,
    part: Annotated[
        list[str] | None,
        typer.Option(
            metavar="X,Y=NAME:E",
            help="A pixel on one part of a member of several materials, one for each; =NAME:E as for --material.",
        ),
    ] = None,
    within: Annotated[
        list[Pair] | None,
        typer.Option(parser=_pair, metavar="X,Y", help="A corner of the region to look in, pixels; three or more."),
    ] = None,
    exclude: Annotated[
        list[str] | None,
        typer.Option(
            "--exclude",
            metavar='"X,Y X,Y X,Y"',
            help="Corners of a region where a clamp or a hand hides the edge: not seen, bridged; repeatable.",
        ),
    ] = None,
    scanner_scale_u: Annotated[
        float | None,
        typer.Option(
            "--scanner-scale-u", parser=_positive, metavar="PERCENT", help="Standard uncertainty of a scan's scale."
        ),
    ] = None,
    camera: Annotated[
        Path | None,
        typer.Option(
            "--camera",
            metavar="FILE",
            help="The camera's calibration, a folder of them, or none.",
            show_default="the one that belongs to the photo, if there is one",
        ),
    ] = None,
    scanner: Annotated[
        Path | None,
        typer.Option(
            "--scanner",
            metavar="FILE",
            help="The scanner's calibration, a folder of them, or none.",
            show_default="the one that belongs to the scan, if there is one",
        ),
    ] = None,
    cut: Annotated[
        str | None,
        typer.Option(
            "--cut",
            metavar='"angle=DEG direction=DEG"',
            help="A cut not square to the member, projected to the true section; or depths=MM,MM for the angle.",
        ),
    ] = None,
    calliper: Annotated[
        list[str] | None,
        typer.Option(
            "--calliper",
            metavar='"SIZE=MM u=MM"',
            help="A size taken by calliper: width, depth, length, breadth, or X,Y X,Y across a wall; repeatable.",
        ),
    ] = None,
    page: Annotated[
        int | None,
        typer.Option(
            "--page",
            min=1,
            metavar="N",
            help="Page of a TIFF, HEIC or PDF file with several.",
            show_default="the first",
        ),
    ] = None,
    page_dpi: Annotated[
        float | None,
        typer.Option(
            "--page-dpi",
            parser=_positive,
            metavar="DPI",
            help="Resolution at which a PDF page that is no scan is drawn.",
            show_default="300",
        ),
    ] = None,
    density: DensityOption = None,
    torsion: Annotated[
        bool, typer.Option("--torsion", help="Torsion, warping, shear centre and shear areas too; some seconds more.")
    ] = False,
    poisson: PoissonOption = None,
    diaphragms: DiaphragmsOption = False,
    axis: AxisOption = None,
    forces: ForcesOption = None,
    loss: LossOption = None,
    hole: HoleOption = None,
    material: MaterialOption = None,
    reference_material: ReferenceMaterialOption = None,
    units: UnitsOption = Units.MM,
    symbols: SymbolsOption = None,
    quiet: QuietOption = False,
    json: Annotated[
        bool,
        typer.Option(
            "--json", help="Print the result instead of the table, one line a member; files only with --into."
        ),
    ] = False,
) -> None:
    """Measure the cut face in a photo or scan; several of one face are combined.

    Exit codes: 0 measured, 2 wrong use, 3 refused, 4 a file that cannot be read or written.
    """
    from .known_devices import StatedDevices
    from .run import run

    _needs("--check-u", check_u, "--check", check)
    _needs("--face-height-u", face_height_u, "--face-height", face_height)
    parts, material = _parts(part or [], material or [])
    options = {
        "references": tuple(reference or ()) or None,
        "check_lengths": check and tuple(check),
        "check_length_std": check_u,
        "face_height": face_height,
        "face_height_std": face_height_u,
        "focal_length_35mm": focal_35mm,
        "resolution_dpi": resolution and tuple(resolution),
        "seeds": tuple(tuple(pixel) for pixel in seed or ()) or None,
        "parts": parts or None,
        "excluded": tuple(_outline(text) for text in exclude or ()) or None,
        "within": tuple(tuple(pixel) for pixel in within or ()) or None,
        "scanner_scale_std": scanner_scale_u and scanner_scale_u / 100,
        "density": density,
    }
    _needs("--poisson", poisson, "--torsion", torsion or None)
    _needs("--diaphragms", diaphragms or None, "--torsion", torsion or None)
    questions = _questions(torsion, poisson, None, axis, forces, loss, material, diaphragms, hole, reference_material)
    sizes: Any = ()
    oblique: Any = None
    if calliper or cut:
        from .typed import typed_calliper, typed_cut

        sizes = tuple(typed_calliper(text) for text in calliper or ())
        oblique = typed_cut(cut) if cut else None
    folder = into or (None if json else Path(f"{photos[0].stem}-section"))
    outcome = run(
        photos,
        {name: given for name, given in options.items() if given is not None},
        folder,
        replace=replace,
        questions=questions,
        devices=StatedDevices(camera, scanner),
        opening={name: value for name, value in (("page", page), ("page_dpi", page_dpi)) if value is not None},
        sizes=sizes,
        cut=oblique,
    )
    if json:
        from .files.json_document import to_text

        for document in outcome.documents:
            typer.echo(to_text(document, one_line=True), nl=False)
    elif outcome.measurement is not None and not quiet:
        from .show import measurement_view

        console = _console()
        shown = _symbols(units, symbols)
        console.print(
            measurement_view(outcome.measurement, units.value, shown.value, console.width, outcome.appraisals)
        )
    if folder is not None and not quiet:
        typer.echo(f"\nWritten to {folder}: {', '.join(outcome.files)}", err=json)
    if outcome.refusal is not None:
        raise outcome.refusal


@app.command("references")
def list_references(
    kind: Annotated[str | None, typer.Argument(metavar="KIND", help="One kind alone.")] = None,
) -> None:
    """List the references that can be stated with --reference: their keys, and what is assumed of each."""
    from .show_references import reference_lines

    typer.echo("\n".join(reference_lines(kind)))


def _parts(typed: list[str], materials: list[str]) -> tuple[tuple[tuple[float, float], ...], list[str]]:
    """The pixels on the parts, and the materials with those of the parts by their number."""
    pixels: list[tuple[float, float]] = []
    materials = list(materials)
    for number, text in enumerate(typed, start=1):
        pixel, equals, material = text.partition("=")
        x, y = _pair(pixel)
        pixels.append((x, y))
        if equals:
            materials.append(f"{number}={material}")
    return tuple(pixels), materials


@app.command("section")
def section_of_file(
    file: Annotated[
        Path, typer.Argument(metavar="FILE", help="DXF, SVG, WKT, GeoJSON, a table of points, or a result.json.")
    ],
    layer: Annotated[
        str | None, typer.Option("--layer", metavar="NAME", help="Read this layer, or SVG group, alone.")
    ] = None,
    unit: Annotated[
        str | None,
        typer.Option("--unit", metavar="UNIT", help="Unit of the file's numbers: mm, cm, m, in, ft."),
    ] = None,
    repair: Annotated[
        bool, typer.Option("--repair", help="Mend open, crossing or repeated outlines, and say what was changed.")
    ] = False,
    density: DensityOption = None,
    skip_torsion: WithoutTorsionOption = False,
    poisson: PoissonOption = None,
    tolerance: ToleranceOption = None,
    diaphragms: DiaphragmsOption = False,
    axis: AxisOption = None,
    forces: ForcesOption = None,
    loss: LossOption = None,
    hole: HoleOption = None,
    material: MaterialOption = None,
    reference_material: ReferenceMaterialOption = None,
    into: DrawnIntoOption = None,
    replace: ReplaceOption = False,
    units: UnitsOption = Units.MM,
    symbols: SymbolsOption = None,
    quiet: QuietOption = False,
    json: DrawnJsonOption = False,
) -> None:
    """Properties of a section from a drawing or an earlier result.

    Outlines inside outlines are holes, outlines side by side are parts.
    Exit codes: 0 calculated, 2 wrong use, 3 refused, 4 a file that cannot be read or written.
    """
    from .drawn import section_from_file

    questions = _questions(
        not skip_torsion, poisson, tolerance, axis, forces, loss, material, diaphragms, hole, reference_material
    )
    outcome = section_from_file(
        file, questions, into, layer=layer, unit=unit, repair=repair, density=density, replace=replace
    )
    _show_drawn(outcome, into, units, symbols, quiet, json)


@app.command("shape")
def section_of_dimensions(
    name: Annotated[str | None, typer.Argument(metavar="NAME", help="Name of the shape; see --list.")] = None,
    dimensions: Annotated[
        list[str] | None,
        typer.Argument(metavar="DIMENSION=VALUE...", help="Its dimensions, in mm or with a unit behind: depth=8in."),
    ] = None,
    list_shapes: Annotated[bool, typer.Option("--list", help="List the shapes with their dimensions, and stop.")] = (
        False
    ),
    density: DensityOption = None,
    skip_torsion: WithoutTorsionOption = False,
    poisson: PoissonOption = None,
    tolerance: ToleranceOption = None,
    axis: AxisOption = None,
    forces: ForcesOption = None,
    loss: LossOption = None,
    hole: HoleOption = None,
    material: MaterialOption = None,
    reference_material: ReferenceMaterialOption = None,
    into: DrawnIntoOption = None,
    replace: ReplaceOption = False,
    units: UnitsOption = Units.MM,
    symbols: SymbolsOption = None,
    quiet: QuietOption = False,
    json: DrawnJsonOption = False,
) -> None:
    """Properties of a shape from its dimensions.

    For instance: cutface shape rolled-i depth=200 width=100 web-thickness=5.6 flange-thickness=8.5 root-radius=12
    """
    if list_shapes:
        from .show_shapes import shape_lines

        typer.echo("\n".join(shape_lines()))
        return
    if name is None:
        raise UsageError("no-shape", "No shape is named.", "Name one of those that cutface shape --list shows.")
    from .drawn import section_from_dimensions

    questions = _questions(
        not skip_torsion, poisson, tolerance, axis, forces, loss, material, False, hole, reference_material
    )
    outcome = section_from_dimensions(name, dimensions or [], questions, into, density=density, replace=replace)
    _show_drawn(outcome, into, units, symbols, quiet, json)


def _questions(
    torsion: bool,
    poisson: float | None,
    tolerance: float | None,
    axis: str | None,
    forces: str | None,
    loss: str | None,
    material: list[str] | None,
    diaphragms: bool = False,
    hole: list[str] | None = None,
    reference_material: str | None = None,
) -> Questions | None:
    """What was asked beyond the properties, None for nothing; nothing more is imported then."""
    typed = {
        "torsion": torsion or None,
        "poisson_ratio": poisson,
        "tolerance": tolerance and tolerance / 100,
        "diaphragms": diaphragms or None,
        "axis": axis,
        "forces": forces,
        "loss": loss,
        "hole": hole or None,
        "material": material or None,
        "reference_material": reference_material,
    }
    stated = {name: value for name, value in typed.items() if value is not None}
    if not stated:
        return None
    from .appraisal import Questions

    return Questions.typed(stated)


def _show_drawn(
    outcome: Drawn, folder: Path | None, units: Units, symbols: Symbols | None, quiet: bool, json: bool
) -> None:
    if json:
        from .files.json_document import to_text

        typer.echo(to_text(outcome.document, one_line=True), nl=False)
    elif outcome.appraisal is not None and not quiet:
        from .show import section_view

        console = _console()
        shown = _symbols(units, symbols)
        view = section_view(
            outcome.title,
            outcome.appraisal,
            outcome.notices,
            units.value,
            shown.value,
            console.width,
            outcome.measured,
        )
        console.print(view)
    if folder is not None and not quiet:
        typer.echo(f"\nWritten to {folder}: {', '.join(outcome.files)}", err=json)
    if outcome.refusal is not None:
        raise outcome.refusal


def _console() -> Any:
    from rich.console import Console

    from .tables import ROOMY

    # Into a file or another program the lines are as long as the table needs.
    return Console(highlight=False, width=None if sys.stdout.isatty() else ROOMY)


def _symbols(units: Units, symbols: Symbols | None) -> Symbols:
    return symbols or (Symbols.US if units is Units.IN else Symbols.EN)


def _needs(name: str, value: float | bool | None, other: str, other_value: Any) -> None:
    if value is not None and other_value is None:
        raise UsageError("option-alone", f"{name} says nothing without {other}.", f"State {other} too.")


def main() -> NoReturn:
    """Run the command line; every end is an exit code, and an error one clear message."""
    for stream in (sys.stdout, sys.stderr):
        # A terminal without the sign for a power or a degree shows a question mark in its place.
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(errors="replace")
    try:
        app()
    except Exception as error:
        typer.echo(failures.explain(error), err=True)
        sys.exit(failures.exit_code(error))
    sys.exit(failures.MEASURED)
