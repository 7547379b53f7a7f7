"""A flatbed calibrated from scans of a printed sheet whose check lengths were measured.

Knows the scale of both axes, how square they are, and how the carriage and the optics wander over the bed; and how far
the print itself can be trusted. Does not know what a scan shows (`coded` finds the sheet's corners) or how an
uncalibrated scan is taken (`scan`).
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ...props.errors import FileError, Refusal, UsageError
from ...props.result import Notice
from ...props.uncertainty import Mode
from ..camera_file import rows_on_lines
from ..photo import Photo
from ..plane import rigid_motion
from .coded import find_boards
from .printed import PrintCheck
from .reference import Reference
from .scan import SAME_RESOLUTION, SCALE_STD, SKEW_STD_RAD, WANDER_STD, scan_resolution

Array = NDArray[np.float64]

SCHEMA = "cutface/scanner/1"
# Powers by which places wander along and across the bed beyond scale and skew.
_POWERS = (2, 3, 4)
# What is known before: an office scanner's scale and skew (as `scan` has it), and its wander over half a bed, mm.
_WANDER_MM = 0.15
# A sheet drawn through a printer wanders too; a single scan cannot tell the two apart, scans of the turned sheet can.
PRINT_WANDER_MM = 0.05
# The corners of a sheet should fill this part of the bed's length and width.
_WARN_COVER = 0.6
# A scan of another part of the bed has another size, mm.
_SAME_SIZE_MM = 2.0
_MOST_RESIDUAL_MM = 0.3


@dataclass(frozen=True, eq=False)
class Scanner:
    """A scanner's bed: nominal places to true ones.

    Nominal places are pixels over the stated resolution, mm from the middle of the bed, x right and y up.

    bed_mm : (width, height) as scanned in calibration
    dpi : (x, y) of the calibration
    coefficients : (2 + 1 + 12,) relative scale of x and y, skew (x per y), and for x and for y: wander along y, then
        along x, by _POWERS of the place over half the bed, mm
    covariance : of the coefficients
    print_scale_std : relative, per axis: of the check lengths' measuring
    print_wander_mm : what of the sheet's own lack of straightness is left in the coefficients
    covered : ((x0, y0), (x1, y1)) mm, where corners were seen
    residual_mm : rms per axis of the corners
    places, misses : (k, 2) mm, nominal places of the corners, and the sheet's corners minus the fitted true places
    file, sha256 : the file it was read from, by name and hash
    """

    bed_mm: tuple[float, float]
    dpi: tuple[float, float]
    coefficients: Array
    covariance: Array
    print_scale_std: float
    print_wander_mm: float
    covered: tuple[tuple[float, float], tuple[float, float]]
    residual_mm: float
    places: Array = field(default_factory=lambda: np.empty((0, 2)))
    misses: Array = field(default_factory=lambda: np.empty((0, 2)))
    make: str | None = None
    model: str | None = None
    details: Mapping[str, object] = field(default_factory=dict)
    notices: tuple[Notice, ...] = ()
    file: str | None = None
    sha256: str | None = None

    @property
    def summary(self) -> dict[str, object]:
        """Which calibration this is, for a result that rests on it."""
        return {
            "file": self.file,
            "sha256": self.sha256,
            "make": self.make,
            "model": self.model,
            "residual_mm": self.residual_mm,
            "scans": self.details.get("scans"),
        }

    @cached_property
    def half(self) -> Array:
        """Half of the bed, mm."""
        return 0.5 * np.array(self.bed_mm)

    @property
    def scale(self) -> tuple[float, float]:
        """True over nominal length along x and y."""
        return 1 + float(self.coefficients[0]), 1 + float(self.coefficients[1])

    @property
    def skew_deg(self) -> float:
        """By how much the angle between the axes differs from a right angle."""
        return float(np.rad2deg(self.coefficients[2]))

    @property
    def wander_mm(self) -> float:
        """Largest distance of a true place from where scale and skew alone put it, over the bed, mm."""
        u, v = (g.ravel() for g in np.meshgrid(np.linspace(-1, 1, 21), np.linspace(-1, 1, 21)))
        basis = _basis(np.column_stack([u, v]) * self.half, self.half, self.covered)
        return float(np.linalg.norm(basis[:, :, 3:] @ self.coefficients[3:], axis=1).max())

    def true_places(self, nominal: Array) -> Array:
        """(n, 2) nominal to (n, 2) true places, mm."""
        return nominal + _basis(nominal, self.half, self.covered) @ self.coefficients


def _basis(nominal: Array, half: Array, covered: tuple[tuple[float, float], tuple[float, float]]) -> Array:
    """(n, 2, 15) what the coefficients multiply; beyond what was covered the wander stays as at its border."""
    basis = np.zeros((len(nominal), 2, 3 + 4 * len(_POWERS)))
    basis[:, 0, 0] = nominal[:, 0]
    basis[:, 1, 1] = nominal[:, 1]
    basis[:, 0, 2] = nominal[:, 1]
    inside = np.clip(nominal, *np.array(covered)) / half
    n = len(_POWERS)
    for index, power in enumerate(_POWERS):
        along_y, along_x = inside[:, 1] ** power, inside[:, 0] ** power
        basis[:, 0, 3 + index], basis[:, 0, 3 + n + index] = along_y, along_x
        basis[:, 1, 3 + 2 * n + index], basis[:, 1, 3 + 3 * n + index] = along_y, along_x
    return basis


@dataclass(frozen=True, eq=False)
class ScannerGrid:
    """Pixel <-> mm of a scan by a calibrated scanner; the origin is the middle of the picture, x right, y up.

    pitch : (x, y) nominal mm to a pixel; size : (width, height) px
    """

    scanner: Scanner
    pitch: tuple[float, float]
    size: tuple[int, int]

    def to_mm(self, pixels: Array) -> Array:
        """(n, 2) pixels to (n, 2) mm."""
        return self.scanner.true_places(self.nominal(pixels))

    def nominal(self, pixels: Array) -> Array:
        """(n, 2) pixels to (n, 2) mm by the stated resolution."""
        middle = 0.5 * (np.array(self.size) - 1)
        return (pixels - middle) * (self.pitch[0], -self.pitch[1])

    def to_pixels(self, points: Array) -> Array:
        """(n, 2) mm to (n, 2) pixels."""
        # Corrections are a thousandth of the places: each step gains three digits.
        nominal = points.copy()
        for _ in range(8):
            nominal = nominal + points - self.scanner.true_places(nominal)
        return nominal / (self.pitch[0], -self.pitch[1]) + 0.5 * (np.array(self.size) - 1)

    def mm_per_px(self, pixels: Array) -> Array:
        """(n, 2, 2) Jacobian of `to_mm`."""
        columns = [(self.to_mm(pixels + step) - self.to_mm(pixels - step)) for step in 0.5 * np.eye(2)]
        return np.stack(columns, axis=-1)


@dataclass(frozen=True)
class CalibratedScan:
    """A scan of the whole bed by a calibrated scanner.

    resolution_dpi : (x, y) of the scan where the file does not say it
    """

    scanner: Scanner
    resolution_dpi: tuple[float, float] | None = None

    def locate(self, photo: Photo) -> Reference:
        """The Reference that the scanner gives; raises as `scan.scan_resolution`.

        A scan of another part of the bed keeps scale and skew; the wander, which belongs to places on the bed, is
        left out of it and into the uncertainty.
        """
        x_pitch, y_pitch, notices = scan_resolution(photo, self.resolution_dpi)
        dpi = 25.4 / x_pitch, 25.4 / y_pitch
        scanner, size = self.scanner, np.array([photo.width * x_pitch, photo.height * y_pitch])
        whole = bool(np.all(np.abs(size - scanner.bed_mm) <= _SAME_SIZE_MM))
        found = [*notices, *scanner.notices]
        if any(abs(a - b) > SAME_RESOLUTION * b for a, b in zip(dpi, scanner.dpi, strict=True)):
            found.append(
                Notice(
                    "scanner-resolution",
                    f"The scanner was calibrated at {_text(scanner.dpi)} dpi and this scan has {_text(dpi)}; the bed "
                    "is taken to be the same, which holds where the carriage only takes finer steps.",
                    "Scan at the resolution of the calibration, or calibrate the scanner at this one too.",
                )
            )
        if not whole:
            linear = scanner.coefficients.copy()
            linear[3:] = 0.0
            scanner = replace(scanner, coefficients=linear)
            found.append(
                Notice(
                    "part-of-the-bed",
                    f"This scan of {size[0]:.0f} x {size[1]:.0f} mm is not the whole bed of "
                    f"{scanner.bed_mm[0]:.0f} x {scanner.bed_mm[1]:.0f} mm that was calibrated: only scale and skew "
                    "are corrected.",
                    "Scan the whole bed, as in calibration.",
                )
            )
        grid = ScannerGrid(scanner, (x_pitch, y_pitch), (photo.width, photo.height))
        return Reference(
            kind="scan",
            label=f"{25.4 / x_pitch:.5g} dpi, calibrated scanner",
            face=grid,
            modes=_Modes(grid, whole),
            background="lid",
            details={
                "resolution_dpi": list(dpi),
                "resolution_from": "file" if self.resolution_dpi is None else "stated",
                "scanner": self.scanner.summary,
                "scanner_scale": list(scanner.scale),
                "scanner_skew_deg": scanner.skew_deg,
                "whole_bed": whole,
            },
            notices=tuple(found),
        )


@dataclass(frozen=True, eq=False)
class _Modes:
    """(n, 2) face points in mm -> what the scanner's uncertain causes do to them."""

    grid: ScannerGrid
    whole: bool

    def __call__(self, points: Array) -> tuple[Mode, ...]:
        scanner = self.grid.scanner
        nominal = self.grid.nominal(self.grid.to_pixels(points))
        basis = _basis(nominal, scanner.half, scanner.covered)
        std = np.sqrt(np.diag(scanner.covariance))
        correlation = scanner.covariance / np.outer(std, std)
        factor = std[:, None] * np.linalg.cholesky(correlation + 1e-9 * np.eye(len(std)))
        about = points - points.mean(axis=0)
        found = [Mode("scanner calibration", basis @ column, "normal") for column in factor.T]
        for axis in np.eye(2):
            found.append(Mode("print scale", about * axis * scanner.print_scale_std, "normal"))
            wander = scanner.print_wander_mm / 150.0 if self.whole else WANDER_STD
            found.append(Mode("scanner travel", about * axis * wander, "normal"))
        return tuple(found)


