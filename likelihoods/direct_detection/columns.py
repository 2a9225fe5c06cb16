"""Read two columns of numbers from a text file."""

from __future__ import annotations

from pathlib import Path

from scanfit.errors import InputError, Problem


def read_columns(path: Path, where: str, meaning: str) -> tuple[tuple[float, ...], tuple[float, ...]]:
    """Read a file of two columns, separated by commas, semicolons or blanks; # comments and one header are skipped."""
    try:
        lines = path.read_text(encoding="utf-8-sig").splitlines()
    except (OSError, UnicodeDecodeError) as error:
        raise InputError([Problem(where, f"the file cannot be read: {error}")], str(path)) from None
    rows: list[tuple[float, float]] = []
    header_allowed = True
    for number, line in enumerate(lines, start=1):
        if not line.strip() or line.lstrip().startswith("#"):
            continue
        fields = line.replace(",", " ").replace(";", " ").split()
        try:
            first, second = map(float, fields)
        except ValueError:
            if header_allowed:
                header_allowed = False
                continue
            rule = f"line {number} must hold two numbers, {meaning}"
            raise InputError([Problem(where, rule, line)], str(path)) from None
        header_allowed = False
        rows.append((first, second))
    return tuple(row[0] for row in rows), tuple(row[1] for row in rows)
