"""What a run is: everything that can change an answer, and sentences about what has changed.

Equal fingerprints mean that archived points are answers to the same question. The run file counts by its meaning (key
order, comments and ``10`` against ``10.0`` do not matter), data files and source code by their content.
"""

from __future__ import annotations

import hashlib
import json
import platform
from collections import Counter
from collections.abc import Collection, Iterable, Mapping
from dataclasses import asdict, dataclass
from importlib import metadata
from pathlib import Path
from typing import Any

from scanfit.errors import RunFolderError
from scanfit.store.atomic import explaining, plain
from scanfit.store.sources import source_hashes

PACKAGES = ("scanfit", "numpy", "scipy", "numba", "emcee", "dynesty")
"""Packages whose version can change a number."""


@dataclass(frozen=True)
class Fingerprint:
    """Names and contents.

    Parameters
    ----------
    run : mapping
        Dotted key of the run file to its value.
    classes : mapping
        Role (``model``, ``terms.xenon``) to the class that plays it.
    data : mapping
        Data file to the SHA-256 of its content.
    sources : mapping
        Python module to the SHA-256 of its source.
    packages : mapping
        Package to version.
    """

    run: Mapping[str, Any]
    classes: Mapping[str, str]
    data: Mapping[str, str]
    sources: Mapping[str, str]
    packages: Mapping[str, str]

    @property
    def digest(self) -> str:
        """SHA-256 over everything."""
        text = json.dumps(asdict(self), sort_keys=True, ensure_ascii=True, allow_nan=False)
        return hashlib.sha256(text.encode()).hexdigest()

    @classmethod
    def from_json(cls, value: Any) -> Fingerprint:
        """Rebuild from what `dataclasses.asdict` gave.

        Raises
        ------
        RunFolderError
            If the value is not a fingerprint.
        """
        try:
            return cls(**{name: dict(value[name]) for name in ("run", "classes", "data", "sources", "packages")})
        except (KeyError, TypeError, ValueError):
            raise RunFolderError("the manifest holds no readable fingerprint") from None


def take_fingerprint(
    run: Mapping[str, Any],
    harmless: Collection[str],
    data_files: Iterable[Path],
    classes: Mapping[str, type],
) -> Fingerprint:
    """Take the fingerprint of a run.

    Parameters
    ----------
    run : mapping
        The parsed run file.
    harmless : collection of str
        Dotted keys that cannot change an answer, each with everything below it: ``run.title``, ``figures``.
    data_files : iterable of Path
        Every file that model and terms read; named without their folder, so that a run can be moved.
    classes : mapping of str to type
        Model, terms and explorers by role.

    Raises
    ------
    RunFolderError
        If a data file cannot be read.
    """
    return Fingerprint(
        run={key: value for key, value in flatten(run).items() if not _below(key, harmless)},
        classes={role: _class_name(kind) for role, kind in classes.items()},
        data=_data_hashes(data_files),
        sources=source_hashes(classes.values()),
        packages=package_versions(),
    )


def compare(old: Fingerprint, new: Fingerprint) -> list[str]:
    """Sentences that name every difference; empty if there is none."""
    return [
        *_differences(old.run, new.run, "", show=True),
        *_differences(old.classes, new.classes, "class of ", show=True),
        *_differences(old.data, new.data, "data file "),
        *_differences(old.sources, new.sources, "source code of "),
        *_differences(old.packages, new.packages, "version of ", show=True),
    ]


def flatten(value: Mapping[str, Any], above: str = "") -> dict[str, Any]:
    """Dotted keys in alphabetical order, with values brought to one form."""
    flat: dict[str, Any] = {}
    for key in sorted(value):
        path, item = f"{above}{key}", value[key]
        if isinstance(item, Mapping) and item:
            flat.update(flatten(item, f"{path}."))
        else:
            flat[path] = _one_form(plain(item, non_finite=repr))
    return flat


def package_versions(names: Iterable[str] = PACKAGES) -> dict[str, str]:
    """Installed versions, and Python's without its last figure."""
    versions = {"python": ".".join(platform.python_version_tuple()[:2])}
    for name in names:
        try:
            versions[name] = metadata.version(name)
        except metadata.PackageNotFoundError:
            continue
    return versions


def _below(key: str, prefixes: Collection[str]) -> bool:
    return any(key == prefix or key.startswith(f"{prefix}.") for prefix in prefixes)


def _one_form(value: Any) -> Any:
    if isinstance(value, list):
        return [_one_form(item) for item in value]
    if isinstance(value, dict):
        return {key: _one_form(value[key]) for key in sorted(value)}
    if isinstance(value, float) and value.is_integer() and abs(value) < 2**53:
        return int(value)
    return value


def _class_name(kind: type) -> str:
    """Qualified name; of a user's class without its module, whose name depends on where the file lies."""
    return f"{kind.__module__}.{kind.__qualname__}" if "." in kind.__module__ else kind.__qualname__


def _data_hashes(files: Iterable[Path]) -> dict[str, str]:
    paths = sorted({Path(path).resolve() for path in files})
    count = Counter(path.name for path in paths)
    hashes = {}
    for path in paths:
        with explaining(path, reading=True), path.open("rb") as file:
            content = hashlib.file_digest(file, "sha256").hexdigest()
        hashes[path.name if count[path.name] == 1 else f"{path.parent.name}/{path.name}"] = content
    return hashes


def _differences(old: Mapping[str, Any], new: Mapping[str, Any], what: str, show: bool = False) -> list[str]:
    found = []
    for key in sorted(old.keys() | new.keys()):
        if key not in new:
            found.append(f"{what}{key} is gone" + (f" (was {old[key]!r})" if show else ""))
        elif key not in old:
            found.append(f"{what}{key} is new" + (f" ({new[key]!r})" if show else ""))
        elif old[key] != new[key]:
            found.append(f"{what}{key} changed" + (f" from {old[key]!r} to {new[key]!r}" if show else ""))
    return found
