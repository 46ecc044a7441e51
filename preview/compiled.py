"""The decorator of the sample loops: numba, with a cache in the user's cache folder. Only ``*kernels.py`` take it."""

from __future__ import annotations

import hashlib
import os
from collections.abc import Callable
from pathlib import Path
from typing import Any

from platformdirs import user_cache_dir

__all__ = ["bare", "compiled", "in_cache"]


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

    decorate: Callable[[Callable[..., Any]], Any] = njit(cache=cached, nogil=True, error_model="numpy")
    return decorate


compiled = _compiler()


def _uncounted() -> Any:
    from llvmlite.ir import Constant
    from numba.extending import intrinsic

    @intrinsic
    def bare(_context: Any, array: Any) -> Any:
        def build(context: Any, builder: Any, _signature: Any, args: Any) -> Any:
            make = context.make_array(array)
            given, result = make(context, builder, args[0]), make(context, builder)
            for field in ("data", "nitems", "itemsize", "shape", "strides"):
                setattr(result, field, getattr(given, field))
            for field in ("meminfo", "parent"):
                setattr(result, field, Constant(getattr(given, field).type, None))
            return result._getvalue()

        return array(array), build

    return bare


bare = _uncounted()
"""The same array without a count of its owners, whose keeping costs more than a short loop.

For arrays that the caller of a kernel holds; what is returned to Python must not be one.
"""


def in_cache(name: str) -> bool:
    """Whether a kernel of that name was compiled on this machine before, so that it only has to be loaded."""
    return any(Path(os.environ["NUMBA_CACHE_DIR"]).rglob(f"*kernels.{name}-*.nbi"))
