"""Calibrate a camera from several photos of one flat board.

Knows bundle adjustment of a camera, the board's poses, and the board's own imperfections: a print stretched along one
axis, a board bowed in the same way in every photo. Refuses photos that cannot carry a calibration, in plain words.
Does not know how a board's corners are found (`calibration_boards`).
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from ..props.errors import Refusal
from ..props.result import Notice
from .calibration_boards import BoardSighting, CalibrationBoard
from .camera import FIVE, RATIONAL, Camera, CornerResiduals, lens_turns_back
from .photo import RAW, Photo
from .plane import Correspondences
from .posed_plane import first_pose, fit_posed_plane, project_points, small_turn
from .tone_evidence import PrintInPhoto, joint_tone_evidence

Array = NDArray[np.float64]

# Three photos determine a camera; a fourth tests it (common practice: ten and more).
LEAST_PHOTOS, USUAL_PHOTOS = 4, 8
# Focal length known worse than this is no better than what the file's own data tell (3 %), or than one tilted photo.
WARN_FOCAL_STD, REFUSE_FOCAL_STD = 0.005, 0.03
LEAST_TILT_DEG = 10.0
# Corners should reach this part of the way from the middle to the corners of the frame.
WARN_REACH, REFUSE_REACH = 0.7, 0.45
# Distances that a right lens model leaves are corner noise, 0.05 to 0.3 px.
WARN_RESIDUAL_PX, REFUSE_RESIDUAL_PX = 0.6, 2.0
# What is known before: pixels are square as made, lenses are centred by assembly; relative, and over the half
# diagonal (common practice).
PIXEL_ASPECT_STD, PRINCIPAL_POINT_STD, DECENTRING_STD = 0.001, 0.05, 0.005
# What each power of the radius does at the corner of the frame, relative: the strongest barrel of an action camera
# has a half, and higher powers do less (stated assumption). In the rational model numerator and denominator
# undo each other, so each may be larger.
FIVE_STD, RATIONAL_STD = (0.5, 0.2, 0.05), (1.0, 0.5, 0.2)
# A board nobody checked: scale per axis, and bow over half its diagonal (stated assumptions).
PRINT_SCALE_STD, BOW_STD = 0.003, 0.01
# Richer models are taken when chance would explain their gain less than once in a thousand.
F_TEST_LEVEL = 0.001
# A curve this likely is taken as the camera's own.
TONE_PROBABILITY = 0.8
_MOST_TONE_PHOTOS = 12
_BOW_TERMS = tuple((i, degree - i) for degree in (2, 3, 4) for i in range(degree + 1))


@dataclass(frozen=True)
class _View:
    """One board in one photo, in the sensor's frame. target : (k, 2) mm about the board's middle."""

    photo: str
    target: Array
    pixels: Array


@dataclass(frozen=True)
class _Taken:
    """What one photo shows of the board and what its file says; not its pixels, so that many photos fit the memory.

    number : its place among the photos
    size : (width, height) as stored, px
    sightings : in the frame of the upright photo
    """

    number: int
    path: Path
    size: tuple[int, int]
    orientation: int
    make: str | None
    model: str | None
    focal_length_mm: float | None
    focal_length_35mm: float | None
    digital_zoom: float | None
    raw: bool
    sightings: tuple[BoardSighting, ...]

    @property
    def views(self) -> list[_View]:
        """The sightings in the sensor's frame."""
        return [_View(self.path.name, s.target, self._to_stored(s.pixels)) for s in self.sightings]

    def _to_stored(self, pixels: Array) -> Array:
        """(k, 2) pixels of the upright picture to those of the picture as stored."""
        x, y = pixels.T
        width, height = self.size if self.orientation < 5 else self.size[::-1]
        if self.orientation in (2, 3, 6, 7):
            x = width - 1 - x
        if self.orientation in (3, 4, 7, 8):
            y = height - 1 - y
        return np.column_stack([y, x] if self.orientation >= 5 else [x, y])


@dataclass(frozen=True)
class _Fit:
    """A fitted state: camera, stretch and bow of the board, poses; and what the corners say about it."""

    parameters: Array
    stretch: float
    bow: Array
    poses: tuple[tuple[Array, Array], ...]
    misses: tuple[Array, ...]
    covariance: Array

    @property
    def rms(self) -> float:
        """Root mean square distance of the corners, px."""
        return float(np.sqrt(np.mean(np.concatenate([np.sum(m**2, axis=1) for m in self.misses]))))


