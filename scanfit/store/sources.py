"""Which source code a class depends on.

Import statements are followed from the module that defines it: within its package if it lives in one, else to files
in its own folder. Other packages count by their version, see `fingerprint`.
"""

from __future__ import annotations

import ast
import hashlib
import sys
from collections.abc import Iterable, Iterator
from pathlib import Path

from scanfit.store.atomic import explaining

NO_SOURCE = "no source file"
"""Stands for the hash of a class that was typed into a session or compiled."""


def source_hashes(classes: Iterable[type]) -> dict[str, str]:
    """SHA-256 of every source file that `classes` depend on, by name of the module.

    A user's file is named by the file, since the name of its module depends on where it lies.
    """
    waiting = [(kind.__module__, _file_of(kind.__module__)) for kind in classes]
    hashes: dict[str, str] = {}
    seen: set[Path] = set()
    while waiting:
        module, path = waiting.pop()
        if path is None:
            hashes[module] = NO_SOURCE
        elif path not in seen:
            seen.add(path)
            with explaining(path, reading=True):
                source = path.read_bytes()
            hashes[module if "." in module else path.name] = hashlib.sha256(source).hexdigest()
            waiting += list(_neighbours(source, module, path))
    return dict(sorted(hashes.items()))


def _neighbours(source: bytes, module: str, path: Path) -> Iterator[tuple[str, Path]]:
    """Modules that `source` imports, lazily or not, from its own package or folder."""
    package = module if path.name == "__init__.py" else module.rpartition(".")[0]
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.Import):
            names = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            levels = package.split(".")
            above = levels[: len(levels) - node.level + 1] if node.level else []
            base = ".".join([*above, *([node.module] if node.module else [])])
            # What stands behind "from a import b" is an object of a or the module a.b: both are looked for.
            names = [base, *(f"{base}.{alias.name}" for alias in node.names)]
        else:
            continue
        for name in names:
            file = _file_of_neighbour(name, module, path)
            if file is not None:
                yield name, file


def _file_of(module: str) -> Path | None:
    file = getattr(sys.modules.get(module), "__file__", None)
    return Path(file) if isinstance(file, str) and file.endswith(".py") and Path(file).is_file() else None


def _file_of_neighbour(name: str, module: str, path: Path) -> Path | None:
    if "." not in module:
        file = path.parent / f"{name.replace('.', '/')}.py"
        return file if file.is_file() else None
    if name.partition(".")[0] != module.partition(".")[0]:
        return None
    loaded = _file_of(name)
    if loaded is not None:
        return loaded
    # A module that only an import inside a function names is not loaded yet: it lies where its package lies.
    package, _, last = name.rpartition(".")
    for folder in getattr(sys.modules.get(package), "__path__", ()):
        file = Path(folder) / f"{last}.py"
        if file.is_file():
            return file
    return None