def calibrate_scanner(
    scans: Sequence[Photo],
    check_lengths: tuple[float, float],
    check_length_std: float | None = None,
    resolution_dpi: tuple[float, float] | None = None,
) -> Scanner:
    """A Scanner from scans of the whole bed with a printed sheet on it.

    scans : one or more, the sheet better turned by a quarter or half between them
    check_lengths : what its printed check lengths (across, up) really measure, mm
    resolution_dpi : (x, y) of the scans where the files do not say it
    Raises Refusal where no sheet is seen, its corners miss a flat sheet, or scans differ in size or resolution; as
    `scan.scan_resolution`; UsageError for check lengths that no printer produces.
    """
    if not scans:
        raise UsageError("scanner-scans", "There are no scans.", "Scan the printed sheet, the whole bed.")
    check = PrintCheck(check_lengths) if check_length_std is None else PrintCheck(check_lengths, check_length_std)
    pitch = scan_resolution(scans[0], resolution_dpi)[:2]
    bed = scans[0].width * pitch[0], scans[0].height * pitch[1]
    targets, places = [], []
    for scan in scans:
        own = scan_resolution(scan, resolution_dpi)[:2]
        size = scan.width * own[0], scan.height * own[1]
        if np.abs(np.array(size) - bed).max() > _SAME_SIZE_MM:
            raise Refusal(
                "scanner-size",
                f"{scan.path.name} shows {size[0]:.0f} x {size[1]:.0f} mm, the first scan {bed[0]:.0f} x "
                f"{bed[1]:.0f} mm.",
                "Scan the whole bed each time.",
            )
        target, place = _sheet_corners(scan, own, check)
        targets.append(target)
        places.append(place)
    return _fitted(targets, places, bed, (25.4 / pitch[0], 25.4 / pitch[1]), check, scans[0])