def calibrate(photos: Sequence[Photo], board: CalibrationBoard) -> Camera:
    """The camera that took several photos of a board held at various angles.

    photos : of one camera at one focal length and picture size; each is taken up twice at most and not kept, so the
        sequence may load them as they are asked for
    board : what to look for in them: a chessboard, a printed sheet or cards, a ChArUco board
    Returns a Camera in the frame in which its pictures are stored; its `notices` say what is weak.
    Raises Refusal where the photos are too few, all frontal, leave most of the frame uncovered, differ in focal
    length, or where no lens model here fits them.
    """
    taken, notices = _of_one_camera(_look(photos, board))
    notices += _without(taken, board)
    views = [view for one in taken for view in one.views]
    if not views:
        raise Refusal(
            "calibration-board",
            f"{board.label.capitalize()} is not wholly seen in any of {len(taken)} photos.",
            "Check that it is the board in the photos (of a chessboard count the inner corners, where four squares "
            "meet), whole in the frame, in focus and free of glare.",
        )
    if len({v.photo for v in views}) < LEAST_PHOTOS:
        raise Refusal(
            "calibration-photos",
            f"The whole board is seen in {len({v.photo for v in views})} of {len(taken)} photos; {LEAST_PHOTOS} are "
            "the least.",
            f"Take about {USUAL_PHOTOS} to 15 photos with the whole board in the frame, tilted to all sides, near the "
            "edges of the frame too.",
        )
    width, height = taken[0].size
    fit, model = _best_fit(views, (width, height), single=len({len(v.target) for v in views}) == 1)
    if fit.rms > REFUSE_RESIDUAL_PX:
        raise Refusal(
            "lens-model",
            f"The corners miss the best lens model by {fit.rms:.1f} px: no pinhole lens with these distortion terms "
            "took the photos, or the board is not flat, or its corners were counted wrongly.",
            "Check the stated corner counts, tape the board to glass or a flat board; use another lens than a fisheye.",
        )
    centre = fit.parameters[2:4]
    ends = np.array([[0, 0], [width - 1, 0], [0, height - 1], [width - 1, height - 1]], float)
    half_diagonal = float(np.linalg.norm(ends - ends.mean(axis=0), axis=1).max())
    reach = float(max(np.linalg.norm(v.pixels - centre, axis=1).max() for v in views))
    tilts = np.rad2deg([np.arccos(min(1.0, abs(r[2, 2]))) for r, _ in fit.poses])
    mean = np.zeros(len(fit.parameters))
    mean[:2] = 0.5
    focal = float(np.sqrt(fit.parameters[0] * fit.parameters[1]))
    focal_std = float(np.sqrt(mean @ fit.covariance @ mean)) / focal
    _refuse_weak(tilts, focal_std, reach / half_diagonal)
    notices += _weaknesses(fit, focal_std, reach / half_diagonal, len({v.photo for v in views}))
    if lens_turns_back(fit.parameters, width, height):
        notices.append(
            Notice(
                "lens-turns-back",
                "The lens terms fitted here do not hold up to the corners of the frame.",
                "Take photos with the board in the corners of the frame, and keep the face away from them.",
            )
        )
    residuals = tuple(CornerResiduals(v.photo, v.pixels, m) for v, m in zip(views, fit.misses, strict=True))
    first = taken[0]
    camera = Camera(
        width=width,
        height=height,
        parameters=fit.parameters,
        covariance=fit.covariance,
        residual_px=fit.rms,
        reach_px=reach,
        make=first.make,
        model=first.model,
        focal_length_mm=first.focal_length_mm,
        focal_length_35mm=first.focal_length_35mm,
        digital_zoom=first.digital_zoom,
        raw=first.raw,
        residuals=residuals,
        details={
            "board": board.label,
            "lens_model": model,
            "photos": len({v.photo for v in views}),
            "corners": int(sum(len(v.target) for v in views)),
            "distance_mm": round(float(np.median([t[2] for _, t in fit.poses])), 1),
            "largest_tilt_deg": round(float(tilts.max()), 1),
            "board_stretch": round(float(fit.stretch), 6),
            "board_bow_mm": round(_bow_height(fit.bow, views), 4),
        },
        notices=tuple(notices),
    )
    return _with_tone(camera, photos, taken)


