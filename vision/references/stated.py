"""A reference as a person states it: "rectangle size=A4 at=1200,800" - a kind, then names and values.

Knows the form of the text, the values that keys may have, and the keys that every kind has. What a kind's own keys are,
and what is made of them, each kind says in its own file as a `Kind`.
"""

from __future__ import annotations

import math
import re
import shlex
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Literal

from ...props.errors import UsageError
from ..camera import Camera
from .adjustment import Known
from .reference import ReferenceKind
from .setting import Role, Setting

Form = Literal["length", "percent", "pixels", "degrees", "count", "point", "size", "word", "four numbers"]

_NUMBER = r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?"
_LENGTH = re.compile(rf"({_NUMBER})\s*(mm|cm|m|in|)")
_UNITS = {"": 1.0, "mm": 1.0, "cm": 10.0, "m": 1000.0, "in": 25.4}
_MEASURE = re.compile(rf"({_NUMBER})\s*x\s*({_NUMBER})\s*(mm|cm|m|in|)")
# How values of a form are shown, and one of them.
_SHOWN: dict[Form, tuple[str, str]] = {
    "length": ("MM", "25.4 or 1in"),
    "percent": ("PERCENT", "0.1"),
    "pixels": ("PX", "1.5"),
    "degrees": ("DEGREES", "10"),
    "count": ("N", "9"),
    "point": ("X,Y", "1200,800"),
    "size": ("NAME or WxH", "A4 or 150x100"),
    "word": ("WORD", ""),
    "four numbers": ("X,Y,MM,MM", "1200,800,0,150"),
}
_ROLES: dict[str, Role] = {"beside": "beside", "on-face": "on face", "itself": "itself"}


@dataclass(frozen=True)
class Key:
    """One name=value of a kind.

    about : what it states, and its default
    words : the only values of a word; empty for any
    repeated : may be given several times; its value is then a tuple
    """

    name: str
    form: Form
    about: str
    required: bool = False
    words: tuple[str, ...] = ()
    repeated: bool = False

    @property
    def shown(self) -> str:
        """As a list of keys shows it: "size=NAME or WxH", in brackets where it may be left out."""
        value = "|".join(self.words) or _SHOWN[self.form][0]
        text = f"{self.name}={value}"
        return text if self.required else f"[{text}]"

    def value(self, text: str) -> Any:
        """The value of a text: float, int, (x, y), str or, of a size, what `size_of` takes. Raises ValueError."""
        if self.form == "word":
            if self.words and text not in self.words:
                raise ValueError(text)
            return text
        if self.form == "size":
            return text
        if self.form == "count":
            return int(text)
        if self.form == "length":
            return _length(text)
        numbers = [float(part) for part in text.split(",")]
        if not all(math.isfinite(number) for number in numbers):
            raise ValueError(text)
        if len(numbers) != {"point": 2, "four numbers": 4}.get(self.form, 1):
            raise ValueError(text)
        return tuple(numbers) if len(numbers) > 1 else numbers[0]


@dataclass(frozen=True)
class Given:
    """What the command states for every reference: the camera, and how the face lies to a reference that does not say.

    Fields as of `Setting`.
    """

    face_height: float | None = None
    face_height_std: float | None = None
    focal_35mm: float | None = None
    camera: Camera | None = None


@dataclass(frozen=True)
class Kind:
    """A kind of reference that can be stated.

    name : the first word; about : what it is, in a line
    keys : its own, without those that all kinds have
    uncertainty : what is assumed where nothing is stated, with its source
    example : what a person may type
    make : values by key, with "-" as "_", and the setting -> the reference
    role : how the reference lies to the face where nothing is stated
    """

    name: str
    about: str
    keys: tuple[Key, ...]
    uncertainty: str
    example: str
    make: Callable[[Mapping[str, Any], Setting], ReferenceKind]
    role: Role = "beside"


# Keys of every kind.
COMMON = (
    Key("role", "word", "beside the face, on it, or itself what is measured", words=tuple(_ROLES)),
    Key("face-height", "length", "height of the face above this reference, towards the camera; else as --face-height"),
    Key("face-height-u", "length", "its standard uncertainty; else as --face-height-u"),
)
# For kinds that do not tell how squarely the photo was taken.
TILT = Key("tilt", "degrees", "most that the camera may be off square, either way; default 5")


