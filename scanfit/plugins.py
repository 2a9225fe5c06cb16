"""Find models, terms, explorers and figures by name, or in a file of the user's own.

Installed ones are entry points; a user's is written ``"my_model.py:MyModel"``, with the path relative to the run file.
"""

from __future__ import annotations

import hashlib
import importlib.util
import sys
from importlib.metadata import EntryPoint, entry_points
from pathlib import Path
from typing import Any, Final, Literal, TypeVar

from scanfit.contracts import Explorer, Model, Term
from scanfit.errors import InputError, Problem
from scanfit.validation import Options

Kind = Literal["models", "terms", "explorers"]

_CONTRACTS: Final[dict[str, type]] = {"models": Model, "terms": Term, "explorers": Explorer}
PluginT = TypeVar("PluginT")


def installed(kind: Kind | Literal["figures", "drawings"]) -> dict[str, EntryPoint]:
    """Installed plug-ins of one kind, by name, in alphabetical order."""
    return {point.name: point for point in sorted(entry_points(group=f"scanfit.{kind}"), key=lambda point: point.name)}


def find(kind: Kind, name: str, folder: Path, where: str) -> type[Any]:
    """Return the class called `name`.

    Parameters
    ----------
    kind : {"models", "terms", "explorers"}
        What it must be.
    name : str
        An installed name, or ``file.py:ClassName``.
    folder : Path
        Folder of the run file.
    where : str
        Path of the key that holds `name`, for messages.

    Raises
    ------
    InputError
        If there is none, it cannot be imported, or it does not fill the contract.
    """
    if ":" in name:
        return _from_file(kind, name, folder, where)
    choices = installed(kind)
    if name not in choices:
        raise InputError([Problem(where, f"no {kind[:-1]} has this name", name, tuple(choices))])
    try:
        found = choices[name].load()
    except Exception as error:  # a broken installation must not end in a traceback
        raise InputError([Problem(where, f"{name} cannot be imported: {type(error).__name__}: {error}")]) from error
    return _checked(kind, found, name, where)


def _from_file(kind: Kind, name: str, folder: Path, where: str) -> type[Any]:
    file_name, _, class_name = name.rpartition(":")
    path = (folder / file_name).resolve()
    if not path.is_file():
        raise InputError([Problem(where, f"there is no file {path}", name)])
    # The module's name carries its path, so that two users' models.py do not collide.
    module_name = f"scanfit_user_{path.stem}_{hashlib.sha256(str(path).encode()).hexdigest()[:8]}"
    module = sys.modules.get(module_name)
    if module is None:
        spec = importlib.util.spec_from_file_location(module_name, path)
        if spec is None or spec.loader is None:
            raise InputError([Problem(where, "not a Python file", name)])
        module = importlib.util.module_from_spec(spec)
        sys.modules[module_name] = module
        try:
            spec.loader.exec_module(module)
        except Exception as error:  # the user's code may raise anything
            del sys.modules[module_name]
            rule = f"{path.name} cannot be imported: {type(error).__name__}: {error}"
            raise InputError([Problem(where, rule)]) from error
    contract = _CONTRACTS[kind]
    if not hasattr(module, class_name):
        mine = [
            key
            for key, value in vars(module).items()
            if isinstance(value, type) and issubclass(value, contract) and value.__module__ == module_name
        ]
        raise InputError([Problem(where, f"{path.name} has no class of this name", class_name, mine)])
    return _checked(kind, getattr(module, class_name), name, where)


def _checked(kind: Kind, found: Any, name: str, where: str) -> type[Any]:
    contract = _CONTRACTS[kind]
    if not (isinstance(found, type) and issubclass(found, contract)):
        raise InputError([Problem(where, f"is not a scanfit.contracts.{contract.__name__}", name)])
    missing = sorted(getattr(found, "__abstractmethods__", ()))
    if missing:
        raise InputError([Problem(where, f"lacks the methods {', '.join(missing)}", name)])
    schema = getattr(found, "Options", None)
    if not (isinstance(schema, type) and issubclass(schema, Options)):
        raise InputError([Problem(where, "needs a nested class Options derived from scanfit.validation.Options", name)])
    return found
