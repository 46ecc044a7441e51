"""The decorator of the sample loops: numba, with a cache in the user's cache folder. Only ``*kernels.py`` take it."""

from __future__ import annotations

import hashlib
import os
from collections.abc import Callable
from pathlib import Path
from typing import Any

from platformdirs import user_cache_dir

__all__ = ["compiled", "in_cache"]


def _compiler() -> Callable[[Callable[..., Any]], Any]:
    """numba's decorator, with a cache in the user's cache folder where that can be written.

    numba's cache of one file does not see changes in functions it calls from another, so the folder is named after
    what is in the kernel files of all rooms, and in this one.
    """
    try:
        here = Path(__file__)
        sources = [here, *sorted(here.parent.glob("*/*kernels.py"))]
        digest = hashlib.sha256(b"".join(source.read_bytes() for source in sources)).hexdigest()[:12]
        own = Path(user_cache_dir("preview")) / "kernels" / digest
        folder = Path(os.environ.setdefault("NUMBA_CACHE_DIR", str(own)))
        folder.mkdir(parents=True, exist_ok=True)
        cached = os.access(folder, os.W_OK)
    except OSError:
        cached = False
    from numba import njit  # reads the variable as it is loaded, so not before

    # No counts of an array's owners (`_nrt`), whose keeping costs more than a short loop: the caller holds every array
    # of a kernel, and a kernel makes none.
    options: dict[str, Any] = {"cache": cached, "nogil": True, "error_model": "numpy", "_nrt": False}
    decorate: Callable[[Callable[..., Any]], Any] = njit(**options)
    return decorate


compiled = _compiler()


def in_cache(name: str) -> bool:
    """Whether a kernel of that name was compiled on this machine before, so that it only has to be loaded."""
    return any(Path(os.environ["NUMBA_CACHE_DIR"]).rglob(f"*kernels.{name}-*.nbi"))
