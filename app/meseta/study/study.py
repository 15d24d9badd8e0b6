"""Study: the one file that holds recordings, traces, recipe, decisions and history."""

from __future__ import annotations

import json
import os
import uuid
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from types import TracebackType
from typing import Self

import h5py

from meseta import __version__
from meseta.analysis import Analysis
from meseta.errors import OutputError, StudyError
from meseta.recipe import Recipe
from meseta.selection import Decisions
from meseta.study.chunks import BlockFile
from meseta.study.columns import json_text, write_text
from meseta.study.content import read_traces, write_traces
from meseta.study.pages import PagedFile, sync_folder, whole_log
from meseta.study.strict import read_attribute, read_text, reading
from meseta.traces import TraceSet
from meseta.work import Work

__all__ = ["FORMAT", "SCHEMA", "Study", "is_study", "write_study"]

FORMAT = "meseta study"
SCHEMA = 1
_LIBRARY = ("v110", "v110")  # metadata with checksums, readable by HDF5 1.10 and later


def is_study(path: str | Path) -> bool:
    """Return whether a file is a study of any version."""
    try:
        with Path(path).open("rb") as file:
            if file.read(8) != b"\x89HDF\r\n\x1a\n":
                return False
        with h5py.File(path, "r") as root:
            return str(root.attrs.get("format", "")) == FORMAT
    except (OSError, RuntimeError, ValueError):
        return False


def write_study(path: str | Path, analysis: Analysis, work: Work | None = None) -> None:
    """Write a new study with the traces, recipe and decisions of an analysis; whole or not at all."""
    work = work or Work()
    with _new_file(Path(path)) as root:
        write_traces(root, analysis.traces, work)
        write_text(root, "recipe", analysis.recipe.text())
        write_text(root, "decisions", json_text(analysis.decisions.plain()))


@contextmanager
def _new_file(path: Path) -> Iterator[h5py.File]:
    """Give an empty study under a temporary name, which takes its place if the block succeeds."""
    partial = path.with_name(f".{path.name}-{os.getpid()}-unfinished")
    try:
        partial.touch()
    except OSError as error:
        raise OutputError(f"cannot be made ({error.strerror})", str(path), "choose another place") from error
    try:
        with PagedFile(partial, writable=True, fresh=True) as paged:
            root = h5py.File(paged, "w", libver=_LIBRARY)
            try:
                root.attrs["format"] = FORMAT
                root.attrs["schema"] = SCHEMA
                root.attrs["written_by"] = __version__
                root.attrs["id"] = uuid.uuid4().hex
                yield root
                paged.check()
            except BaseException:
                paged.abandon()
                raise
            finally:
                root.close()
            paged.commit()
        partial.replace(path)
        sync_folder(path.parent)
    except BaseException:
        partial.unlink(missing_ok=True)
        raise


class Study:
    """A study file, open.  Use as a context manager, or :meth:`close` it."""

    def __init__(self, path: Path, read_only: bool) -> None:
        self.path, self.read_only = path, read_only
        self._file = BlockFile(path)
        with PagedFile(path, writable=False) as paged:
            log = whole_log(path)
            if log is not None:
                paged.apply(log)
            self._load(paged)

    def _load(self, paged: PagedFile) -> None:
        where = str(self.path)
        root = reading("the table of contents", where, lambda: h5py.File(paged, "r"))
        with root:
            self.schema = int(reading("the schema version", where, lambda: read_attribute(root, "schema")))
            if self.schema > SCHEMA:
                raise StudyError(
                    f"was written by a newer Meseta (schema {self.schema}, this one knows up to {SCHEMA})",
                    where,
                    "update Meseta",
                )
            text = reading("the recipe", where, lambda: read_text(root, "recipe"))
            self.recipe = Recipe.parse(text, f"{where}: recipe")
            plain = reading("the decisions", where, lambda: json.loads(read_text(root, "decisions")))
            self.decisions = Decisions.parse(plain)
            self._traces = reading("the traces", where, lambda: read_traces(root, self._file))

    @classmethod
    def open(cls, path: str | Path, read_only: bool = False) -> Study:
        """Open a study.

        Raises
        ------
        StudyError
            Where it is none, is damaged, or was written by a newer version.
        """
        path = Path(path)
        if not path.exists():
            raise StudyError("does not exist", str(path), "check the path")
        if not is_study(path):
            raise StudyError("is not a Meseta study", str(path), "make one with `meseta gather` or `meseta run`")
        return cls(path, read_only)

    @classmethod
    def create(cls, path: str | Path, analysis: Analysis, work: Work | None = None) -> Study:
        """Write a new study and open it."""
        write_study(path, analysis, work)
        return cls.open(path)

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def close(self) -> None:
        """Let go of the file."""

    def traces(self, work: Work | None = None) -> TraceSet:
        """Return the traces."""
        return self._traces

    def analysis(self, recipe: Recipe | None = None, work: Work | None = None) -> Analysis:
        """Return the analysis of this study, by its own recipe or another one."""
        return Analysis(self.traces(work), recipe or self.recipe, self.decisions)
