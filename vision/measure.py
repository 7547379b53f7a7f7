"""From a photo to measured sections: reference, face, outline, properties, one straight line.

Every step is a function of its own in the modules beside this one; here is only their order and
what is said about the result.
"""

from __future__ import annotations

import contextlib
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import partial
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from ..props.calliper import Adjusted
from ..props.combination import Combined
from ..props.enclosing import measured_quantities
from ..props.errors import OutlineError, Refusal, UsageError
from ..props.oblique import Projected
from ..props.properties import section_properties
from ..props.result import Notice
from ..props.section import Part, Section
from ..props.uncertainty import EdgeNoise, Mode, OutlineUncertainty, Quantity, standard_uncertainties
from .camera import Camera
from .colour_profile import Tone
from .face import Region
from .glare import glare_notices
from .hidden import Hidden
from .light import Light
from .outline import gaps, mitred, simplified, with_points
from .parted import part_face, require_parts
from .photo import Photo
from .references.printed import PrintCheck
from .references.reference import Reference, ReferenceKind
from .references.setting import Setting
from .references.stated import Given
from .regions import Regions, find_regions
from .standing import standing_height
from .tone_evidence import CLIPPED_BIAS, reading_shift, thinned, tone_evidence
from .trace import REFUSE_GAP, SPACING, WARN_LOST, Trace, clearest_mix, outline_blur, refuse_lost, trace_loop

if TYPE_CHECKING:
    from .references.scanner import Scanner

Array = NDArray[np.float64]

# Where the half level of a clean edge may lie beside the true edge, px, and per px of blur for a tone curve nobody
# knows; one value for the whole outline, and one per side (stated assumption, confirmed by simulation).
EDGE_BIAS_PX = 0.035
EDGE_BIAS_TONE = 0.035
GROUP_BIAS_PX = 0.025
# Edges nearer to each other than this many blurs are not located: the window of one holds the other.
EDGES_APART = 3.5
# Walls that make up less of the area than this may be thin; corners sharper than this (rad) are walls themselves.
_THIN_SHARE, _SHARPEST_CORNER = 0.02, np.deg2rad(120.0)
# Ground that darkens towards the edge it lies beside hides the part of its shade that lies within the edge's own blur:
# about as much again as is seen next to it. A step smaller by a share d has its half level 1.25 d of the blur further
# out (slope of a gaussian's step in its middle), so twice that for what is seen (stated assumption).
SHADE_BIAS = 2.5
# Parts of an outline beyond which a person is told: a second edge behind the first, a side clipped to white.
WARN_DOUBLE, WARN_CLIPPED = 0.1, 0.05
# Edges of the print asked for the tone curve: enough for a hundredth of a pixel, few enough to cost little.
_TONE_EDGES, _TONE_SURE = 300, 0.9
# An unseen stretch of outline against the straight bridge over it; see `_bridge_modes`.
BRIDGE_SAG, _MOST_BRIDGES = 0.1, 12
# Points of a bridge whose sag is more than the half pixel that every edge may be off.
_LONG_BRIDGE = 6
# The pixel bracket: half a pixel to either side.
PIXEL_BOUND = 0.5
# Simplification may move no property by more than this part of its standard uncertainty.
SIMPLIFICATION_SHARE = 0.1


@dataclass(frozen=True, eq=False)
class Member:
    """One measured face.

    number : 1, 2, ... in reading order
    section : simplified outline, mm
    uncertainty : what moves it
    quantities : property name to value, uncertainty and budget
    trace_px : dense outline in photo pixels, (m, 2) a loop of `section.loops`
    poorly_located : (m,) a loop, True where the outline is bridged
    calliper : how the outline was adjusted to sizes that a person took, None where nobody did
    cut : how the face of an oblique cut was projected to the true section, None for a square one
    """

    number: int
    section: Section
    uncertainty: OutlineUncertainty
    quantities: Mapping[str, Quantity]
    trace_px: tuple[Array, ...]
    poorly_located: tuple[NDArray[np.bool_], ...]
    notices: tuple[Notice, ...] = ()
    calliper: Adjusted | None = None
    cut: Projected | None = None

    @property
    def density(self) -> float | None:
        """kg/m^3 that the mass per metre was worked out from, None where there is none."""
        mass = self.quantities.get("mass_per_metre")
        return None if mass is None else 1e6 * mass.value / self.quantities["area"].value