def _look(photos: Sequence[Photo], board: CalibrationBoard) -> tuple[list[_Taken], list[Notice]]:
    """What every photo shows; a photo given twice says nothing new and is left out."""
    taken, hashes, again = [], set(), []
    for number, photo in enumerate(photos):
        if photo.sha256 and photo.sha256 in hashes:
            again.append(photo.path.name)
            continue
        hashes.add(photo.sha256)
        taken.append(
            _Taken(
                number=number,
                path=photo.path,
                size=(photo.width, photo.height) if photo.orientation < 5 else (photo.height, photo.width),
                orientation=photo.orientation,
                make=photo.make,
                model=photo.model,
                focal_length_mm=photo.focal_length_mm,
                focal_length_35mm=photo.focal_length_35mm,
                digital_zoom=photo.digital_zoom,
                raw=photo.file_format == RAW,
                sightings=tuple(board.sightings(photo)),
            )
        )
    if not again:
        return taken, []
    notice = Notice(
        "photo-repeated",
        f"Left out, because they are copies of others: {', '.join(again)}.",
        "Give each photo once.",
    )
    return taken, [notice]


def _with_tone(camera: Camera, photos: Sequence[Photo], taken: Sequence[_Taken]) -> Camera:
    """The camera with the tone curve that the board's black and white edges show in all photos together."""
    asked = [(one, s, s.edges) for one in taken for s in one.sightings if s.edges is not None][:_MOST_TONE_PHOTOS]

    def prints() -> Iterator[PrintInPhoto]:
        for one, sighting, edges in asked:
            corners = Correspondences(sighting.target, sighting.pixels)
            plane = fit_posed_plane([corners], camera.upright(one.orientation))
            photo = photos[one.number]
            yield PrintInPhoto(photo, plane, edges(photo, plane))

    evidence = joint_tone_evidence(prints()) if asked else None
    if evidence is None:
        return camera
    likely = {str(tone): round(p, 4) for tone, p in zip(evidence.tones, evidence.probabilities, strict=True)}
    sure = max(evidence.probabilities) >= TONE_PROBABILITY
    return replace(
        camera,
        tone=evidence.best if sure else None,
        details={**camera.details, "tone_probabilities": likely},
    )


def _of_one_camera(seen: tuple[list[_Taken], list[Notice]]) -> tuple[list[_Taken], list[Notice]]:
    """The photos of the commonest picture size, and a word about the others; Refusal for several cameras or zooms."""
    taken, notices = seen
    if not taken:
        raise Refusal("calibration-photos", "There are no photos.", "Give about ten photos of the board.")
    sizes = [one.size for one in taken]
    usual = max(dict.fromkeys(sizes), key=sizes.count)
    kept = [one for one in taken if one.size == usual]
    if len(kept) < len(taken):
        others = ", ".join(one.path.name for one in taken if one.size != usual)
        notices.append(
            Notice(
                "picture-size-differs",
                f"Left out, because their size is not {usual[0]} x {usual[1]} px like most: {others}.",
                "Use the camera's original files, all at one setting; a cropped picture has another lens centre.",
            )
        )
    for what, values in (
        ("cameras", {(p.make, p.model) for p in kept if p.model is not None}),
        ("focal lengths", {p.focal_length_mm for p in kept if p.focal_length_mm is not None}),
        ("zoom settings", {p.digital_zoom for p in kept if p.digital_zoom is not None}),
        ("kinds of file", {"raw" if p.raw else "developed" for p in kept}),
    ):
        if len(values) > 1:
            raise Refusal(
                "several-cameras",
                f"The files name several {what}: {', '.join(sorted(str(v) for v in values))}.",
                "Calibrate each camera and each zoom setting from its own photos.",
            )
    return kept, notices


def _without(taken: Sequence[_Taken], board: CalibrationBoard) -> list[Notice]:
    """A notice naming the photos in which the board is not seen."""
    without = [one.path.name for one in taken if not one.sightings]
    if not without:
        return []
    return [
        Notice(
            "board-incomplete",
            f"Left out, because {board.label} is not wholly seen in them: {', '.join(without)}.",
            "Keep every corner of the board in the frame, in focus and free of glare.",
        )
    ]


