"""Kill a process that follows a folder while an experiment writes into it, again and again; see what is held.

    python tests/campaigns/kill_following.py --nights 10 --files 40 --seed 1

A writer with many habits (in one go, slowly, renamed when whole, size before content, in subfolders, the same content
twice, dated back, open for long) fills a folder.  Meanwhile a follower is started, killed (SIGKILL from outside at a
random moment, or by itself at one of its durable steps), and started again.  At the end the study must hold each
content exactly once, be whole, and have the same traces as a study gathered at once.
"""

from __future__ import annotations

import argparse
import os
import random
import shutil
import signal
import sys
import tempfile
import time
from pathlib import Path

import h5py
import numpy as np
from kill_study import suicidal

from meseta.study import Study, following, gather
from meseta.work import Work

HEAD = "displacement (nm),conductance (G0)\n"


def rows(seed: int) -> list[str]:
    noise = np.random.default_rng(seed).standard_normal(200)
    values = 10 ** (0.8 - np.linspace(0, 4, 200)) * (1 + 0.02 * noise)
    return [f"{number * 0.01:.3f},{value:.6e}\n" for number, value in enumerate(values)]


def write_one(folder: Path, number: int, chance: random.Random) -> None:
    """Write one file by one of the habits."""
    body, path = HEAD + "".join(rows(number)), folder / f"{number:03d}.csv"
    habit = chance.choice(["whole", "slow", "renamed", "size first", "subfolder", "twice", "dated back", "hdf5"])
    if habit == "slow":
        with path.open("w") as file:
            for part in (body[:500], body[500:2000], body[2000:]):
                file.write(part)
                file.flush()
                time.sleep(chance.uniform(0, 0.2))
    elif habit == "renamed":
        path.with_suffix(".csv.part").write_text(body)
        time.sleep(chance.uniform(0, 0.1))
        path.with_suffix(".csv.part").rename(path)
    elif habit == "size first":
        path.write_bytes(bytes(len(body)))
        time.sleep(chance.uniform(0, 0.1))
        path.write_text(body)
    elif habit == "subfolder":
        (folder / f"session {number % 3}").mkdir(exist_ok=True)
        (folder / f"session {number % 3}" / path.name).write_text(body)
    elif habit == "hdf5":
        with h5py.File(path.with_suffix(".h5"), "w") as stored:
            for trace in range(3):
                values = np.array([row.split(",") for row in rows(number * 10 + trace)], float)
                home = stored.create_group(f"trace_{trace}")
                home["conductance"], home["displacement"] = values[:, 1], values[:, 0]
                home["conductance"].attrs["unit"], home["displacement"].attrs["unit"] = "G0", "nm"
                stored.flush()
                time.sleep(chance.uniform(0, 0.1))
    else:
        path.write_text(body)
        if habit == "twice":
            path.with_stem(f"{path.stem} copy").write_text(body)
        if habit == "dated back":
            os.utime(path, (1e9, 1e9))


def follower(folder: Path, study: Path, seed: int) -> int:
    """Follow in a child process; return its id."""
    process = os.fork()
    if process:
        return process
    try:
        if seed % 2:
            suicidal(random.Random(seed))
        following.FOLLOW_SECONDS = 0.05
        gather([folder], study, work=Work(threads=1), follow=True)
    except BaseException as error:  # the parent sees the exit code
        print(f"follower {seed}: {type(error).__name__}: {error}", flush=True)
        os._exit(1)
    os._exit(0)


def contents(study: Path) -> dict[str, bytes]:
    """Return the samples of each recording by its checksum; raise where the study is not whole."""
    with Study.open(study) as opened:
        assert not opened.read_only, opened.why_read_only
        assert opened.check(Work(threads=1)) == []
        shas = [source.sha256 for source in opened.sources]
        assert len(set(shas)) == len(shas), "a recording is there twice"
        traces = opened.traces()
        rows_of = traces.table["source"].astype(int)
        found = dict.fromkeys(shas, b"")
        for trace, row in enumerate(rows_of):
            start, stop = traces.offsets[trace], traces.offsets[trace + 1]
            found[shas[row]] += traces.conductance[start:stop].tobytes()
        return found


def one_night(folder: Path, files: int, seed: int) -> tuple[str, int]:
    """Return what is wrong, or nothing, and the number of kills."""
    night, study, chance, kills = folder / "night", folder / "s.h5", random.Random(seed), 0
    night.mkdir()

    process = os.fork()
    if not process:
        own = random.Random(seed + 1)
        for number in range(files):
            write_one(night, number, own)
        os._exit(0)
    writing = True
    while writing or chance.random() < 0.7:
        child = follower(night, study, seed * 1000 + kills)
        end = time.monotonic() + chance.uniform(0.1, 3)
        ended = 0
        while time.monotonic() < end and not ended:
            ended, status = os.waitpid(child, os.WNOHANG)
            time.sleep(0.01)
        if not ended:
            os.kill(child, signal.SIGKILL)
            os.waitpid(child, 0)
        elif not os.WIFSIGNALED(status):
            return "a follower ended by itself", kills
        kills += 1
        writing = writing and os.waitpid(process, os.WNOHANG)[0] == 0
    held = contents(study) if study.exists() else {}
    _, bad = gather([night], study)
    gather([night], folder / "once.h5")
    once, now = contents(folder / "once.h5"), contents(study)
    if bad:
        return f"bad files: {bad[0]}", kills
    if not held.items() <= once.items():
        return "the follower had taken something that is in no file", kills
    return "" if now == once else "not the same as gathered at once", kills


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--nights", type=int, default=10)
    parser.add_argument("--files", type=int, default=40)
    parser.add_argument("--seed", type=int, default=1)
    given = parser.parse_args()
    failures = kills = 0
    for night in range(given.nights):
        folder = Path(tempfile.mkdtemp(prefix="meseta-follow-"))
        wrong, more = one_night(folder, given.files, given.seed * 100 + night)
        kills += more
        if wrong:
            failures += 1
            print(f"night {night}: {wrong} (kept in {folder})", flush=True)
        else:
            shutil.rmtree(folder)
    print(f"{given.nights} nights, {kills} kills, {failures} failures")
    return 1 if failures else 0


if __name__ == "__main__":
    sys.exit(main())
