"""Calibrations from the command line: open the pictures, calibrate, and put file and plots into one folder.

Knows the order of things and what a person can state of a board; not how a calibration is done.
"""

from __future__ import annotations

import dataclasses
import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Generic, TypeVar, overload

from ..props.errors import UsageError
from ..vision.photo import RAW, Photo, load_photo
from .calibration_folder import calibration_folder, camera_stem, scanner_stem
from .output_folder import ensure_free, output_folder
from .progress import working

if TYPE_CHECKING:
    from ..vision.calibration_boards import CalibrationBoard
    from ..vision.calibration_plot import Misses
    from ..vision.camera import Camera
    from ..vision.references.scanner import Scanner

# Only the proportions of a chessboard matter to a camera; this stands in where its squares are not stated.
_USUAL_SQUARE_MM = 25.0
_USUAL_DICTIONARY = "DICT_5X5_100"


Device = TypeVar("Device")


@dataclass(frozen=True)
class Calibrated(Generic[Device]):
    """A calibration, and where its files are.

    main : the file to state when measuring; files : names of all
    by_itself : whether later pictures find it without being told
    """

    device: Device
    folder: Path
    main: str
    files: tuple[str, ...]
    by_itself: bool


class PhotoFiles(Sequence[Photo]):
    """Photos that are opened when they are asked for, so that many large ones need little memory."""

    def __init__(self, paths: Sequence[Path], say: Callable[[str], None]) -> None:
        self._paths, self._say = paths, say

    def __len__(self) -> int:
        return len(self._paths)

    @overload
    def __getitem__(self, index: int) -> Photo: ...
    @overload
    def __getitem__(self, index: slice) -> Sequence[Photo]: ...
    def __getitem__(self, index: int | slice) -> Photo | Sequence[Photo]:
        if isinstance(index, slice):
            return PhotoFiles(self._paths[index], self._say)
        path = self._paths[index]
        self._say(f"Looking at {path.name}, {index + 1} of {len(self._paths)}")
        return load_photo(path)


def board_of(
    chessboard: tuple[int, int] | None,
    charuco: tuple[int, int] | None,
    pitch: tuple[float, float] | None,
    marker: float | None,
    dictionary: str | None,
    pattern: str | None = None,
) -> CalibrationBoard:
    """The board that a person states; nothing stated means our own printed sheets and cards.

    chessboard : inner corners across and up; charuco : squares across and up
    pitch : sides of a square across and up, mm; marker : side of a marker, mm
    pattern : any print that --reference takes, as it takes it
    Raises UsageError for statements that do not go together.
    """
    if sum(stated is not None for stated in (chessboard, charuco, pattern)) > 1:
        raise UsageError(
            "two-boards", "--chessboard, --charuco and --pattern each name a board.", "State the one in the photos."
        )
    alone = {"--pitch": pitch, "--marker": marker, "--dictionary": dictionary}
    wanted = {"--pitch"} if chessboard is not None else set(alone) if charuco is not None else set()
    for name, value in alone.items():
        if value is not None and name not in wanted:
            raise UsageError(
                "option-alone",
                f"{name} says nothing of this board.",
                "State --charuco with --pitch, --marker and --dictionary, or --chessboard with --pitch.",
            )
    if pattern is not None:
        from ..vision.references.kinds import stated_references
        from ..vision.references.pattern import Pattern
        from ..vision.references.stated import Given

        (kind,) = stated_references([pattern], Given())
        if not isinstance(kind, Pattern):
            raise UsageError(
                "board-kind",
                f"{pattern.split()[0]!r} is no board to calibrate with.",
                'Write for instance --pattern "square-grid columns=3 rows=4 pitch=60 side=30".',
            )
        return kind
    if chessboard is not None:
        from ..vision.references.chessboard import Chessboard

        columns, rows = chessboard
        return Chessboard(columns=columns, rows=rows, square_mm=pitch or _USUAL_SQUARE_MM)
    if charuco is not None:
        from ..vision.calibration_boards import CharucoBoard

        if pitch is None or marker is None:
            raise UsageError(
                "charuco-size",
                "A ChArUco board needs the sides of its squares and of its markers.",
                "State --pitch and --marker, mm.",
            )
        if pitch[0] != pitch[1]:
            raise UsageError(
                "charuco-size", "The squares of a ChArUco board are square.", "State one side with --pitch."
            )
        return CharucoBoard(*charuco, pitch[0], marker, dictionary or _USUAL_DICTIONARY)
    from ..vision.calibration_boards import PrintedBoards

    return PrintedBoards()


