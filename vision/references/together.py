"""Several references in one picture: adjusted together, each by its own uncertainty, once they are found to agree.

Knows how much references may disagree by chance, and which one is the odd one out. Each kind finds its own; the
adjustment itself is `adjustment`'s.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from itertools import product

import numpy as np
from numpy.typing import NDArray

from ...props.errors import Refusal
from ...props.result import Notice
from ...props.uncertainty import Mode
from ..photo import Photo
from ..plane import fit_plane
from .adjustment import Adjusted, HeldTilt, Target, adjust, capitalised, tilt_modes
from .coded import Sighting as BoardSighting
from .pattern import Pattern, pattern_sighting
from .points import TILT_BOUND_DEG
from .print_target import print_target
from .printed import PrintCheck, scaled
from .reference import PrintEdges, Reference, ReferenceKind
from .setting import AssumedCamera, Setting
from .surveyed import Sighting, SurveyedKind, View, adjusted_to_scatter, camera_for, frontal_view, reference_of

Array = NDArray[np.float64]

# References that disagree by so much do so once in a thousand pictures by chance.
_CHANCE = 0.001
# One is the odd one out when leaving it out mends this much more than leaving out any other: three standard deviations.
_CLEAR = 9.0
# What a reference that shows no tilt may be seen at when it is looked at by itself: sine, as good as anything.
_ANY_TILT = 0.5
_USUAL_TILT = float(np.sin(np.deg2rad(2 * TILT_BOUND_DEG)))
# References together tell the tilt when it comes out this much closer than the bound assumed.
_TOLD = 0.3
# A way to lie that is this much less likely than the best is no longer counted.
_UNLIKELY = 0.01
# Notices of a reference that stands alone, which a second one settles.
_SETTLED = frozenset({"points-unchecked", "bar-unchecked", "tilt-assumed", "disc-two-ways", "one-card"})


@dataclass(frozen=True, eq=False)
class Party:
    """One of several references.

    name : "the A4 sheet"
    reference : what it gives by itself; sightings : the same as something to adjust
    """

    name: str
    reference: Reference
    sightings: tuple[Sighting, ...]

    @property
    def conditions(self) -> int:
        """How many of the face's two tilts and its distance it tells by itself."""
        return max(3 - len(sighting.frontal) for sighting in self.sightings)


def party_of(photo: Photo, kind: ReferenceKind) -> Party:
    """What a stated kind gives in a photo; raises Refusal."""
    reference = kind.locate(photo)
    if isinstance(kind, Pattern):
        sighting = pattern_sighting(photo, kind.find(photo), kind)
    else:
        surveyed: SurveyedKind = kind  # pyright: ignore[reportAssignmentType]
        sighting = surveyed.sight(photo)
    return Party(sighting.target.label, reference, (sighting,))


def board_party(
    photo: Photo, reference: Reference, boards: Sequence[BoardSighting], check: PrintCheck, setting: Setting
) -> Party:
    """The sheet, or the cards, of ours that are in the picture."""
    sightings = []
    for board in boards:
        points = scaled(board, check)
        width, depth = np.array(board.board.size_mm) * check.scale
        outline = np.array([[0.0, 0.0], [width, 0.0], [width, depth], [0.0, depth]])
        name = f"the {board.board.name} sheet" if reference.kind == "sheet" else board.board.name
        plane = fit_plane([points], (photo.width, photo.height))
        target = print_target(name, points, plane, check.scale_std, outline, setting, shared="print")
        sightings.append(Sighting(reference.kind, (target,)))
    name = sightings[0].target.label if len(sightings) == 1 else "the cards"
    return Party(name, reference, tuple(sightings))


def all_together(
    photo: Photo,
    kinds: Sequence[ReferenceKind],
    own: Reference | None,
    boards: Sequence[BoardSighting],
    check: PrintCheck,
    setting: Setting,
) -> Reference:
    """The Reference of stated kinds and of the sheet or cards of ours, if there are any; of one alone its own.

    own, boards : what the sheet or cards give, and where they are seen
    """
    if own is None and len(kinds) == 1:
        return kinds[0].locate(photo)
    parties = [] if own is None else [board_party(photo, own, boards, check, setting)]
    return together(photo, [*parties, *(party_of(photo, kind) for kind in kinds)])