@dataclass(frozen=True)
class ReferenceSummary:
    """What the scale comes from."""

    kind: str
    label: str
    mm_per_px: float
    residual_px: float
    plane_offset_mm: float
    details: Mapping[str, object] = field(default_factory=dict)


@dataclass(frozen=True, eq=False)
class Measurement:
    """Everything measured in one photo.

    to_pixels : (n, 2) mm in the face's plane to photo pixels
    corners_px : (k, 2) reference corners used
    photos, combined : the measurements of several photos of one face that this one combines, and how; it lies in the
        first
    """

    photo: Photo
    reference: ReferenceSummary
    members: tuple[Member, ...]
    notices: tuple[Notice, ...]
    to_pixels: Callable[[Array], Array]
    corners_px: Array
    photos: tuple[Measurement, ...] = ()
    combined: Combined | None = None


def measure(
    photo: Photo,
    *,
    reference: ReferenceKind | None = None,
    references: Sequence[str] = (),
    check_lengths: tuple[float, float] | None = None,
    check_length_std: float | None = None,
    face_height: float | None = None,
    face_height_std: float | None = None,
    focal_length_35mm: float | None = None,
    camera: Camera | None = None,
    scanner: Scanner | None = None,
    resolution_dpi: tuple[float, float] | None = None,
    scanner_scale_std: float | None = None,
    seeds: Sequence[tuple[float, float]] = (),
    within: Sequence[tuple[float, float]] = (),
    excluded: Sequence[Sequence[tuple[float, float]]] = (),
    parts: Sequence[tuple[float, float]] = (),
    density: float | None = None,
) -> Measurement:
    """Measure the cut faces in a photo or scan.

    reference : a scale reference that the person states; None looks for a sheet, cards, or a scan's resolution
    references : texts "KIND name=value ..." (`references.stated`), for instance "rectangle size=A4"; all of them, and
        a sheet or cards that are in the picture too, are adjusted together
    check_lengths : what the printed check lengths (across, up) really measure, mm
    face_height : height of the face above the plane of the reference, towards the camera, mm
    focal_length_35mm : the camera's 35 mm equivalent focal length, overrides the file's
    camera : a calibration of the camera that took the photo
    scanner : a calibration of the scanner, for a picture whose scale is its resolution
    resolution_dpi : (x, y) of a scan, overrides the file's
    seeds : photo pixels (x, y) that lie on the face; one member is measured for each region they hit
    within : corners (x, y) of a region in photo pixels outside which no face is looked for
    excluded : corners (x, y) in photo pixels of regions in which something hides the edge of the face; the outline
        is bridged there
    parts : photo pixels (x, y), one on each part of one member of several materials; its section has them as parts
    density : kg/m^3, adds the mass per metre
    Raises Refusal when no defensible figure can be taken, UsageError for options that cannot be.
    """
    check = PrintCheck(check_lengths) if check_length_std is None else PrintCheck(check_lengths, check_length_std)
    scale = find_reference(
        photo,
        reference,
        references,
        check=check,
        face_height=face_height,
        face_height_std=face_height_std,
        focal_35mm=focal_length_35mm,
        camera=camera,
        scanner=scanner,
        resolution_dpi=resolution_dpi,
        scanner_scale_std=scanner_scale_std,
    )
    tone = _tone_of(photo, scale)
    light = Light.of(photo, tone.curve)
    require_parts(parts, seeds)
    found = find_regions(
        photo,
        light,
        scale,
        parts or seeds,
        within,
        one_member=bool(parts),
        excluded=[np.array(outline, float) for outline in excluded],
    )
    reach = 2.0 * found.factor + 3.0
    hidden = Hidden.stated(excluded, reach)
    if hidden is not None and parts:
        raise UsageError(
            "excluded-and-parts",
            "A region is left out, and parts are pointed at; joints between parts are not bridged.",
            "Leave out one of the two.",
        )
    if hidden is not None:
        found = replace(found, groups=hidden.uncovered(found.groups))
    regions = [r for group in found.groups for r in group]
    light = clearest_mix(light, regions, reach)
    blur = outline_blur(light, regions, reach)
    members = tuple(
        _member(number, group, light, tone.doubt, blur, reach, scale, density, hidden, bends=not parts)
        for number, group in enumerate(found.groups, start=1)
    )
    used = {}
    if camera is not None and scale.details.get("focal_from") == "calibration":
        used["camera"] = camera.summary
    if parts:
        members = (_parted(members[0], light, found, blur, scale, parts),)
    middle = np.mean([t.mean(axis=0) for m in members for t in m.trace_px], axis=0, keepdims=True)
    summary = ReferenceSummary(
        scale.kind,
        scale.label,
        float(np.sqrt(np.abs(np.linalg.det(scale.face.mm_per_px(middle)[0])))),
        scale.residual_px,
        scale.plane_offset_mm,
        {**scale.details, **used, "edge_blur_px": blur, "tone": str(tone.curve), "tone_probability": tone.probability},
    )
    notices = (*photo.notices, *scale.notices, *found.notices, *_tone_notices(tone))
    return Measurement(photo, summary, members, notices, scale.face.to_pixels, scale.corners_px)