def _refuse_weak(tilts: Array, focal_std: float, reach: float) -> None:
    if tilts.max() < LEAST_TILT_DEG:
        raise Refusal(
            "calibration-frontal",
            f"The board is seen square on in all photos (tilted by {tilts.max():.0f} degrees at most), which leaves "
            "the focal length open.",
            "Tilt the board by 20 to 45 degrees to the left, right, top and bottom in turn.",
        )
    if focal_std > REFUSE_FOCAL_STD:
        raise Refusal(
            "calibration-weak",
            f"The photos tell the focal length to {100 * focal_std:.1f} % only.",
            "Take more photos, nearer, with the board tilted by 20 to 45 degrees to all four sides.",
        )
    if reach < REFUSE_REACH:
        raise Refusal(
            "calibration-coverage",
            f"The board's corners reach {100 * reach:.0f} % of the way from the middle to the corners of the frame; "
            "nothing is known of the lens beyond.",
            "Take photos with the board in each corner of the frame, or nearer so that it fills the frame.",
        )


def _weaknesses(fit: _Fit, focal_std: float, reach: float, photos: int) -> list[Notice]:
    notices = []
    if fit.rms > WARN_RESIDUAL_PX:
        notices.append(
            Notice(
                "lens-model",
                f"The corners miss the lens model by {fit.rms:.2f} px (usual: below 0.3 px); places measured with it "
                "are off by as much.",
                "Tape the board to something flat; if it was, this lens needs a model that is not offered here.",
            )
        )
    if reach < WARN_REACH:
        notices.append(
            Notice(
                "calibration-coverage",
                f"The corners reach {100 * reach:.0f} % of the way to the corners of the frame; the lens is "
                "extrapolated beyond.",
                "Add photos with the board in the corners of the frame, and keep the face away from them.",
            )
        )
    if photos < USUAL_PHOTOS or focal_std > WARN_FOCAL_STD:
        notices.append(
            Notice(
                "calibration-few",
                f"{photos} photos tell the focal length to {100 * focal_std:.2f} %.",
                f"About {USUAL_PHOTOS} to 15 photos, tilted to all sides, make it better.",
            )
        )
    return notices


def _best_fit(views: Sequence[_View], frame: tuple[int, int], *, single: bool) -> tuple[_Fit, str]:
    """The simplest of the models that the corners do not refute, and its name.

    single : one board throughout, whose bow can be fitted
    """
    views = [replace(v, target=v.target - _middle(views, v, single)) for v in views]
    bow = len(_BOW_TERMS) if single and len(views) >= LEAST_PHOTOS else 0
    plain = _fit(views, frame, FIVE, 0)
    chosen, name = plain, "five coefficients"
    if bow:
        bowed = _fit(views, frame, FIVE, bow)
        if _is_better(plain, bowed, bow):
            chosen = bowed
    terms = len(chosen.bow)
    rational = _fit(views, frame, RATIONAL, terms, start=chosen)
    sound = lens_turns_back(chosen.parameters, *frame) or not lens_turns_back(rational.parameters, *frame)
    if sound and _is_better(chosen, rational, RATIONAL - FIVE):
        chosen, name = rational, "rational"
        # A bow that five coefficients hide may show under the right lens.
        if bow and not terms:
            bowed = _fit(views, frame, RATIONAL, bow, start=rational)
            if _is_better(rational, bowed, bow):
                chosen = bowed
    return chosen, name


def _middle(views: Sequence[_View], view: _View, single: bool) -> Array:
    return views[0].target.mean(axis=0) if single else view.target.mean(axis=0)


def _is_better(simple: _Fit, rich: _Fit, terms: int) -> bool:
    """F-test of a richer model, on as many residuals as are independent of their neighbours."""
    from scipy.stats import f as f_distribution

    before, after = (sum(float(np.sum(m**2)) for m in fit.misses) for fit in (simple, rich))
    inflation = _correlation_inflation(rich.misses)
    unknowns = len(rich.parameters) + 1 + len(rich.bow) + 6 * len(rich.poses)
    degrees = (2 * sum(len(m) for m in rich.misses) - unknowns) / inflation
    if degrees < 4 or after >= before:
        return False
    ratio = (before - after) / terms / (after / degrees)
    return bool(f_distribution.sf(ratio, terms, degrees) < F_TEST_LEVEL)


def _correlation_inflation(misses: Sequence[Array]) -> float:
    """How many residuals say together what one independent one would, from the likeness of successive corners.

    Residuals whose correlation falls by a factor rho from one corner to the next, along both axes of a board,
    average as if they were fewer by ((1 + rho) / (1 - rho))^2.
    """
    products = np.concatenate([np.sum(m[1:] * m[:-1], axis=1) for m in misses])
    squares = np.concatenate([np.sum(m**2, axis=1) for m in misses])
    rho = float(np.clip(products.mean() / squares.mean(), 0.0, 0.8))
    return ((1 + rho) / (1 - rho)) ** 2


