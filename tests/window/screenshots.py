"""Renders the window in several sizes, light and dark, to be looked at.

    python tests/window/screenshots.py FOLDER [--traces N] [--only WORD]

Simulated recordings only.  Every picture is a state that a user meets: first page, a day's recording, a window drawn,
an open form, the linear axis, the tables, every view that is hidden at first.
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
        shoot_views(window, settle, picture)
        window.shut_down(forget=True)


SERIES = "0.9\t1e-3\t1e-4\ta\n1.15\t2.6e-4\t3e-5\tb\n1.4\t7e-5\t1e-5\tc\n1.65\t1.9e-5\t3e-6\td\n"


def shoot_views(window, settle, picture) -> None:
    """Shoot the views that are hidden at first, each with something in it."""
    from PySide6.QtGui import QGuiApplication

    from meseta.resources import sample
    from meseta.window.conditions import Condition, ConditionSet
    from meseta.window.opening import open_paths
    from meseta.window.peak_editing import PeakEditor
    from meseta.work import Work

    session = window.session
    recipe = type(session.document.recipe)()
    opened = open_paths([str(sample() / "night_raw.h5")], recipe, Work())
    session.change_recipe("defaults", recipe)
    session.open_traces(opened.traces, opened.name)
    settle()
    editor = PeakEditor.of(session)
    editor.add(5e-3)
    editor.choose(0)
    editor.bound(0, 1e-4, 6e-4)
    window.actions_by_key["view_residuals"].trigger()
    window.docks["peaks"].raise_()
    settle()
    picture("peaks")
    editor.forget()
    settle()
    editor.choose(0)
    for name in ("systematic", "analyses", "record", "lengths"):
        window.actions_by_key[f"view_{name}"].trigger()
        settle()
        picture(name)
        window.docks[name].hide()
    window.actions_by_key["view_correlation"].trigger()
    settle()
    window.widgets["correlation"].choose_bins(-3.7, 0.0)
    settle()
    picture("correlation")
    window.widgets["correlation"].switch.click()
    settle()
    picture("crossed")
    window.docks["correlation"].hide()
    window.actions_by_key["view_decay"].trigger()
    QGuiApplication.clipboard().setText(SERIES)
    window.widgets["decay"].paste()
    settle()
    picture("decay")
    window.docks["decay"].hide()
    window.actions_by_key["view_residuals"].trigger()
    window.actions_by_key["view_comparison"].trigger()
    session.change_conditions("draw a window", ConditionSet((Condition("plateau", 5e-5, 1e-3),)))
    settle()
    picture("comparison")
    window.widgets["comparison"].open_recording([str(sample() / "evening_blank_raw.h5")])
    settle()
    window.widgets["comparison"].show_as("difference")
    picture("blank")


if __name__ == "__main__":
    main()