@dataclass(frozen=True)
class _Tone:
    """How stored values are read: the curve taken, and how likely it is against the other one."""

    curve: Tone = "file"
    probability: float = 1.0

    @property
    def doubt(self) -> float:
        """Standard deviation of being right or wrong."""
        return float(np.sqrt(self.probability * (1.0 - self.probability)))


def _tone_of(photo: Photo, reference: Reference) -> _Tone:
    """The reading of a photo's values that the reference's own black and white edges speak for.

    Files say nothing of it: telephones store values encoded for the eye, industrial cameras often light as it fell.
    """
    if reference.tone is not None:
        return _Tone(reference.tone)
    if reference.print_edges is None:
        return _Tone()
    evidence = tone_evidence(photo, reference.face, thinned(reference.print_edges, _TONE_EDGES), ("file", "linear"))
    if evidence is None:
        return _Tone()
    return _Tone(evidence.best, max(evidence.probabilities))


def _tone_notices(tone: _Tone) -> tuple[Notice, ...]:
    notices = []
    if tone.curve == "linear":
        notices.append(
            Notice(
                "linear-tones",
                "The edges of the printed squares show that this file stores light as it fell and not encoded for the "
                "eye; it was read so.",
                "Nothing needs doing.",
            )
        )
    if tone.probability < _TONE_SURE:
        notices.append(
            Notice(
                "tone-doubtful",
                "The edges of the printed squares do not tell for sure how this file encodes light; the interval holds "
                "both ways.",
                "Use the camera's original file, without filters or effects.",
            )
        )
    return tuple(notices)