def calibrate_camera(
    paths: Sequence[Path],
    board: CalibrationBoard,
    into: Path | None = None,
    *,
    replace: bool = False,
    true_size: bool = True,
) -> Calibrated[Camera]:
    """Calibrate the camera that took photos of a board, and write its file and its plots.

    true_size : whether the board's size is stated and not only its proportions; only then distances are known
    into : folder for the files; None keeps them where later photos look
    Raises UsageError if files of this camera are there and `replace` is False; Refusal as `calibration.calibrate`;
    FileError where a photo cannot be read or a file not be written.
    """
    from ..vision.calibration import calibrate
    from ..vision.calibration_plot import camera_misses
    from ..vision.camera_file import write_camera

    folder = calibration_folder() if into is None else into
    with working("Opening photos") as say:
        photos = PhotoFiles(paths, say)
        # Told before any long work, from what the first photo says.
        first = photos[0]
        width, height = (first.width, first.height) if first.orientation < 5 else (first.height, first.width)
        stem = camera_stem(
            first.make,
            first.model,
            first.focal_length_mm,
            (width, height),
            first.digital_zoom,
            first.file_format == RAW,
        )
        ensure_free(folder, _files_of(stem), replace=replace)
        del first
        camera = calibrate(photos, board)
        if not true_size:
            known = {name: value for name, value in camera.details.items() if not name.endswith("_mm")}
            camera = dataclasses.replace(camera, details=known)
        size = camera.width, camera.height
        stem = camera_stem(camera.make, camera.model, camera.focal_length_mm, size, camera.digital_zoom, camera.raw)
        files = _written(folder, stem, partial(write_camera, camera), camera_misses(camera), replace=replace)
    return Calibrated(camera, folder, f"{stem}.json", files, into is None and camera.model is not None)


def calibrate_scanner(
    paths: Sequence[Path],
    check: tuple[float, float],
    check_std: float | None = None,
    resolution: tuple[float, float] | None = None,
    into: Path | None = None,
    *,
    replace: bool = False,
) -> Calibrated[Scanner]:
    """Calibrate a scanner from scans of the measured sheet, and write its file and its plots.

    check : what the sheet's check lengths across and up really measure, mm; check_std : their standard uncertainty
    resolution : (x, y) dots per inch where the scans do not say it
    into, replace and errors as `calibrate_camera`.
    """
    from ..vision.calibration_plot import scanner_misses
    from ..vision.references.scanner import calibrate_scanner as calibrated
    from ..vision.references.scanner import write_scanner

    folder = calibration_folder() if into is None else into
    with working("Opening scans") as say:
        scanner = calibrated(PhotoFiles(paths, say), check, check_std, resolution)
        stem = scanner_stem(scanner.make, scanner.model, scanner.bed_mm)
        files = _written(folder, stem, partial(write_scanner, scanner), scanner_misses(scanner), replace=replace)
    return Calibrated(scanner, folder, f"{stem}.json", files, into is None and scanner.model is not None)


def _written(
    folder: Path, stem: str, write: Callable[[Path], object], misses: Misses, *, replace: bool
) -> tuple[str, ...]:
    """The names of a calibration's file and plots, once all are in the folder."""
    from ..vision.calibration_plot import write_residual_plot

    with output_folder(folder, _files_of(stem), replace=replace) as draft:
        write(draft / f"{stem}.json")
        for ending in (".svg", ".png"):
            write_residual_plot(misses, draft / f"{stem}{ending}")
        return tuple(sorted(file.name for file in draft.iterdir()))


def _files_of(stem: str) -> re.Pattern[str]:
    return re.compile(rf"{re.escape(stem)}\.(json|svg|png)")
