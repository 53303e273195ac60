"""TOML text to checked profiles; the shipped ones by name."""

from __future__ import annotations

import difflib
import json
import tomllib
from collections.abc import Callable
from pathlib import Path
from typing import Any, Literal, TypeVar, get_args

from pydantic import ValidationError
from pydantic_core import ErrorDetails

from hw_profiles.base import Profile
from hw_profiles.board import Board
from hw_profiles.camera import Camera
from hw_profiles.errors import Problem, ProfileError
from hw_profiles.hand import Hand
from hw_profiles.part import Part
from hw_profiles.rig import Rig, RigFile

DATA = Path(__file__).parent / "data"
DEFAULT_RIG = "trefoil"

Kind = Literal["hands", "parts", "cameras", "boards", "rigs"]
P = TypeVar("P", bound=Profile)
UNION_TAGS = ("revolute", "prismatic", "disc", "polygon", "36h11", "two-spots")  # in an error's location, but no key of the file


def shipped(kind: Kind) -> tuple[str, ...]:
    """Names of the shipped profiles of a kind."""
    return tuple(sorted(path.stem for path in (DATA / kind).glob("*.toml")))


def load_hand(name_or_path: str, beside: Path | None = None) -> Hand:
    """A hand by shipped name or TOML path (`beside`: the folder that a relative path starts from)."""
    return _load(Hand, "hands", name_or_path, beside)


def load_part(name_or_path: str, beside: Path | None = None) -> Part:
    """A part by shipped name or TOML path."""
    return _load(Part, "parts", name_or_path, beside)


def load_camera(name_or_path: str, beside: Path | None = None) -> Camera:
    """A camera by shipped name or TOML path."""
    return _load(Camera, "cameras", name_or_path, beside)


def load_board(name_or_path: str, beside: Path | None = None) -> Board:
    """A servo board by shipped name or TOML path."""
    return _load(Board, "boards", name_or_path, beside)


def load_rig(name_or_path: str = DEFAULT_RIG, part: str | None = None) -> Rig:
    """A rig with everything it is made of; `part` puts another part in.

    Raises
    ------
    ProfileError
        Unknown name (the shipped ones are listed), unreadable or broken TOML, or a profile that fails its checks.
    """
    path = _find("rigs", name_or_path, None)
    file = parse(RigFile, _text(path), path.name)
    beside = path.parent
    made_of = {
        "hand": load_hand(file.hand, beside),
        "part": load_part(part) if part is not None else load_part(file.part, beside),
        "camera": load_camera(file.camera, beside),
        "board": load_board(file.board, beside),
    }
    own = {key: getattr(file, key) for key in RigFile.model_fields if key not in made_of}
    return _checked(Rig, lambda: Rig.model_validate(own | made_of), path.name)


def parse(kind: type[P], text: str, file: str) -> P:
    """A checked profile from TOML text; `file` names it in errors.

    Raises
    ------
    ProfileError
        Broken TOML, or keys that are missing, unknown, of the wrong type or outside what is allowed.
    """
    try:
        data = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise ProfileError([Problem(file, "", "", f"not valid TOML: {error}")]) from error
    # Through JSON: there a strict model takes an array for a tuple, and still no string for a number.
    return _checked(kind, lambda: kind.model_validate_json(json.dumps(data, default=str)), file)


def parse_json(kind: type[P], text: str, file: str) -> P:
    """A checked profile type from JSON text; `file` names it in errors. Raises ProfileError."""
    return _checked(kind, lambda: kind.model_validate_json(text), file)


def _load(kind: type[P], folder: Kind, name_or_path: str, beside: Path | None) -> P:
    path = _find(folder, name_or_path, beside)
    return parse(kind, _text(path), path.name)


def _find(folder: Kind, name_or_path: str, beside: Path | None) -> Path:
    if name_or_path in shipped(folder):
        return DATA / folder / f"{name_or_path}.toml"
    path = Path(name_or_path).expanduser()
    path = path if beside is None else beside / path
    if not path.is_file():
        names = ", ".join(shipped(folder))
        raise ProfileError([Problem(name_or_path, "", "", f"no such file, and no shipped {folder[:-1]}; shipped {folder}: {names}")])
    return path


def _text(path: Path) -> str:
    try:
        return path.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        raise ProfileError([Problem(path.name, "", "", f"cannot be read: {error}")]) from error


def _checked(kind: type[P], make: Callable[[], P], file: str) -> P:
    try:
        return make()
    except ValidationError as error:
        raise ProfileError([_problem(kind, detail, file) for detail in error.errors(include_url=False)]) from error


def _problem(kind: type[Profile], detail: ErrorDetails, file: str) -> Problem:
    steps = [step for step in detail["loc"] if step not in UNION_TAGS]
    key = ""
    for step in steps:
        key += f"[{step}]" if isinstance(step, int) else f".{step}" if key else step
    value = repr(detail["input"]) if isinstance(detail["input"], str | int | float) else ""
    if detail["type"] == "extra_forbidden":
        return Problem(file, key, value, _unknown_key(str(steps[-1]), _keys_at(kind, detail["loc"][:-1])))
    return Problem(file, key, value, detail["msg"][0].lower() + detail["msg"][1:])


def _unknown_key(key: str, allowed: list[str]) -> str:
    near = difflib.get_close_matches(key, allowed, n=1)
    return f"unknown key{f', did you mean {near[0]}?' if near else ''}; allowed: {', '.join(allowed)}"


def _keys_at(kind: type[Profile], steps: tuple[int | str, ...]) -> list[str]:
    """Keys of the table that the steps of an error's location lead to."""
    tables = [kind]
    for step in steps:
        if step in UNION_TAGS:
            tables = [table for table in tables if any(step in get_args(f.annotation) for f in table.model_fields.values())]
        elif any(step in table.model_fields for table in tables):
            fields = [table.model_fields[str(step)] for table in tables if step in table.model_fields]
            tables = [found for field in fields for found in _profiles_in(field.annotation)]
    return [key for table in tables for key in table.model_fields]


def _profiles_in(annotation: Any) -> list[type[Profile]]:
    if isinstance(annotation, type) and issubclass(annotation, Profile):
        return [annotation]
    return [found for part in get_args(annotation) for found in _profiles_in(part)]