def find_reference(
    photo: Photo,
    stated: ReferenceKind | None = None,
    references: Sequence[str] = (),
    *,
    check: PrintCheck,
    face_height: float | None = None,
    face_height_std: float | None = None,
    focal_35mm: float | None = None,
    camera: Camera | None = None,
    scanner: Scanner | None = None,
    resolution_dpi: tuple[float, float] | None = None,
    scanner_scale_std: float | None = None,
) -> Reference:
    """The scale reference in a photo: the one stated, else a sheet, cards, or a scan's resolution, in this order.

    references : texts of further ones; they are adjusted together with a sheet or cards
    Raises Refusal when there is none, UsageError for texts that state none.
    """
    from .references.cards import cards_reference
    from .references.coded import find_boards
    from .references.kinds import stated_references
    from .references.scan import scan_reference
    from .references.scanner import CalibratedScan
    from .references.sheet import sheet_reference
    from .references.together import all_together

    def scan(dpi: tuple[float, float] | None) -> Reference:
        if scanner is not None:
            return CalibratedScan(scanner, dpi).locate(photo)
        return scan_reference(photo, dpi, scanner_scale_std)

    if stated is not None:
        return stated.locate(photo)
    kinds = stated_references(references, Given(face_height, face_height_std, focal_35mm, camera))
    if kinds and resolution_dpi is not None:
        raise UsageError(
            "two-scales",
            "Both a scan's resolution and a reference are stated.",
            "State the reference alone; the scan's own resolution is then not used.",
        )
    if resolution_dpi is not None:
        return scan(resolution_dpi)
    boards = find_boards(grey(photo))
    sheets = [s for s in boards if s.board.window is not None]
    cards = [s for s in boards if s.board.window is None]
    placed = {
        "check": check,
        "face_height": face_height,
        "face_height_std": face_height_std,
        "focal_35mm": focal_35mm,
        "camera": camera,
    }
    if len(sheets) > 1:
        raise Refusal(
            "several-sheets",
            f"Several sheets are in the picture ({', '.join(s.board.name for s in sheets)}).",
            "Leave only the sheet on which the face lies in the frame.",
        )
    own = None
    if sheets or cards:
        own = sheet_reference(photo, sheets[0], **placed) if sheets else cards_reference(photo, cards, **placed)
    if kinds:
        setting = Setting(face_height, face_height_std, camera=camera, focal_35mm=focal_35mm)
        return all_together(photo, kinds, own, sheets or cards, check, setting)
    if own is not None:
        return own
    # A camera's file also states a resolution; it means nothing.
    if photo.focal_length_mm is None and photo.focal_length_35mm is None:
        try:
            return scan(None)
        except Refusal as refusal:
            raise Refusal(
                refusal.code,
                f"No sheet or card of cutface can be read in the picture; it was taken for a scan. {refusal.message}",
                "For a scan, state the resolution that the scanner was set to (--resolution); for a photo, have the "
                "whole sheet or the cards in the frame and in focus.",
            ) from None
    raise Refusal(
        "no-reference",
        "No sheet or card of cutface can be read in the picture.",
        "Print a sheet or cards (cutface print) and take the photo with them in focus and wholly in the frame.",
    )


def grey(photo: Photo) -> NDArray[np.uint8]:
    """(h, w) stored brightness, 8 bits, for reading markers and corners."""
    import cv2

    pixels = photo.pixels
    if pixels.dtype != np.uint8:
        pixels = (pixels >> 8).astype(np.uint8)
    return np.asarray(pixels if pixels.ndim == 2 else cv2.cvtColor(pixels, cv2.COLOR_RGB2GRAY), np.uint8)