def stated_reference(text: str, kinds: Mapping[str, Kind], given: Given) -> ReferenceKind:
    """The reference of a text "KIND name=value ...".

    Raises UsageError, with an example, for a text of another form, an unknown kind or key, or a value that cannot be.
    """
    words = _words(text)
    if not words or words[0].lower() not in kinds:
        raise UsageError(
            "reference-kind",
            f"{words[0] if words else text!r} is no kind of reference." if words else "No reference is stated.",
            f"State one of {', '.join(kinds)}; `cutface references` tells what each needs.",
        )
    kind = kinds[words[0].lower()]
    values = _values(kind, words[1:])
    role = _ROLES[values["role"]] if "role" in values else kind.role
    height = values.get("face_height", given.face_height)
    height_std = values.get("face_height_u", given.face_height_std)
    if height_std is not None and not height_std > 0:
        raise _bad(kind, f"A standard uncertainty of {height_std:g} mm is none.")
    return kind.make(values, Setting(height, height_std, role, given.camera, given.focal_35mm))


def _words(text: str) -> list[str]:
    lexer = shlex.shlex(text, posix=True)
    # A backslash belongs to a path.
    lexer.whitespace_split, lexer.commenters, lexer.escape = True, "", ""
    try:
        return list(lexer)
    except ValueError:
        raise UsageError(
            "reference-text", f"A quotation mark is left open in {text!r}.", "Close it, or leave both out."
        ) from None


def _values(kind: Kind, pairs: Sequence[str]) -> dict[str, Any]:
    keys = {key.name: key for key in (*kind.keys, *COMMON)}
    values: dict[str, Any] = {}
    for pair in pairs:
        name, equals, text = pair.partition("=")
        name = name.lower()
        if not equals or not text:
            raise _bad(kind, f"{pair!r} is no name=value.")
        if name not in keys:
            raise _bad(kind, f"{kind.name} has no key {name!r}; it has {', '.join(keys)}.")
        key, own = keys[name], name.replace("-", "_")
        try:
            value = key.value(text)
        except (ValueError, OverflowError):
            like = " or ".join(key.words) if key.words else _SHOWN[key.form][1]
            raise _bad(kind, f"{name} cannot be {text!r}; it is like {like}.") from None
        if key.repeated:
            values[own] = (*values.get(own, ()), value)
        elif own in values:
            raise _bad(kind, f"{name} is stated twice.")
        else:
            values[own] = value
    missing = [key.name for key in kind.keys if key.required and key.name.replace("-", "_") not in values]
    if missing:
        raise _bad(kind, f"{kind.name} needs {' and '.join(missing)}.")
    return values


def _bad(kind: Kind, message: str) -> UsageError:
    return UsageError("reference-text", message, f'Write for instance --reference "{kind.example}".')


def _length(text: str) -> float:
    found = _LENGTH.fullmatch(text)
    if found is None or not math.isfinite(float(found[1])):
        raise ValueError(text)
    return float(found[1]) * _UNITS[found[2]]


def stated_sides(text: str) -> tuple[float, float] | None:
    """Two sides, mm, of a text such as "150x100" or "6x4in"; None for another one."""
    found = _MEASURE.fullmatch(text.lower())
    if found is None:
        return None
    return float(found[1]) * _UNITS[found[3]], float(found[2]) * _UNITS[found[3]]


def known_size(values: Mapping[str, Any]) -> Known | None:
    """How well a size is known by its keys "u" and "tolerance"; None where neither is stated."""
    if "u" in values and "tolerance" in values:
        raise UsageError(
            "reference-text",
            "Both u and tolerance are stated.",
            "State one: u is a standard uncertainty, tolerance a limit.",
        )
    stated = values.get("u", values.get("tolerance"))
    if stated is None:
        return None
    if not stated > 0:
        raise UsageError(
            "reference-text", f"A size known to {stated:g} mm is none.", "State u or tolerance above nought."
        )
    return Known(stated) if "u" in values else Known.within(stated)


def stated_pitch(values: Mapping[str, Any]) -> tuple[float, float]:
    """The pitch along x and up, mm."""
    return values["pitch"], values.get("pitch_up", values["pitch"])


def pattern_fields(values: Mapping[str, Any], setting: Setting, whole: float) -> dict[str, Any]:
    """The fields that every `Pattern` has, from values and a setting.

    whole : mm, the length that a stated u belongs to
    """
    fields: dict[str, Any] = {
        "role": setting.role,
        "face_height": setting.face_height,
        "face_height_std": setting.face_height_std,
        "camera": setting.camera,
        "focal_35mm": setting.focal_35mm,
    }
    if "u" in values:
        fields["scale_std"] = values["u"] / whole
    return fields
