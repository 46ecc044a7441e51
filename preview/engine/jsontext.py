"""One JSON object for every report."""

from __future__ import annotations

import json
import math

from preview import __version__

__all__ = ["FORMAT", "json_text"]

FORMAT = 1
"""Number of the report format; it grows when a key changes its meaning."""


def json_text(body: dict[str, object]) -> str:
    """The report as one versioned object; what is not a finite number is null."""
    return json.dumps(_plain({"preview": __version__, "format": FORMAT, **body}), allow_nan=False)


def _plain(value: object) -> object:
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, dict):
        return {str(key): _plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(item) for item in value]
    return value