def _member(
    number: int,
    regions: Sequence[Region],
    light: Light,
    doubt: float,
    blur: float,
    reach: float,
    reference: Reference,
    density: float | None,
    hidden: Hidden | None,
    *,
    bends: bool,
) -> Member:
    """One face measured; `bends` keeps vertices at its bridges, whose bends would end the joints of a parted face."""
    trace = partial(trace_loop, light, blur=blur, reach=reach, foot=reference.foot, hidden=hidden)
    traces = [[trace(loop) for loop in (r.shell, *r.holes)] for r in regions]
    flat = [t for part in traces for t in part]
    dense = [[reference.face.to_mm(t.points) for t in part] for part in traces]
    scale = max(float(np.median(_normal_scale(reference, t))) for t in flat)
    try:
        lost = refuse_lost(flat)
    except Refusal:
        # A loop of which hardly a point was located may be no polygon at all.
        with contextlib.suppress(OutlineError):
            _refuse_thin(number, _as_section(dense), EDGES_APART * blur * scale)
        raise
    _refuse_standing(number, flat, light, blur, reference)
    full = _as_section(dense)
    refuse_crossed(number, full)
    glare = glare_notices(number, flat, light, blur, reference.foot)
    scatter = max(float(np.median(t.scatter)) for t in flat)
    section, uncertainty = _simplify(
        full,
        4.0 * scatter * scale,
        density,
        partial(
            _uncertainty,
            traces=flat,
            shade=[_shade(t, light, blur) for t in flat],
            blur=blur,
            doubt=doubt,
            reference=reference,
        ),
        [reference.face.to_mm(t.points[_ends_of_bridges(t)]) if bends else np.empty((0, 2)) for t in flat],
    )
    quantities = measured_quantities(section, uncertainty, density)
    notices = [
        *glare,
        *_outline_notices(number, lost, flat, light, blur),
        *_thin_notices(number, section, blur * scale),
    ]
    return Member(
        number,
        section,
        uncertainty,
        quantities,
        tuple(t.points for t in flat),
        tuple(~t.located for t in flat),
        tuple(notices),
    )


def refuse_crossed(number: int, section: Section) -> None:
    """Raise Refusal when an outline crosses itself or its holes so much that it encloses no certain area."""
    polygon = section.to_polygon()
    if not polygon.is_valid and abs(polygon.buffer(0.0).area - polygon.area) > REFUSE_GAP * abs(polygon.area):
        raise Refusal(
            "outline-lost",
            f"The outline found of member {number} crosses itself.",
            "Light the face evenly, avoid glare and shadow at its edge, clean burrs away and take the photo again.",
        )


def _refuse_standing(number: int, traces: Sequence[Trace], light: Light, blur: float, reference: Reference) -> None:
    """Raise Refusal when walls show below a face of which nobody said that it stands above the reference."""
    if reference.rise is None:
        return
    height = standing_height(traces, light, blur, reference.face.to_mm, reference.rise)
    if height is not None:
        raise Refusal(
            "face-height-unstated",
            f"Member {number} seems to stand about {height:.0f} mm above the sheet: its walls show beside its face, "
            "and no thickness is stated.",
            "Measure the thickness of the slice and state it with --face-height; state 0 when the face lies in the "
            "sheet's plane and what shows is part of it.",
        )


def _parted(
    member: Member,
    light: Light,
    found: Regions,
    blur: float,
    reference: Reference,
    parts: Sequence[tuple[float, float]],
) -> Member:
    """The member with the parts of its face told apart; its figures are those of the face as one."""
    outline = (member.trace_px, member.poorly_located)
    face = part_face(member.section, member.uncertainty, outline, light, found, blur, reference, parts)
    return replace(
        member,
        section=face.section,
        uncertainty=face.uncertainty,
        trace_px=face.trace_px,
        poorly_located=face.poorly_located,
        notices=(*member.notices, *face.notices),
    )


def _outline_notices(number: int, lost: float, traces: Sequence[Trace], light: Light, blur: float) -> list[Notice]:
    """Words about an outline that is not one clean edge all round."""
    notices = []
    if lost > WARN_LOST:
        notices.append(
            Notice(
                "outline-bridged",
                f"{100 * lost:.0f} % of the outline of member {number} could not be located; straight bridges over it "
                "widen the interval (marked on the picture).",
                "Look at the marked places; light them better or clean the edge and take the photo again.",
            )
        )
    double = np.mean(np.concatenate([_second_edge(t, light, blur) for t in traces]))
    if double > WARN_DOUBLE:
        notices.append(
            Notice(
                "second-edge",
                f"Just inside {100 * double:.0f} % of the outline of member {number} there is a second edge: what was "
                "traced may be a joint, a coating or a wall around the face and not the face.",
                "Look at the outline on the picture; if it runs beside the face, point at the face with --seed, or "
                "clean and mark its edge.",
            )
        )
    clipped = np.mean(np.concatenate([_clipped(t) for t in traces]))
    if clipped > WARN_CLIPPED:
        notices.append(
            Notice(
                "overexposed",
                f"Along {100 * clipped:.0f} % of the outline of member {number} one side is as white as the file can "
                "hold, so the edge may lie a part of its blur further out or in; the interval is widened.",
                "Expose less (a third to one stop) and take the photo or scan again.",
            )
        )
    return notices


