"""The house: light start, one-way layers, resources, every kernel compiles."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest

APP = Path(__file__).parents[2] / "app"
HEAVY = ["PySide6", "pyqtgraph", "matplotlib", "numba", "scipy", "h5py", "pyarrow", "pydantic"]


@pytest.mark.parametrize(
    "code",
    [
        "import meseta",
        "from meseta.command import _outcome; assert _outcome(['--help']) == 0",
    ],
)
def test_a_light_start_loads_nothing_heavy(code):
    report = f"{code}\nimport sys; print([name for name in {HEAVY} if name in sys.modules])"
    done = subprocess.run([sys.executable, "-c", report], capture_output=True, text=True, check=True)
    assert done.stdout.splitlines()[-1] == "[]"


def test_public_names_are_listed_and_unknown_ones_refused():
    import meseta

    for name in ["read", "Recipe", "TraceSet", "Analysis", "Study", "find_plateaus", "fit_peaks"]:
        assert name in dir(meseta)
    with pytest.raises(AttributeError, match="no attribute 'nothing'"):
        meseta.nothing  # noqa: B018


def test_only_the_window_names_qt():
    for path in APP.rglob("*.py"):
        if "window" in path.parts:
            continue
        lines = [line for line in path.read_text(encoding="utf-8").splitlines() if "import" in line]
        assert not [line for line in lines if "PySide6" in line or "pyqtgraph" in line], path


def test_kernels_have_one_home_a_room_and_all_compile():
    from meseta import kernels

    homes = {path for path in APP.rglob("*.py") if "@kernel" in path.read_text(encoding="utf-8")}
    listed = {APP.joinpath(*module.split(".")).with_suffix(".py") for module in kernels.KERNEL_MODULES}
    assert homes - {APP / "meseta" / "kernels.py"} <= listed
    assert kernels.compile_all() >= 1


def test_kernels_call_only_kernels_of_their_own_room():
    # The cache of a room is renewed when one of its kernel files changes, and only then.
    from meseta.kernels import KERNEL_MODULES

    for module in KERNEL_MODULES:
        path = APP.joinpath(*module.split(".")).with_suffix(".py")
        room = module.split(".")[1]
        for line in path.read_text(encoding="utf-8").splitlines():
            if line.startswith(("from meseta.", "import meseta.")) and "meseta.kernels" not in line:
                assert line.split()[1].split(".")[1] == room, f"{path}: {line}"
