"""Kill a process that writes a study, at random moments, and see that nothing it had reported is lost.

    python tests/campaigns/kill_study.py --kills 200 --seed 1

A child opens a study and decides, undoes, saves and rewrites at random.  After each step that returned it reports, on
a pipe, the entry and a hash of the state.  The parent kills it (SIGKILL) at a random moment, opens the study, and
compares: every reported entry is there with the same state, every sample is whole, nothing is damaged.  The next
child goes on with what it finds.  Every other child kills itself instead, just before or after a random one of its
synchronisations, removals and renamings, so that the short moments within a save are hit as well.
"""

from __future__ import annotations

import argparse
import json
import os
import random
import select
import shutil
import signal
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

from meseta.analysis import Analysis
from meseta.selection import Event
from meseta.study import Study, write_study
from meseta.traces import TraceSet
from meseta.work import Work


def build(path: Path, seed: int) -> None:
    rng = np.random.default_rng(seed)
    rows = [10 ** (1 - 7 * np.linspace(0, 1, 4000)) * (1 + 0.05 * rng.standard_normal(4000)) for _ in range(200)]
    write_study(path, Analysis(TraceSet.from_arrays(rows, step_nm=0.001)))


def state_hash(study: Study) -> str:
    return study.recipe.key([name for name, _ in study.recipe.sections()]) + study.decisions.key()


def one_step(study: Study, chance: random.Random) -> str:
    """Do one random thing; return what was done."""
    identities = study.traces().identities()
    some = chance.sample(identities, chance.choice([1, 1, 1, 5, 100]))
    step = chance.choice(
        ["reject", "keep", "group", "event", "recipe", "undo", "redo", "name", "save", "save", "rewrite"]
    )
    if step == "reject":
        study.reject(some, f"reason {chance.random()}")
    elif step == "keep":
        study.keep(some)
    elif step == "group":
        study.change(decisions=study.decisions.with_group(f"group {chance.randrange(5)}", some, "#336699", "circle"))
    elif step == "event":
        study.change(decisions=study.decisions.with_event(Event(some[0], f"tip {chance.randrange(9)}", "2026-01-02")))
    elif step == "recipe":
        study.change(recipe=study.recipe.with_settings([f"plateaus.minimum_length_nm={chance.uniform(0.01, 0.5)}"]))
    elif step == "undo":
        study.undo()
    elif step == "redo":
        study.redo()
    elif step == "name":
        study.name(f"name {chance.randrange(100)}")
    elif step == "save":
        study.save()
    else:
        study.rewrite(Work(threads=1))
    return step


def suicidal(chance: random.Random) -> None:
    """Make this process kill itself at a random one of its durable steps."""

    def fatal(function):
        def wrapped(*arguments, **named):
            if chance.random() < 0.03:
                os.kill(os.getpid(), signal.SIGKILL)
            outcome = function(*arguments, **named)
            if chance.random() < 0.03:
                os.kill(os.getpid(), signal.SIGKILL)
            return outcome

        return wrapped

    os.fsync, os.ftruncate = fatal(os.fsync), fatal(os.ftruncate)
    Path.unlink, Path.replace = fatal(Path.unlink), fatal(Path.replace)


def child(path: Path, seed: int, pipe: int) -> None:
    """Work until killed, reporting what is kept."""
    chance = random.Random(seed)
    if seed % 2:
        suicidal(chance)
    study = Study.open(path)
    while True:
        step = one_step(study, chance)
        last = study.history.entries[-1]
        told = {"step": step, "entry": last.number, "state": state_hash(study), "text": last.text}
        os.write(pipe, (json.dumps(told) + "\n").encode())


def killed_run(path: Path, seed: int, longest: float) -> list[dict]:
    """Run a child, kill it at a random moment, return what it had reported."""
    reader, writer = os.pipe()
    process = os.fork()
    if process == 0:
        os.close(reader)
        status = 1
        try:
            child(path, seed, writer)
        except BaseException as error:  # the parent must hear of it, whatever it is
            os.write(writer, (json.dumps({"failed": f"{type(error).__name__}: {error}"}) + "\n").encode())
        finally:
            os._exit(status)
    os.close(writer)
    body = b""
    body += os.read(reader, 1 << 16)  # the first report: it is at work
    end = time.monotonic() + random.Random(seed).uniform(0, longest)
    if seed % 2:
        end += 60  # it kills itself
    while (left := end - time.monotonic()) > 0:
        if select.select([reader], [], [], left)[0]:
            more = os.read(reader, 1 << 16)
            if not more:
                break
            body += more
    os.kill(process, signal.SIGKILL)
    os.waitpid(process, 0)
    while more := os.read(reader, 1 << 16):
        body += more
    os.close(reader)
    return [json.loads(line) for line in body.decode().splitlines()]


def check(path: Path, reports: list[dict], samples: float) -> str:
    """Open the study after a kill and compare it with what was reported; return what is wrong, or nothing."""
    if not reports:
        return "" if Study.open(path, read_only=True).check(Work(threads=1)) == [] else "damage"
    if any("failed" in report for report in reports):
        return f"the child failed: {reports[-1]['failed']}"
    with Study.open(path) as study:
        if study.read_only:
            return f"opened read-only: {study.why_read_only} {study.damage}"
        if study.check(Work(threads=1)):
            return f"damage: {study.check(Work(threads=1))}"
        if study.traces().conductance.sum(dtype=np.float64) != samples:
            return "samples have changed"
        last = reports[-1]
        entries = study.history.entries
        if last["entry"] >= len(entries):
            return f"entry {last['entry']} was reported and is lost"
        for report in reports:
            if entries[report["entry"]].text != report["text"]:
                return f"entry {report['entry']} was '{report['text']}' and is '{entries[report['entry']].text}'"
        if len(entries) > last["entry"] + 2:
            return "there are more entries than one that was never reported"
        study.return_to(last["entry"])
        if state_hash(study) != last["state"]:
            return f"the state of entry {last['entry']} is another one"
    return ""


def campaign(kills: int, seed: int, longest: float, folder: Path) -> tuple[int, int, dict[str, int]]:
    """Return failures, reports checked, and how the kills fell."""
    path = folder / "study.h5"
    build(path, seed)
    samples = Study.open(path, read_only=True).traces().conductance.sum(dtype=np.float64)
    failures, reported, found = 0, 0, {"redo log left": 0, "unfinished file left": 0, "journal left": 0}
    for number in range(kills):
        reports = killed_run(path, seed * 1000 + number, longest)
        reported += len(reports)
        names = [one.name for one in folder.iterdir()]
        found["redo log left"] += any(name.endswith(".redo") for name in names)
        found["unfinished file left"] += any(name.endswith("unfinished") for name in names)
        found["journal left"] += any(name.endswith(".journal") for name in names)
        wrong = check(path, reports, samples)
        if wrong:
            failures += 1
            print(f"kill {number}: {wrong}", flush=True)
    return failures, reported, found


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--kills", type=int, default=200)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--longest", type=float, default=0.4, help="longest time before a kill, in seconds")
    given = parser.parse_args()
    folder = Path(tempfile.mkdtemp(prefix="meseta-kill-"))
    try:
        failures, reported, found = campaign(given.kills, given.seed, given.longest, folder)
    finally:
        shutil.rmtree(folder)
    told = ", ".join(f"{name} {count}" for name, count in found.items())
    print(f"{given.kills} kills, {reported} reported steps, {failures} failures; {told}")
    return 1 if failures else 0


if __name__ == "__main__":
    sys.exit(main())
