"""The one decorator of all compiled kernels, their cache, and the list that set-up compiles.

A cached kernel that calls a kernel of another file keeps the old callee after an edit.  So a room's kernels call only
kernels of their own room, and the room's cache folder is named by a hash over all its files that hold kernels: after
any edit all kernels of that room are compiled anew.
"""

from __future__ import annotations

import hashlib
import importlib
import os
import tempfile
from collections.abc import Callable
from functools import cache
from pathlib import Path
from typing import Any, TypeVar, cast

__all__ = ["KERNEL_MODULES", "compile_all", "kernel", "warm_up"]

KERNEL_MODULES = (
    "meseta.simulate.kernels",
    "meseta.intake.kernels",
    "meseta.intake.calibration.kernels",
    "meseta.intake.calibration.stored_kernels",
    "meseta.intake.readers.text_kernels",
    "meseta.segmentation.noise_kernels",
    "meseta.segmentation.partition_kernels",
    "meseta.segmentation.kernels",
    "meseta.segmentation.stretch_kernels",
    "meseta.segmentation.joining_kernels",
    "meseta.segmentation.finder_kernels",
    "meseta.segmentation.measure_kernels",
    "meseta.histograms.lookup_kernels",
    "meseta.histograms.counting_kernels",
    "meseta.histograms.region_kernels",
    "meseta.histograms.displacement_kernels",
    "meseta.histograms.correlation_kernels",
    "meseta.histograms.resampling_kernels",
    "meseta.peaks.line_kernels",
    "meseta.peaks.kernels",
    "meseta.selection.kernels",
    "meseta.window.raster",
)
"""Every module that holds compiled kernels; each registers a warm-up with :func:`warm_up`."""

Function = TypeVar("Function", bound=Callable[..., Any])
_warm_ups: list[Callable[[], None]] = []


def _source_hash(room: str) -> str:
    """Return a hash over the sources of a room's kernels and the numba version."""
    import numba

    digest = hashlib.sha256(numba.__version__.encode())
    root = Path(__file__).parent
    for module in KERNEL_MODULES:
        if module.split(".")[1] == room:
            digest.update(root.joinpath(*module.split(".")[1:]).with_suffix(".py").read_bytes())
    return digest.hexdigest()[:16]


@cache
def _cache_folder(room: str) -> str:
    """Return a writable cache folder for a room's kernels: the user's, else a temporary one."""
    import platformdirs

    name = f"{room}-{_source_hash(room)}"
    for base in (platformdirs.user_cache_path("meseta"), Path(tempfile.gettempdir()) / f"meseta-{_user()}"):
        folder = base / "kernels" / name
        try:
            folder.mkdir(parents=True, exist_ok=True, mode=0o700)
            with tempfile.TemporaryFile(dir=folder):
                return str(folder)
        except OSError:
            continue
    return tempfile.mkdtemp(prefix="meseta-kernels-")


def _user() -> str:
    return str(os.getuid()) if hasattr(os, "getuid") else os.environ.get("USERNAME", "user")


def kernel(function: Function) -> Function:
    """Compile ``function`` on first use, cached on disk, without the interpreter lock.

    No ``fastmath`` (results must not depend on the compiler's mood) and no ``parallel`` (threads come from
    :class:`meseta.work.Work`; numba's own layers abort when two Python threads use them).
    """
    import numba

    if not os.environ.get("NUMBA_CACHE_DIR"):
        numba.config.CACHE_DIR = _cache_folder(function.__module__.split(".")[1])  # type: ignore[attr-defined]
    compiled: Any = numba.njit(nogil=True, cache=True, error_model="numpy")(function)
    return cast(Function, compiled)


def warm_up(function: Callable[[], None]) -> Callable[[], None]:
    """Register a function that calls the kernels of its module on tiny arrays of the types used in earnest."""
    _warm_ups.append(function)
    return function


def compile_all(report: Callable[[int, int], None] | None = None) -> int:
    """Compile (or load from the cache) every kernel; return the number of modules done."""
    for module in KERNEL_MODULES:
        importlib.import_module(module)
    for done, function in enumerate(_warm_ups):
        if report:
            report(done, len(_warm_ups))
        function()
    if report:
        report(len(_warm_ups), len(_warm_ups))
    return len(_warm_ups)


def _main() -> None:
    """Compile every kernel with progress on the terminal; called once by set-up."""
    from tqdm import tqdm

    with tqdm(total=len(KERNEL_MODULES), desc="compiling", unit="module", leave=False, disable=None) as bar:

        def report(done: int, total: int) -> None:
            bar.total = total
            bar.update(done - bar.n)

        compile_all(report)


if __name__ == "__main__":
    # Run as a script this file is a second module "__main__"; the registry is the one of the imported module.
    from meseta import kernels

    kernels._main()