def _sheet_corners(scan: Photo, pitch: tuple[float, float], check: PrintCheck) -> tuple[Array, Array]:
    """(k, 2) true mm on the sheet and (k, 2) nominal mm on the bed of the corners of the one sheet in a scan."""
    from ..measure import grey

    sheets = [s for s in find_boards(grey(scan)) if s.board.window is not None and s.share > 0.5]
    if len(sheets) != 1:
        raise Refusal(
            "scanner-sheet",
            f"{scan.path.name} shows {len(sheets) or 'no'} printed sheets; one is needed.",
            "Lay one printed reference sheet flat on the glass, face down, and scan the whole bed at 300 dpi.",
        )
    nominal = (sheets[0].pixels - 0.5 * (np.array([scan.width, scan.height]) - 1)) * (pitch[0], -pitch[1])
    return sheets[0].target * check.scale, nominal


def _fitted(
    targets: Sequence[Array],
    places: Sequence[Array],
    bed: tuple[float, float],
    dpi: tuple[float, float],
    check: PrintCheck,
    first: Photo,
) -> Scanner:
    """Gauss-Newton of the bed's coefficients and the sheets' places; unseen, the bed is as its maker says."""
    half = 0.5 * np.array(bed)
    everywhere = np.concatenate(places)
    low, high = everywhere.min(axis=0), everywhere.max(axis=0)
    covered = ((float(low[0]), float(low[1])), (float(high[0]), float(high[1])))
    bases = [_basis(place, half, covered) for place in places]
    count = bases[0].shape[2]
    prior = np.concatenate([[SCALE_STD, SCALE_STD, SKEW_STD_RAD], np.full(count - 3, _WANDER_MM)])
    # Scales and skew are to be measured: a scanner ten times worse than usual must come out as it is.
    prior[:3] *= 10.0
    coefficients = np.zeros(count)
    poses = [rigid_motion(t, p) for t, p in zip(targets, places, strict=True)]
    size = count + 3 * len(targets)
    noise, residual, normal = 0.02, np.empty(0), np.eye(size)
    for _ in range(20):
        rows, misses = [], []
        for index, (target, place, basis, (a, b, turn)) in enumerate(zip(targets, places, bases, poses, strict=True)):
            c, s = np.cos(turn), np.sin(turn)
            turned = target @ np.array([[c, s], [-s, c]])
            misses.append((turned + np.array([a, b]) - place - basis @ coefficients).ravel())
            row = np.zeros((len(target), 2, size))
            row[:, :, :count] = basis
            at = count + 3 * index
            row[:, 0, at] = row[:, 1, at + 1] = -1.0
            row[:, :, at + 2] = -np.column_stack([-turned[:, 1], turned[:, 0]])
            rows.append(row.reshape(-1, size))
        design, residual = np.concatenate(rows), np.concatenate(misses)
        weight = 1 / (1 + (residual / (4 * noise)) ** 2)
        normal = (weight[:, None] * design).T @ design / noise**2
        gradient = design.T @ (weight * residual) / noise**2
        normal[range(count), range(count)] += 1 / prior**2
        gradient[:count] -= coefficients / prior**2
        scale = np.sqrt(np.diag(normal))
        step = np.linalg.solve(normal / np.outer(scale, scale), gradient / scale) / scale
        coefficients = coefficients + step[:count]
        poses = [p + step[count + 3 * i : count + 3 * i + 3] for i, p in enumerate(poses)]
        noise = max(1.4826 * float(np.median(np.abs(residual))), 1e-3)
        if np.abs(step * scale).max() < 1e-6:
            break
    rms = float(np.sqrt(np.mean(residual**2)))
    if rms > _MOST_RESIDUAL_MM:
        raise Refusal(
            "scanner-sheet-bent",
            f"The sheet's corners miss a flat sheet by {rms:.2f} mm.",
            "Press the sheet flat on the glass (a book on the lid) and scan again.",
        )
    scale = np.sqrt(np.diag(normal))
    covariance = (np.linalg.inv(normal / np.outer(scale, scale)) / np.outer(scale, scale))[:count, :count]
    turns = np.rad2deg([p[2] for p in poses])
    apart = np.abs((turns[:, None] - turns[None] + 180) % 360 - 180).max() > 60
    cover = float(((high - low) / np.array(bed)).min())
    return Scanner(
        bed_mm=bed,
        dpi=dpi,
        coefficients=coefficients,
        # What neighbouring corners share (paper, print) is not averaged over hundreds of them.
        covariance=0.5 * (covariance + covariance.T) * _alike(residual, targets),
        print_scale_std=check.scale_std,
        print_wander_mm=min(rms, PRINT_WANDER_MM) if apart else PRINT_WANDER_MM,
        covered=covered,
        residual_mm=rms,
        places=everywhere,
        misses=residual.reshape(-1, 2),
        make=first.make,
        model=first.model,
        details={"scans": len(targets), "corners": int(sum(len(t) for t in targets)), "turned": bool(apart)},
        notices=_weaknesses(apart, cover),
    )