def _bow_basis(target: Array, half: float) -> Array:
    u, v = (target / half).T
    return np.stack([u**i * v**j for i, j in _BOW_TERMS], axis=1)


def _half_diagonal(views: Sequence[_View]) -> float:
    return float(np.linalg.norm(views[0].target, axis=1).max())


def _bow_height(bow: Array, views: Sequence[_View]) -> float:
    """Range of the fitted bow over the board, mm."""
    if not len(bow):
        return 0.0
    target = views[0].target - views[0].target.mean(axis=0)
    return float(np.ptp(_bow_basis(target, float(np.linalg.norm(target, axis=1).max())) @ bow))


def _fit(views: Sequence[_View], frame: tuple[int, int], own: int, bow_terms: int, start: _Fit | None = None) -> _Fit:
    """Bundle adjustment by Gauss-Newton with Levenberg's damping.

    own : number of camera parameters; bow_terms : terms of the board's bow, 0 for none
    start : a simpler fit to go on from
    """
    half = _half_diagonal(views)
    common = own + 1 + bow_terms
    state = _start(views, frame, own, bow_terms, start)
    guess, prior_std = _prior(frame, float(state[0][0]), own, bow_terms, half)
    guess[0:2] = 0.0
    information = np.diag(np.where(np.isfinite(prior_std), 1 / prior_std**2, 0.0))
    noise = 0.3
    damping = 1e-4
    system = _normal(state, views, noise, half, own)
    for iteration in range(200):
        normal, gradient, cost = _with_prior(*system[:3], state, guess, information, common)
        scale = np.sqrt(np.diag(normal))
        step = np.linalg.solve(normal / np.outer(scale, scale) + damping * np.eye(len(scale)), gradient / scale) / scale
        trial = _moved(state, step, own, bow_terms)
        trial_system = _normal(trial, views, noise, half, own)
        trial_cost = _with_prior(*trial_system[:3], trial, guess, information, common)[2]
        if np.isfinite(trial_cost) and trial_cost <= cost * (1 + 1e-12):
            state, system = trial, trial_system
            damping = max(damping / 10, 1e-12)
            small = np.abs(step * scale).max() < 1e-4
            # The a posteriori noise weighs the corners against what is known before, once the geometry is near.
            if iteration > 4:
                squares = float(sum(np.sum(m**2) for m in system[3]))
                degrees = max(1, 2 * sum(len(m) for m in system[3]) - common - 6 * len(views))
                new = max(float(np.sqrt(squares / degrees)), 1e-3)
                settled = abs(new - noise) < 1e-3 * noise
                noise = new
                system = _normal(state, views, noise, half, own)
                if small and settled:
                    break
        else:
            damping *= 10
            if damping > 1e10:
                break
    normal, _, _ = _with_prior(*system[:3], state, guess, information, common)
    scale = np.sqrt(np.diag(normal))
    covariance = np.linalg.inv(normal / np.outer(scale, scale)) / np.outer(scale, scale)
    covariance = 0.5 * (covariance + covariance.T)
    misses = tuple(system[3])
    return _Fit(state[0], state[1], state[2], state[3], misses, covariance[:own, :own] * _correlation_inflation(misses))


_State = tuple[Array, float, Array, tuple[tuple[Array, Array], ...]]


def _prior(frame: tuple[int, int], focal: float, own: int, bow_terms: int, half: float) -> tuple[Array, Array]:
    """(values, standard deviations) of camera, stretch and bow before the photos; infinite where nothing is known."""
    width, height = frame
    diagonal = float(np.hypot(width, height) / 2)
    value = np.zeros(own + 1 + bow_terms)
    value[2:4] = (width - 1) / 2, (height - 1) / 2
    std = np.full(len(value), np.inf)
    powers = (diagonal / focal) ** np.array([2, 4, 6])
    std[[4, 5, 8]] = np.array(FIVE_STD if own == FIVE else RATIONAL_STD) / powers
    if own == RATIONAL:
        std[9:12] = np.array(RATIONAL_STD) / powers
    std[2:4] = PRINCIPAL_POINT_STD * diagonal
    std[6:8] = DECENTRING_STD
    std[own] = PRINT_SCALE_STD / np.sqrt(2)
    std[own + 1 :] = BOW_STD * half
    return value, std