def _second_edge(trace: Trace, light: Light, blur: float) -> NDArray[np.bool_]:
    """(n,) whether the light changes again by half of the edge's step just behind it on the face's side."""
    behind = light.at(trace.points - (3.0 * blur + 2.0) * trace.normals)
    return trace.located & (np.abs(behind - trace.inner) > 0.5 * np.abs(trace.outer - trace.inner))


def _shade(trace: Trace, light: Light, blur: float) -> float:
    """How much of an outline's step the ground loses towards it, from twice the edge's own reach to just beyond it."""
    reach = 3.0 * blur + 0.5
    near, far = (light.at(trace.points + k * reach * trace.normals) for k in (1.0, 2.0))
    lost = (far - near) / np.where(trace.located, trace.outer - trace.inner, np.inf)
    return abs(float(np.median(lost[trace.located]))) if trace.located.any() else 0.0


def _clipped(trace: Trace) -> NDArray[np.bool_]:
    """(n,) whether a side of the edge is at the brightest value that the file can hold."""
    return trace.located & (np.maximum(trace.inner, trace.outer) > 0.99)


def _thin_notices(number: int, section: Section, blur_mm: float) -> list[Notice]:
    """Words about walls near the limit of what the picture resolves; Refusal beyond it.

    The bias of a wall's width is 0.13 of the blur at a width of twice the blur and 0.007 at three times.
    """
    _refuse_thin(number, section, 2.0 * blur_mm)
    if _thin_share(section, 5.0 * blur_mm) > _THIN_SHARE:
        return [
            Notice(
                "thin-wall",
                f"Member {number} has walls thinner than five times the blur of the picture ({5 * blur_mm:.2f} mm): "
                "their two edges run into each other.",
                "Go nearer, focus, or scan at a higher resolution.",
            )
        ]
    return []


def _refuse_thin(number: int, section: Section, width: float) -> None:
    """Refusal when walls are too thin, mm, for their two edges to be told apart."""
    if _thin_share(section, width) > _THIN_SHARE:
        raise Refusal(
            "wall-too-thin",
            f"Member {number} has walls so thin ({width:.2f} mm or less) that the blur of the picture runs their two "
            "edges together.",
            "Go nearer, focus, or scan at a higher resolution.",
        )


def _thin_share(section: Section, width: float) -> float:
    """Share of the area that lies in walls thinner than a width, mm."""
    polygon = section.to_polygon().buffer(0.0)
    opened = polygon.buffer(-0.5 * width).buffer(0.5 * width)
    # Rounding a convex corner that turns by an angle takes (tan(angle/2) - angle/2) of the radius squared.
    corners = 0.0
    for loop in section.loops:
        before, after = loop - np.roll(loop, 1, axis=0), np.roll(loop, -1, axis=0) - loop
        turn = np.arctan2(before[:, 0] * after[:, 1] - before[:, 1] * after[:, 0], np.sum(before * after, axis=1))
        half = 0.5 * np.clip(turn, 0.0, _SHARPEST_CORNER)
        corners += float(np.sum(np.tan(half) - half)) * (0.5 * width) ** 2
    return max(0.0, polygon.area - opened.area - corners) / polygon.area


def _as_section(loops: Sequence[Sequence[Array]]) -> Section:
    return Section(tuple(Part(part[0], tuple(part[1:])) for part in loops))


