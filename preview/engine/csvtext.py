"""The rows of a report as comma-separated values."""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Mapping

__all__ = ["csv_text"]


def csv_text(body: Mapping[str, object], rows: str, *, common: bool = False) -> str:
    """One line a row of ``body[rows]``, names first; with ``common`` each line begins with the report's own figures.

    Keys are those of the JSON object, those of an object within it joined by ``_``; what is not a finite number is
    left empty, as is what a row does not have.
    """
    listed = body[rows]
    assert isinstance(listed, list)
    shared = _flat({k: v for k, v in body.items() if k != rows}) if common else {}
    lines = [shared | _flat(row) for row in listed] or ([shared] if shared else [])
    names = list(dict.fromkeys(name for line in lines for name in line))
    out = io.StringIO()
    writer = csv.DictWriter(out, names, lineterminator="\n")
    if names:
        writer.writeheader()
        writer.writerows(lines)
    return out.getvalue().removesuffix("\n")


def _flat(row: Mapping[str, object]) -> dict[str, object]:
    """Scalars of a row; an object within it is laid flat, a list is left out."""
    flat: dict[str, object] = {}
    for key, value in row.items():
        if isinstance(value, Mapping):
            flat |= {f"{key}_{name}": item for name, item in _flat(value).items()}
        elif isinstance(value, float):
            flat[key] = repr(value) if math.isfinite(value) else ""
        elif not isinstance(value, list | tuple):
            flat[key] = "" if value is None else value
    return flat
