"""Follows a folder in the window while a writer writes and a restless user does anything; then compares.

    python tests/campaigns/window_following.py --seconds 120 --seed 1

At the end the study must be whole and hold every file once, what the window shows must be what the study gives, and
nothing may have complained.  Prints how often each thing was done.
"""

from __future__ import annotations

import argparse
import os
import random
import sys
import tempfile
import threading
import time
from collections import Counter
from pathlib import Path

os.environ.setdefault("QT_QPA_PLATFORM", "offscreen")

DEEDS = ("setting", "resistance", "undo", "redo", "decide", "save", "save as", "stop", "walk", "escape")


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--seconds", type=float, default=120)
    parser.add_argument("--seed", type=int, default=1)
    options = parser.parse_args()
    with tempfile.TemporaryDirectory() as place:
        sys.exit(campaign(Path(place), options.seconds, options.seed))


def campaign(place: Path, seconds: float, seed: int) -> int:
    import numpy as np
    from PySide6.QtCore import QSettings

    from meseta.study import Study
    from meseta.window.application import make_application, make_window
    from meseta.window.following import follower

    follower.LOOK_SECOND = follower.GROW_SECOND = 0.05
    night, study = place / "night", place / "study0.h5"
    night.mkdir()
    application = make_application()
    settings = QSettings(str(place / "window.ini"), QSettings.Format.IniFormat)
    window = make_window(application, settings, place / "unfinished.json")
    window.show()
    session, chance, done, complaints = window.session, random.Random(seed), Counter(), []
    for signal in (window.jobs.failed, window.keeper.failed, session.problem, window.follower.failed):
        signal.connect(lambda error: complaints.append(str(error)))

    def spin(condition, most=300.0) -> bool:
        end = time.monotonic() + most
        while not condition() and time.monotonic() < end:
            application.processEvents()
            time.sleep(0.001)
        return condition()

    end = time.monotonic() + seconds
    writer = threading.Thread(target=write, args=(night, end, random.Random(seed)))
    writer.start()
    window.commands.follow(str(night), str(study))
    assert spin(lambda: session.traces is not None or window.centre.check is not None)
    assert session.traces is not None, window.centre.check.picture.sentences()
    saves = 0

    def start() -> None:
        window.follower.start(str(night), session.study_path, window.keeper.study)

    while time.monotonic() < end:
        deed = chance.choice(
            ["setting", "resistance", "undo", "redo", "decide", "save", "save as", "stop", "walk", "escape"]
        )
        done[deed] += 1
        if deed == "setting":
            value = chance.choice([4.0, 5.0, 6.0])
            session.change_setting("plateaus", "sensitivity", value, f"Sensitivity to {value:g}")
        elif deed == "resistance":
            value = chance.choice([100.0, 200.0])
            session.change_setting("calibration", "series_resistance_ohm", value, f"Resistance to {value:g}")
        elif deed == "undo":
            session.undo.undo()
        elif deed == "redo":
            session.undo.redo()
        elif deed == "decide":
            window.commands.decide([chance.randrange(session.traces.traces)], chance.choice([True, False, None]))
        elif deed == "save":
            window.run_action("save")
        elif deed == "save as" and chance.random() < 0.2:
            saves += 1
            path = str(place / f"study{saves}.h5")
            window.commands.save_to(path)
            saved = spin(lambda path=path: session.study_path == path or bool(complaints), 60.0)
            if not saved or complaints:
                break
        elif deed == "stop" and chance.random() < 0.3:
            window.follower.stop()
            start()
        elif deed == "walk":
            session.step(chance.choice([-1, 1]))
        elif deed == "escape":
            window.run_action("stop")
        pause = time.monotonic() + chance.choice([0.0, 0.02, 0.3, 1.0])
        spin(lambda pause=pause: time.monotonic() > pause)
    writer.join()
    files = len(list(night.glob("*.csv")))
    window.run_action("recompute")
    shown = spin(lambda: session.traces.traces == files and session.state("peaks") == "current", 120.0)
    window.follower.stop()
    window.run_action("save")
    spin(lambda: not window.jobs.busy)
    recipe, decisions, traces = session.document.recipe, session.document.decisions, session.traces
    path = session.study_path
    window.session.undo.setClean()
    window.close()
    with Study.open(path, read_only=True) as kept:
        names = [source.name for source in kept.sources]
        same = np.array_equal(kept.traces().conductance, traces.conductance, equal_nan=True)
        verdict = {
            "all shown": shown,
            "every file once": sorted(names) == sorted(one.name for one in night.glob("*.csv")),
            "whole": kept.check() == [],
            "same recipe": kept.recipe == recipe,
            "same decisions": kept.decisions == decisions,
            "same traces": same,
            "no complaint": not complaints,
        }
    print(f"{files} files, {dict(done)}, saved as {saves} times")
    print(verdict, *complaints[:10], sep="\n")
    return 0 if all(verdict.values()) else 1


def write(night: Path, end: float, chance: random.Random) -> None:
    """Write recordings now and then, some in pieces."""
    import numpy as np

    number = 0
    while time.monotonic() < end - 3 or not number:
        noise = np.random.default_rng(number).standard_normal(300)
        values = 10 ** (0.8 - np.linspace(0, 5, 300)) * (1 + 0.02 * noise)
        rows = [f"{row * 0.01:.3f},{value:.6e}\n" for row, value in enumerate(values)]
        with (night / f"{number:04d}.csv").open("w") as file:
            file.write("displacement (nm),conductance (G0)\n")
            for first in range(0, len(rows), 100):
                file.writelines(rows[first : first + 100])
                if chance.random() < 0.2:
                    file.flush()
                    time.sleep(0.1)
        number += 1
        time.sleep(chance.choice([0.0, 0.05, 0.5]))


if __name__ == "__main__":
    main()