def _normal_scale(reference: Reference, trace: Trace) -> Array:
    """(n,) mm along the outline's normal to a pixel along it."""
    jacobian = reference.face.mm_per_px(trace.points)
    tangent = np.stack([-trace.normals[:, 1], trace.normals[:, 0]], axis=1)
    along = np.einsum("nij,nj->ni", jacobian, tangent)
    return np.abs(np.linalg.det(jacobian)) / np.linalg.norm(along, axis=1)


def _simplify(
    full: Section,
    tolerance: float,
    density: float | None,
    uncertainty_of: Callable[[Section], OutlineUncertainty],
    kept: Sequence[Array],
) -> tuple[Section, OutlineUncertainty]:
    """The coarsest polygon whose properties are those of the traced outline within a tenth of their uncertainty.

    kept : per loop, mm, where it has a vertex in any case
    Returns the section and its uncertainty, which holds by how much each property moved.
    """
    values = section_properties(full, density=density)
    coarsest = tolerance
    for _ in range(7):
        try:
            places = iter(kept)
            section = _as_section(
                [[with_points(simplified(loop, tolerance), next(places)) for loop in part.loops] for part in full.parts]
            )
        except OutlineError:
            tolerance /= 2
            continue
        if section.to_polygon().is_valid:
            moved = {
                name: abs(value - values[name]) for name, value in section_properties(section, density=density).items()
            }
            uncertainty = uncertainty_of(section)
            stds = standard_uncertainties(section, uncertainty)
            # The dense outline's own length grows with its scatter; it is no measure of the polygon's.
            judged = moved.keys() & stds.keys() - {"perimeter"}
            if all(moved[name] <= SIMPLIFICATION_SHARE * stds[name] for name in judged):
                return section, replace(
                    uncertainty, simplification={**moved, "perimeter": _roughness(section, coarsest)}
                )
        tolerance /= 2
    return full, replace(uncertainty_of(full), simplification={"perimeter": _roughness(full, coarsest)})


def _roughness(section: Section, tolerance: float) -> float:
    """By how much the scatter of its points may lengthen an outline, mm: against one drawn through the scatter."""
    length = section.to_polygon().length
    try:
        return abs(
            length
            - _as_section([[simplified(o, tolerance) for o in p.loops] for p in section.parts]).to_polygon().length
        )
    except OutlineError:
        return 0.0


def _uncertainty(
    section: Section,
    traces: Sequence[Trace],
    shade: Sequence[float],
    blur: float,
    doubt: float,
    reference: Reference,
) -> OutlineUncertainty:
    """What moves the vertices of a section: reference, common and per-side edge bias, random scatter."""
    loops = section.loops
    vertices = section.vertices
    pixels = reference.face.to_pixels(vertices)
    outward = np.concatenate([mitred(loop, 1.0) for loop in loops])
    unit = outward / np.maximum(np.linalg.norm(outward, axis=1, keepdims=True), 1e-12)
    # mm along the outward direction to a pixel of displacement along the outline's normal in the picture.
    jacobian = reference.face.mm_per_px(pixels)
    inverse = np.linalg.inv(jacobian)
    normal_px = np.einsum("nji,nj->ni", inverse, unit)
    # A vertex at which the outline turns straight back has no outward direction.
    length_px = np.linalg.norm(normal_px, axis=1)
    usual = np.sqrt(np.abs(np.linalg.det(jacobian)))
    scale = np.where(length_px > 0, 1.0 / np.where(length_px > 0, length_px, 1.0), usual)
    common = EDGE_BIAS_PX + EDGE_BIAS_TONE * blur
    modes = [
        *reference.modes(vertices),
        Mode("edge location (common)", outward * (common * scale)[:, None], "rectangular"),
    ]
    for side in np.array([[1.0, 0.0], [-1.0, 0.0], [0.0, 1.0], [0.0, -1.0]]):
        facing = np.maximum(unit @ side, 0.0) ** 2
        if facing.max() > 0.1:
            modes.append(
                Mode("edge location (by side)", outward * (GROUP_BIAS_PX * scale * facing)[:, None], "rectangular")
            )
    if doubt > 0.0:
        # The way between both readings, times the standard deviation of being right.
        moved = [doubt * blur * float(np.median(reading_shift(t.inner, t.outer))) for t in traces]
        per_vertex = np.concatenate([np.full(len(loop), m) for loop, m in zip(loops, moved, strict=True)])
        modes.append(Mode("tone curve", outward * (per_vertex * scale)[:, None], "rectangular"))
    washed = np.concatenate(
        [np.full(len(loop), float(np.mean(_clipped(t)))) for loop, t in zip(loops, traces, strict=True)]
    )
    if washed.any():
        modes.append(Mode("clipped light", outward * (CLIPPED_BIAS * blur * washed * scale)[:, None], "rectangular"))
    nearest = _nearest(loops, traces, pixels)
    dimmed = np.concatenate([np.full(len(loop), d) for loop, d in zip(loops, shade, strict=True)])
    if dimmed.any():
        modes.append(Mode("shade at the edge", outward * (SHADE_BIAS * blur * dimmed * scale)[:, None], "rectangular"))
    modes += _bridge_modes(loops, traces, nearest, outward * scale[:, None])
    scatter = np.concatenate([t.scatter[near] for t, near in zip(traces, nearest, strict=True)])
    length = np.concatenate([t.correlation[near] for t, near in zip(traces, nearest, strict=True)])
    noise = EdgeNoise(scatter * scale, length * scale)
    return OutlineUncertainty(tuple(modes), noise, PIXEL_BOUND * scale)