def _alike(residual: Array, targets: Sequence[Array]) -> float:
    """How many corners say together what an independent one would, from the likeness of successive ones."""
    ends = np.cumsum([2 * len(t) for t in targets])[:-1]
    parts = [r.reshape(-1, 2) for r in np.split(residual, ends)]
    rho = sum(float(np.sum(p[1:] * p[:-1])) for p in parts) / sum(float(np.sum(p**2)) for p in parts)
    rho = float(np.clip(rho, 0.0, 0.9))
    return ((1 + rho) / (1 - rho)) ** 2


def _weaknesses(turned: bool, cover: float) -> tuple[Notice, ...]:
    notices = []
    if not turned:
        notices.append(
            Notice(
                "scanner-one-way",
                "All scans show the sheet the same way round, so what the printer did to it counts as the scanner's.",
                "Add a scan with the sheet turned by half a turn.",
            )
        )
    if cover < _WARN_COVER:
        notices.append(
            Notice(
                "scanner-coverage",
                f"The sheet covers {100 * cover:.0f} % of the bed; beyond it the scanner's wander is not known.",
                "Use the largest sheet that fits the glass, and lay the face where the sheet was.",
            )
        )
    return tuple(notices)


def write_scanner(scanner: Scanner, path: str | Path) -> Path:
    """Write a scanner's file (JSON, names as in Scanner); raises FileError where it cannot be written."""
    path = Path(path)
    document = {
        "schema": SCHEMA,
        "scanner": {"make": scanner.make, "model": scanner.model, "dpi": scanner.dpi, "bed_mm": scanner.bed_mm},
        "scale": scanner.scale,
        "skew_deg": scanner.skew_deg,
        "coefficients": scanner.coefficients.tolist(),
        "covariance": scanner.covariance.tolist(),
        "print_scale_std": scanner.print_scale_std,
        "print_wander_mm": scanner.print_wander_mm,
        "covered": scanner.covered,
        "residual_mm": scanner.residual_mm,
        "corners": np.hstack([scanner.places, scanner.misses]).round(4).tolist(),
        "details": dict(scanner.details),
        "warnings": [{"code": n.code, "message": n.message, "remedy": n.remedy} for n in scanner.notices],
    }
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(rows_on_lines(json.dumps(document, indent=1, allow_nan=False)), encoding="utf-8")
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise FileError(
            "scanner-file-unwritable", f"{path.name} cannot be written: {reason}.", "Check the folder."
        ) from None
    return path


