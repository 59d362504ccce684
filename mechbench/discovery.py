"""Finding plug-ins: a file in mechanisms/ or distributions/ is one, and its name is the file's.

The name on the command line is the file's with hyphens (half_normal.py is ``half-normal``). A file is imported
only when it is asked for, so that a broken one stops nobody else.
"""

from __future__ import annotations

import difflib
import importlib
from pathlib import Path
from types import ModuleType
from typing import TypeVar

from mechbench.contract import Distribution, InputError, Mechanism

__all__ = ["families", "family_class", "mechanism_class", "mechanisms"]

_P = TypeVar("_P", Distribution, Mechanism)


def families() -> list[str]:
    """Names of the families there are, sorted."""
    return _names("distributions")


def mechanisms() -> list[str]:
    """Names of the mechanisms there are, sorted."""
    return _names("mechanisms")


def family_class(name: str) -> type[Distribution]:
    """Return the class of a family by its name.

    Raises
    ------
    InputError
        If there is no such family, or its file cannot be imported.
    """
    return _load(name, "distributions", "family", Distribution)  # type: ignore[type-abstract]


def mechanism_class(name: str) -> type[Mechanism]:
    """Return the class of a mechanism by its name.

    Raises
    ------
    InputError
        If there is no such mechanism, or its file cannot be imported.
    """
    return _load(name, "mechanisms", "mechanism", Mechanism)  # type: ignore[type-abstract]


def _folder(room: str) -> Path:
    return Path(str(importlib.import_module(f"mechbench.{room}").__file__)).parent


def _names(room: str) -> list[str]:
    return sorted(path.stem.replace("_", "-") for path in _folder(room).glob("*.py") if not path.stem.startswith("_"))


def _load(name: str, room: str, kind: str, base: type[_P]) -> type[_P]:
    known = _names(room)
    if name not in known:
        near = difflib.get_close_matches(name, known, n=1)
        hint = f"did you mean {near[0]!r}? " if near else ""
        msg = f"there is no {kind} {name!r}; {hint}accepted: {', '.join(known)}"
        raise InputError(msg)
    path = _folder(room) / f"{name.replace('-', '_')}.py"
    try:
        module = importlib.import_module(f"mechbench.{room}.{name.replace('-', '_')}")
        return _plug_in(module, name, base)
    except Exception as error:  # a plug-in may raise anything at all
        reason = str(error).splitlines()[0] if str(error) else ""
        msg = f"{kind} {name!r} cannot be loaded from {path}: {type(error).__name__}: {reason}"
        raise InputError(msg) from error


def _plug_in(module: ModuleType, name: str, base: type[_P]) -> type[_P]:
    found = [
        thing
        for thing in vars(module).values()
        if isinstance(thing, type) and issubclass(thing, base) and thing.__module__ == module.__name__
    ]
    if len(found) != 1:
        msg = f"expected one {base.__name__} in the file, found {len(found)}"
        raise TypeError(msg)
    if found[0].name != name:
        msg = f"the class is named {found[0].name!r}, the file says {name!r}"
        raise TypeError(msg)
    return found[0]