def _nearest(loops: Sequence[Array], traces: Sequence[Trace], pixels: Array) -> list[NDArray[np.intp]]:
    """Per loop, the trace's point nearest to each vertex; `pixels` (n, 2) are all vertices in the photo."""
    from scipy.spatial import KDTree

    ends = np.cumsum([len(loop) for loop in loops])[:-1]
    parts = np.split(pixels, ends)
    return [np.asarray(KDTree(t.points).query(part)[1]) for t, part in zip(traces, parts, strict=True)]


def _ends_of_bridges(trace: Trace) -> NDArray[np.intp]:
    """Indices of the points around long bridges, so that the outline can bend there; a short one hides no bend."""
    n = len(trace.points)
    long = [gap for gap in gaps(trace.located) if _LONG_BRIDGE <= len(gap) < n - 2]
    ends = [np.array([gap[0] - 1, gap[0], gap[len(gap) // 2], gap[-1], gap[-1] + 1]) % n for gap in long]
    return np.concatenate([np.empty(0, np.intp), *ends]).astype(np.intp)


def _bridge_modes(
    loops: Sequence[Array], traces: Sequence[Trace], nearest: Sequence[NDArray[np.intp]], outward: Array
) -> list[Mode]:
    """One independent mode for each of the longest bridged stretches of the outline, one for all others together.

    nearest : per loop, the trace's point nearest to each vertex; outward : (n, 2) mm for one pixel outward

    What lies under a bridge is not seen. It may bulge or dent by BRIDGE_SAG of the bridge's length, and by
    half a pixel at least (stated assumption).
    """
    stretches: list[Array] = []
    first = 0
    for loop, trace, near in zip(loops, traces, nearest, strict=True):
        here = slice(first, first + len(loop))
        first += len(loop)
        if trace.located.all():
            continue
        for gap in gaps(trace.located):
            length = float(len(gap)) * SPACING
            touched = np.isin(near, gap)
            if not touched.any():
                continue
            amount = np.zeros(len(outward))
            amount[here] = np.where(touched, max(0.5, BRIDGE_SAG * length), 0.0)
            stretches.append(amount)
    stretches.sort(key=lambda amount: -float(amount.max()))
    alone, together = stretches[:_MOST_BRIDGES], stretches[_MOST_BRIDGES:]
    if together:
        alone.append(np.sum(together, axis=0))
    return [Mode("bridged outline", outward * amount[:, None], "rectangular") for amount in alone]
