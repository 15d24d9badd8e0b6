"""Renders the window in several sizes, light and dark, to be looked at.

    python tests/window/screenshots.py FOLDER [--traces N] [--only WORD]

Simulated recordings only.  Every picture is a state that a user meets: first page, a day's recording, a window drawn,
an open form, the linear axis, the tables.
"""

from __future__ import annotations

import argparse
import os
import sys
import tempfile
import time
from dataclasses import replace
from pathlib import Path

SIZES = {"1280x800": (1280, 800, 1.0), "1920x1080": (1920, 1080, 1.0), "3840x2160": (1920, 1080, 2.0)}


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("folder", type=Path)
    parser.add_argument("--traces", type=int, default=1500)
    parser.add_argument("--size", choices=SIZES, default=None)
    parser.add_argument("--only", default="")
    options = parser.parse_args()
    options.folder.mkdir(parents=True, exist_ok=True)
    if options.size is None:
        for size in SIZES:  # the scale of the screen is fixed once a process
            command = [sys.executable, __file__, str(options.folder), "--size", size, "--traces", str(options.traces)]
            os.spawnv(os.P_WAIT, sys.executable, [*command, "--only", options.only])
        return
    width, height, scale = SIZES[options.size]
    os.environ["QT_QPA_PLATFORM"] = "offscreen"
    os.environ["QT_SCALE_FACTOR"] = str(scale)
    shoot(options.folder, options.size, width, height, options.traces, options.only)


def shoot(folder: Path, size: str, width: int, height: int, traces: int, only: str) -> None:
    from PySide6.QtCore import QSettings

    from meseta.simulate import simulate
    from meseta.window.application import make_application, make_window
    from meseta.window.conditions import Condition, ConditionSet

    application = make_application()
    with tempfile.TemporaryDirectory() as place:
        settings = QSettings(str(Path(place) / "window.ini"), QSettings.Format.IniFormat)
        window = make_window(application, settings, Path(place) / "unfinished.json")
        window.resize(width, height)
        window.show()
        session = window.session

        def settle() -> None:
            end = time.monotonic() + 240
            quiet = 0
            while quiet < 12 and time.monotonic() < end:
                application.processEvents()
                time.sleep(0.01)
                quiet = 0 if window.jobs.busy else quiet + 1

        def picture(name: str) -> None:
            for appearance in ("light", "dark"):
                if only and only not in f"{name}-{appearance}":
                    continue
                window.themes.choose(appearance)
                settle()
                window.grab().save(str(folder / f"{size}-{name}-{appearance}.png"))

        picture("first")
        session.open_traces(simulate("mixture", traces, 14).traces, "night 14, wire C")
        settle()
        session.go_to(traces // 3)
        settle()
        picture("whole")
        session.change_conditions(
            "draw a window",
            ConditionSet(
                (
                    Condition("plateau", 1.3e-4, 1.3e-3, longer_than=0.1),
                    Condition("range", first=100, last=traces - 200),
                )
            ),
        )
        settle()
        window.commands.make_group("molecule")
        window.widgets["steps"].open_step("plateaus")
        settle()
        picture("window")
        window.docks["plateaus"].raise_()
        window.widgets["steps"].open_step("")
        session.change_conditions("remove", ConditionSet())
        session.change_recipe("linear", session.document.recipe.with_values("histogram", axis="linear", high_g0=5.0))
        settle()
        picture("linear")
        window.docks["traces"].raise_()
        session.change_recipe(
            "after zero", session.document.recipe.with_values("histogram", axis="logarithmic", region="after_zero")
        )
        session.change(
            "rule",
            replace(
                session.document,
                recipe=session.document.recipe.with_values("selection", rules=["rupture_found and plateaus >= 1"]),
            ),
        )
        settle()
        picture("molecule")
        window.shut_down(forget=True)


if __name__ == "__main__":
    main()
