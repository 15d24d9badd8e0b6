"""The window on the standard workload: next trace, dragged window, longest block of the window's thread, memory, start.

    python tests/benchmarks/bench_window.py [--traces N]

Prints one line a row of the design, with the aim.  Offscreen by default; with QT_QPA_PLATFORM=xcb under a display it is
the real thing.  The numbers shown are asserted to be the engine's; times are printed, never asserted.
"""

from __future__ import annotations

import argparse
import os
import resource
import statistics
import sys
import tempfile
import threading
import time
from dataclasses import replace
from pathlib import Path

os.environ.setdefault("QT_QPA_PLATFORM", "offscreen")
START = time.perf_counter()


class Watchdog(threading.Thread):
    """Measures how long the window's thread is deaf: a timer there beats every 2 ms, this takes the gaps."""

    def __init__(self, application) -> None:
        from PySide6.QtCore import QTimer

        super().__init__(daemon=True)
        self.gaps: list[tuple[float, float, str]] = []
        self.label, self._last, self._worked = "", time.perf_counter(), time.thread_time()
        self._timer = QTimer(application)
        self._timer.setInterval(2)
        self._timer.timeout.connect(self._beat)
        self._timer.start()

    def _beat(self) -> None:
        now, worked = time.perf_counter(), time.thread_time()
        self.gaps.append((now - self._last, worked - self._worked, self.label))
        self._last, self._worked = now, worked

    def longest(self, label: str) -> tuple[float, float, float]:
        """Return the longest and the 99.9th percentile gap under a label, and the most work within one gap, in ms."""
        chosen = [(gap * 1000, work * 1000) for gap, work, name in self.gaps if name == label] or [(0.0, 0.0)]
        gaps = sorted(gap for gap, _ in chosen)
        return gaps[-1], gaps[min(int(len(gaps) * 0.999), len(gaps) - 1)], max(work for _, work in chosen)


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("--traces", type=int, default=10_000)
    options = parser.parse_args()
    from PySide6.QtCore import QSettings

    from meseta.window.application import make_application, make_window, prepare

    application = make_application()
    folder = tempfile.TemporaryDirectory()
    settings = QSettings(str(Path(folder.name) / "window.ini"), QSettings.Format.IniFormat)
    window = make_window(application, settings, Path(folder.name) / "unfinished.json")
    window.resize(1920, 1080)
    window.show()
    application.processEvents()
    say("window shown after start of Python", time.perf_counter() - START, "s", "2 s warm")
    prepare(window)
    settle(application, window)
    baseline = memory()
    traces = workload(options.traces)
    size = (traces.samples * 4) / 1e6
    loaded = memory()
    watchdog = Watchdog(application)
    run(application, window, watchdog, traces)
    say(f"memory above baseline for {size:.0f} MB of traces", memory() - baseline, "MB", f"{2 * size:.0f} MB", 0)
    say("  of which the traces as simulated", loaded - baseline, "MB", "", 0)
    window.session.undo.setClean()
    window.close()


def workload(traces: int):
    from meseta.simulate import standard_workload

    return standard_workload(traces)


def run(application, window, watchdog, traces) -> None:
    import numpy as np

    from meseta import histograms
    from meseta.window.conditions import Condition, ConditionSet
    from meseta.window.session import Hover

    session = window.session
    watchdog.label = "open and work out everything"
    begin = time.perf_counter()
    session.open_traces(traces, "standard workload")
    while session.result("histogram") is None:
        application.processEvents()
    say("first histogram after opening", time.perf_counter() - begin, "s", "3 s")
    settle(application, window)
    say("everything worked out after", time.perf_counter() - begin, "s", "")
    watchdog.label = "walk"
    wall, own = walk(application, window, 100)
    say("next trace, drawn (median of 100)", wall * 1000, "ms", "16 ms")
    say("  of which the processor worked for the window's thread", own * 1000, "ms", "")
    watchdog.label = "drag"
    times, own = [], []
    for turn in range(30):
        condition = Condition("plateau", 1e-4 * 1.02**turn, 1e-3 * 1.02**turn)
        begin, worked = time.perf_counter(), time.thread_time()
        session.drag(replace(session.document, conditions=ConditionSet((condition,))))
        arrived = session.subset
        while session.subset is arrived:
            application.processEvents()
        repaint(window)
        times.append(time.perf_counter() - begin)
        own.append(time.thread_time() - worked)
    say("dragged window to redrawn views (median of 30)", statistics.median(times) * 1000, "ms", "50 ms")
    say("  of which the processor worked for the window's thread", statistics.median(own) * 1000, "ms", "")
    session.settle("draw")
    settle(application, window)
    expected = histograms.conductance_histogram(
        session.analysis.result("counts"), session.subset.mask, session.document.recipe.histogram, None
    )
    assert np.array_equal(expected.counts, session.subset.histogram.counts)
    watchdog.label = "hover"
    for place in range(200):
        session.hover(Hover(-6 + place * 0.03, 0.1))
        application.processEvents()
    watchdog.label = "change the sensitivity"
    session.change_setting("plateaus", "sensitivity", 6.0, "Sensitivity to 6")
    settle(application, window)
    watchdog.label = "idle"
    for label in ("open and work out everything", "walk", "drag", "hover", "change the sensitivity"):
        longest, usual, work = watchdog.longest(label)
        say(f"longest block of the window's thread: {label} (99.9 %: {usual:.0f} ms)", longest, "ms", "50 ms")
        say("  most work of the window's thread without a look at its events", work, "ms", "")


def walk(application, window, count: int) -> tuple[float, float]:
    """Return the median time to the next trace on the clock, and on the processor for the window's thread alone."""
    times, own = [], []
    for _ in range(count):
        before = window.session.picture
        begin, worked = time.perf_counter(), time.thread_time()
        window.session.step(1)
        while window.session.picture is before:
            application.processEvents()
        window.widgets["trace"].plot.viewport().repaint()
        times.append(time.perf_counter() - begin)
        own.append(time.thread_time() - worked)
    return statistics.median(times), statistics.median(own)


def repaint(window) -> None:
    for name in ("trace", "displacement", "histogram", "strip"):
        window.widgets[name].plot.viewport().repaint()


def settle(application, window) -> None:
    quiet = 0
    while quiet < 5:
        application.processEvents()
        time.sleep(0.001)
        quiet = 0 if window.jobs.busy else quiet + 1


def memory() -> float:
    """Return the memory in use, in MB; the highest so far where the system does not tell."""
    try:
        pages = int(Path("/proc/self/statm").read_text().split()[1])
        return pages * resource.getpagesize() / 1e6
    except OSError:
        return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / (1e6 if sys.platform == "darwin" else 1e3)


def say(what: str, value: float, unit: str, aim: str, digits: int = 1) -> None:
    print(f"{what:<78} {value:10.{digits}f} {unit:<3} {'aim ' + aim if aim else ''}")


if __name__ == "__main__":
    main()