def together(photo: Photo, parties: Sequence[Party]) -> Reference:
    """The Reference of several references that agree.

    The first defines the axes. Raises Refusal that names the odd one out of three or more, or both of two, where they
    disagree by more than their uncertainties.
    """
    parties = sorted(parties, key=lambda party: -party.conditions)
    first = parties[0].sightings[0].target
    start = first.start if parties[0].conditions == 3 else None
    camera = camera_for(photo, first.setting, start)
    bound = min((s.tilt_bound for p in parties for s in p.sightings if s.frontal), default=0.0)
    frontal = all(party.conditions < 3 for party in parties)
    parties = [_scaled_to_scatter(camera, party, bound if frontal else None) for party in parties]
    _refuse_disagreement(camera, parties, bound if frontal else None)
    sightings = [s for party in parties for s in party.sightings]
    view, sightings = _view(camera, sightings, bound if frontal else None)
    names = [party.name for party in parties]
    label = _listed([name.removeprefix("the ") for name in names])
    merged = reference_of(
        photo,
        sightings,
        view.found,
        camera,
        kind=parties[0].reference.kind,
        label=label,
        extra_modes=view.further,
        upright=parties[0].reference.kind not in ("sheet", "rectangle", "points") and not _is_print(parties[0]),
        details={"together": names},
    )
    return _merged(merged, parties, names)


def _is_print(party: Party) -> bool:
    return party.reference.kind in ("chessboard", "squares", "discs")


def _merged(adjusted: Reference, parties: Sequence[Party], names: Sequence[str]) -> Reference:
    """The adjusted plane with what each reference by itself says of where to look, of tones and of doubts."""
    own = [party.reference for party in parties]
    notices: dict[str, Notice] = {}
    for reference in own:
        for notice in reference.notices:
            if notice.code not in _SETTLED:
                notices.setdefault(f"{notice.code}{notice.message}", notice)
    agree = Notice(
        "references-agree",
        f"{capitalised(_listed(names))} agree within their uncertainties; all are used together.",
        "Nothing needs doing.",
    )
    edges = [r.print_edges for r in own if r.print_edges is not None]
    return replace(
        adjusted,
        background="paper" if any(r.background == "paper" for r in own) else "any",
        region=tuple(outline for r in own for outline in r.region),
        excluded=tuple(outline for r in own for outline in r.excluded),
        on_face=tuple(outline for r in own for outline in r.on_face),
        white=np.concatenate([r.white for r in own]),
        black=np.concatenate([r.black for r in own]),
        print_edges=PrintEdges(
            np.concatenate([e.points for e in edges]),
            np.concatenate([e.normals for e in edges]),
            min(e.reach for e in edges),
        )
        if edges
        else None,
        tone=next((r.tone for r in own if r.tone is not None), None),
        foot=next((r.foot for r in own if r.foot is not None), None),
        plane_offset_mm=own[0].plane_offset_mm,
        notices=(*notices.values(), *adjusted_notices(adjusted), agree),
    )


def adjusted_notices(adjusted: Reference) -> tuple[Notice, ...]:
    """Notices of the adjustment itself; those of its sightings are each reference's own."""
    return tuple(n for n in adjusted.notices if n.code == "tilt-assumed")


def _listed(names: Sequence[str]) -> str:
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"


def _tilts(std: float | None) -> list[HeldTilt]:
    if std is None:
        return []
    return [HeldTilt((1.0, 0.0, 0.0), 0.0, std), HeldTilt((0.0, 1.0, 0.0), 0.0, std)]


def _hold(parties: Sequence[Party], bound: float | None) -> list[HeldTilt]:
    """What is assumed of the tilt: the bound where no reference shows it; else as good as nothing."""
    if bound is not None:
        return _tilts(bound / np.sqrt(3))
    return _tilts(_ANY_TILT) if all(party.conditions < 3 for party in parties) else []


def _ways(sightings: Sequence[Sighting]) -> list[list[Target]]:
    return [list(way) for way in product(*(s.targets for s in sightings))]


def _adjusted(camera: AssumedCamera, parties: Sequence[Party], bound: float | None) -> Adjusted | None:
    """The best of all ways in which references may lie together; None where none fits."""
    found: list[Adjusted] = []
    hold = _hold(parties, bound)
    for way in _ways([s for party in parties for s in party.sightings]):
        try:
            found.append(adjust(camera.camera, way, hold))
        except Refusal:
            continue
    return min(found, key=lambda f: f.cost, default=None)


def _scaled_to_scatter(camera: AssumedCamera, party: Party, bound: float | None) -> Party:
    """The reference with its pixels as uncertain as they turn out by themselves."""
    sightings = []
    for sighting in party.sightings:
        targets = []
        for target in sighting.targets:
            try:
                found = adjusted_to_scatter(camera, [target], _hold([party], bound))
            except Refusal:
                targets.append(target)
                continue
            rows = sum(len(m) for m in found.misses)
            excess = found.scatter / max(1, rows - 6)
            targets.append(replace(target, std=target.std * np.sqrt(max(1.0, excess))))
        sightings.append(replace(sighting, targets=tuple(targets)))
    return replace(party, sightings=tuple(sightings))