def read_scanner(path: str | Path) -> Scanner:
    """The scanner in a file; raises FileError with one line where it is not one."""
    path = Path(path)
    again = "Calibrate the scanner again, or use another copy of the file."
    try:
        data = path.read_bytes()
        scanner = _scanner(json.loads(data.decode("utf-8")))
        return replace(scanner, file=path.name, sha256=hashlib.sha256(data).hexdigest())
    except OSError as error:
        raise FileError("scanner-file", f"{path.name} cannot be read: {error.strerror}.", "Check its name.") from None
    except (KeyError, TypeError, ValueError, AttributeError, RecursionError) as error:
        what = str(error)[:80] or type(error).__name__
        raise FileError(
            "scanner-file", f"{path.name} is not a complete scanner's file (schema {SCHEMA}): {what}.", again
        ) from None


def _scanner(document: Mapping[str, Any]) -> Scanner:
    if document["schema"] != SCHEMA:
        raise ValueError(f"schema {document['schema']!r}")
    about = document["scanner"]
    count = 3 + 4 * len(_POWERS)
    coefficients, covariance = (np.array(document[name], float) for name in ("coefficients", "covariance"))
    if coefficients.shape != (count,) or covariance.shape != (count, count):
        raise ValueError("coefficients")
    (x0, y0), (x1, y1) = document["covered"]
    width, height = about["bed_mm"]
    x_dpi, y_dpi = about["dpi"]
    corners = np.array(document.get("corners", []), float).reshape(-1, 4)
    finite = np.all(np.isfinite(coefficients)) and np.all(np.isfinite(covariance))
    if not (finite and np.diag(covariance).min() > 0 and min(width, height, x_dpi, y_dpi) > 0):
        raise ValueError("values out of range")
    return Scanner(
        bed_mm=(float(width), float(height)),
        dpi=(float(x_dpi), float(y_dpi)),
        coefficients=coefficients,
        covariance=covariance,
        print_scale_std=float(document["print_scale_std"]),
        print_wander_mm=float(document["print_wander_mm"]),
        covered=((float(x0), float(y0)), (float(x1), float(y1))),
        residual_mm=float(document["residual_mm"]),
        places=corners[:, :2],
        misses=corners[:, 2:],
        make=about.get("make"),
        model=about.get("model"),
        details=dict(document.get("details", {})),
        notices=tuple(Notice(n["code"], n["message"], n["remedy"]) for n in document.get("warnings", [])),
    )