def _start(views: Sequence[_View], frame: tuple[int, int], own: int, bow_terms: int, start: _Fit | None) -> _State:
    if start is not None:
        parameters = np.zeros(own)
        parameters[: len(start.parameters)] = start.parameters
        bow = np.zeros(bow_terms)
        bow[: len(start.bow)] = start.bow
        return parameters, start.stretch, bow, start.poses
    import cv2

    solid = [np.c_[v.target, np.zeros(len(v.target))].astype(np.float32) for v in views]
    matrix = cv2.initCameraMatrix2D(solid, [v.pixels.astype(np.float32) for v in views], frame, 1.0)
    parameters = np.zeros(own)
    focal = float(matrix[0, 0])
    # No lens sees less than 3 or more than 150 degrees across.
    if not 0.15 * max(frame) < focal < 20 * max(frame):
        focal = float(max(frame))
    parameters[:4] = focal, focal, (frame[0] - 1) / 2, (frame[1] - 1) / 2
    return parameters, 0.0, np.zeros(bow_terms), tuple(first_pose(parameters, v.target, v.pixels) for v in views)


def _moved(state: _State, step: Array, own: int, bow_terms: int) -> _State:
    parameters, stretch, bow, poses = state
    common = own + 1 + bow_terms
    moved = []
    for index, (rotation, translation) in enumerate(poses):
        change = step[common + 6 * index : common + 6 * index + 6]
        moved.append((small_turn(change[:3]) @ rotation, translation + change[3:]))
    return parameters + step[:own], stretch + float(step[own]), bow + step[own + 1 : common], tuple(moved)


def _normal(
    state: _State, views: Sequence[_View], noise: float, half: float, own: int
) -> tuple[Array, Array, float, list[Array]]:
    """Normal matrix, gradient and cost of the corners, and the (k, 2) misses of every view."""
    parameters, stretch, bow, poses = state
    common = own + 1 + len(bow)
    size = common + 6 * len(views)
    normal, gradient, cost = np.zeros((size, size)), np.zeros(size), 0.0
    misses = []
    for index, (view, (rotation, translation)) in enumerate(zip(views, poses, strict=True)):
        basis = _bow_basis(view.target, half)[:, : len(bow)]
        solid = np.c_[view.target * (1 + stretch, 1 - stretch), basis @ bow]
        pixels, by_camera, by_pose, by_point = project_points(parameters, rotation, translation, solid)
        jacobian = np.zeros((len(solid), 2, common + 6))
        jacobian[:, :, :own] = by_camera
        jacobian[:, :, own] = np.einsum("nij,nj->ni", by_point[:, :, :2], view.target * (1.0, -1.0))
        jacobian[:, :, own + 1 : common] = by_point[:, :, 2:] * basis[:, None, :]
        jacobian[:, :, common:] = by_pose
        miss = view.pixels - pixels
        jacobian = jacobian.reshape(-1, common + 6) / noise
        residual = miss.ravel() / noise
        columns = np.r_[np.arange(common), common + 6 * index + np.arange(6)]
        normal[np.ix_(columns, columns)] += jacobian.T @ jacobian
        gradient[columns] += jacobian.T @ residual
        cost += float(residual @ residual)
        misses.append(miss)
    return normal, gradient, cost, misses


def _with_prior(
    normal: Array, gradient: Array, cost: float, state: _State, guess: Array, information: Array, common: int
) -> tuple[Array, Array, float]:
    """The corners' system with what is known before; pixels are square to PIXEL_ASPECT_STD."""
    parameters, stretch, bow, _ = state
    value = np.concatenate([parameters, [stretch], bow])
    off = guess - value
    normal, gradient = normal.copy(), gradient.copy()
    normal[:common, :common] += information
    gradient[:common] += information @ off
    cost += float(off @ information @ off)
    fx, fy = parameters[:2]
    aspect = np.array([1.0, -1.0]) / np.sqrt(fx * fy) / PIXEL_ASPECT_STD
    miss = -(fx - fy) / np.sqrt(fx * fy) / PIXEL_ASPECT_STD
    normal[:2, :2] += np.outer(aspect, aspect)
    gradient[:2] += aspect * miss
    return normal, gradient, cost + miss**2