def _refuse_disagreement(camera: AssumedCamera, parties: Sequence[Party], bound: float | None) -> None:
    alone = [_adjusted(camera, [party], bound) for party in parties]
    costs = [0.0 if found is None else found.cost for found in alone]

    def excess(chosen: Sequence[int]) -> float:
        if len(chosen) < 2:
            return 0.0
        found = _adjusted(camera, [parties[i] for i in chosen], bound)
        return np.inf if found is None else max(0.0, found.cost - sum(costs[i] for i in chosen))

    def chance(chosen: Sequence[int], cost: float) -> float:
        from scipy.special import chdtrc

        conditions = [parties[i].conditions for i in chosen]
        degrees = max(1, sum(conditions) - (max(conditions) if bound is None else 1))
        return float(chdtrc(degrees, cost)) if np.isfinite(cost) else 0.0

    everyone = list(range(len(parties)))
    total = excess(everyone)
    if chance(everyone, total) >= _CHANCE:
        return
    names = [party.name for party in parties]
    if len(parties) == 2:
        raise Refusal(
            "references-disagree",
            f"{capitalised(names[0])} and {names[1]} contradict each other: {_apart(parties[0], parties[1])}.",
            "Check what was stated of both and that both lie in the plane stated; leave out the one that is wrong.",
        )
    rest = [[i for i in everyone if i != out] for out in everyone]
    left = [excess(chosen) for chosen in rest]
    order = np.argsort(left)
    odd, second = int(order[0]), int(order[1])
    if chance(rest[odd], left[odd]) >= _CHANCE and left[second] - left[odd] > _CLEAR:
        other = parties[rest[odd][0]]
        raise Refusal(
            "references-disagree",
            f"{capitalised(names[odd])} contradicts the others, which agree: {_apart(parties[odd], other)}.",
            "Check what was stated of it and that it lies in the plane stated, or leave it out.",
        )
    raise Refusal(
        "references-disagree",
        f"{capitalised(_listed(names))} contradict each other, and no single one of them is to blame.",
        "Check what was stated of each and that all lie in the planes stated.",
    )


def _apart(one: Party, other: Party) -> str:
    """How differently two references see lengths between them, in words."""
    middle = np.concatenate([one.reference.corners_px, other.reference.corners_px]).mean(axis=0, keepdims=True)
    scales = [
        float(np.sqrt(np.abs(np.linalg.det(party.reference.face.mm_per_px(middle)[0])))) for party in (one, other)
    ]
    return f"by {one.name} lengths are {100 * (scales[0] / scales[1] - 1):+.1f} % against {other.name}"


def _view(camera: AssumedCamera, sightings: Sequence[Sighting], bound: float | None) -> tuple[View, list[Sighting]]:
    """The joint view, and the sightings with the way that each lies in it first."""
    fits: list[tuple[list[Target], Adjusted]] = []
    hold = _tilts(None if bound is None else bound / np.sqrt(3))
    for way in _ways(sightings):
        try:
            fits.append((way, adjust(camera.camera, way, hold)))
        except Refusal:
            continue
    if not fits:
        raise Refusal(
            "reference-unfit",
            "No view of a flat face fits all references together.",
            "Check what was stated and picked; take the photo more squarely.",
        )
    fits.sort(key=lambda fit: fit[1].cost)
    way, best = fits[0]
    chosen = [replace(s, targets=(target,)) for s, target in zip(sightings, way, strict=True)]
    if bound is None and _tilt_std(best) > _TOLD * _USUAL_TILT:
        # A disc that looks round.
        bound = _USUAL_TILT
    if bound is not None and _tilt_std(best) > _TOLD * bound:
        return frontal_view(camera, way, ((1.0, 0.0, 0.0), (0.0, 1.0, 0.0)), bound), chosen
    weights = np.exp(-0.5 * np.array([found.cost - best.cost for _, found in fits]))
    weights /= weights.sum()
    others = [(found, weight) for (_, found), weight in zip(fits[1:], weights[1:], strict=True) if weight > _UNLIKELY]
    further: Callable[[Array], list[Mode]] | None = None
    if others:
        further = tilt_modes(best, [found for found, _ in others], np.array([weight for _, weight in others]))
    return View(best, further), chosen


def _tilt_std(found: Adjusted) -> float:
    """The larger standard uncertainty of both components of the tilt, as a sine."""
    own = len(found.plane.camera.parameters)
    upward = found.plane.rotation[:, 2]
    rows = np.array([np.cross(upward, direction) for direction in np.eye(3)[:2]])
    return float(np.linalg.norm(rows @ found.factor[own : own + 3], axis=1).max())