def other_scanner(scanner: Scanner, photo: Photo) -> str | None:
    """Why a scan was not made by this scanner as it was calibrated, in words; None where nothing speaks against it.

    A scan that does not say what made it speaks for no scanner and against none.
    """
    own, theirs = (scanner.make, scanner.model), (photo.make, photo.model)
    if scanner.model is not None and photo.model is not None and own != theirs:
        return f"it is of {' '.join(filter(None, own))} and the scan by {' '.join(filter(None, theirs))}"
    return None


def find_scanner(photo: Photo, folder: str | Path) -> Scanner | None:
    """The scanner in a folder of calibrations that made a scan: same make and model.

    Of several the one at the scan's resolution, then the one of the most scans; None where no file serves or the scan
    does not name its scanner. Files that cannot be read are passed over.
    """
    if photo.model is None:
        return None
    matching = []
    for path in sorted(Path(folder).glob("*.json")):
        try:
            scanner = read_scanner(path)
        except FileError:
            continue
        if (scanner.make, scanner.model) == (photo.make, photo.model):
            matching.append(scanner)

    def fitness(scanner: Scanner) -> tuple[float, float]:
        apart = abs(scanner.dpi[0] - (photo.resolution_dpi or scanner.dpi)[0])
        return -apart, float(str(scanner.details.get("scans", 0)))

    return max(matching, key=fitness, default=None)


def _text(dpi: tuple[float, float]) -> str:
    x, y = (f"{value:.5g}" for value in dpi)
    return x if x == y else f"{x} x {y}"
