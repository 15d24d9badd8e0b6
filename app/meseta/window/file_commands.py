"""What the actions on files do: opening, growing while reading, saving, exporting, leaving."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy.typing as npt
from PySide6.QtCore import QObject
from PySide6.QtWidgets import QFileDialog, QInputDialog, QMessageBox

from meseta import typeset
from meseta.errors import InputError, MesetaError
from meseta.recipe import Recipe
from meseta.resources import sample
from meseta.selection.decisions import Decisions
from meseta.window.conditions import ConditionSet
from meseta.window.jobs import Channel
from meseta.window.opening import Opened, export_results, open_paths, read_unfinished, write_columns
from meseta.window.places import Place, Places
from meseta.window.session import Document

if TYPE_CHECKING:
    from meseta.window.filecheck import FileCheck
    from meseta.window.main_window import MainWindow

__all__ = ["FileCommands"]

OPEN = Channel("open", files=True)
SAVE = Channel("save", files=True)
EXPORT = Channel("export", files=True)

SAMPLES = {
    "night_raw.h5": "A night in V-17: one continuous recording of 520 openings",
    "evening_blank_raw.h5": "The evening before: the bare solvent, no molecule",
    "bench_check": "A check of the bench: 20 openings of the metal, one CSV file each",
}


class FileCommands(QObject):
    """The actions on files."""

    def __init__(self, window: MainWindow, recovery: Path) -> None:
        super().__init__(window)
        self._window, self._session, self._recovery = window, window.session, recovery
        self._check: FileCheck | None = None
        self._on_accepted: Callable[[list[str], Recipe], None] = self._read
        self._on_left: Callable[[], None] = self._leave_check
        self._places = Places(window.settings)
        window.jobs.idle.connect(self._reading_stopped)

    def do_open(self) -> None:
        """Ask for files and open them."""
        paths, _ = QFileDialog.getOpenFileNames(self._window, "Open recordings or a study")
        if paths:
            self.check_paths(paths)

    def do_open_folder(self) -> None:
        """Ask for a folder and open it."""
        path = QFileDialog.getExistingDirectory(self._window, "Open a folder of recordings")
        if path:
            self.check_paths([path])

    def do_open_sample(self) -> None:
        """Open the bundled recordings."""
        folder = sample()
        names = [name for name in SAMPLES if (folder / name).exists()]
        if not names:
            raise InputError("the bundled recordings are missing", str(folder), "install Meseta again")
        words = [SAMPLES[name] for name in names]
        chosen, given = QInputDialog.getItem(self._window, "Bundled recordings", "Which one?", words, 0, False)
        if given:
            self.check_paths([str(folder / names[words.index(chosen)])])

    def check_paths(self, paths: list[str], recipe: Recipe | None = None) -> None:
        """Show what files were taken for before they are read; a study is opened at once."""
        if not paths or not self.may_leave():
            return
        chosen = recipe or self._session.document.recipe

        def task(_: Any, __: Callable[[Any], None]) -> bool:
            from meseta.study import is_study

            return len(paths) == 1 and Path(paths[0]).is_file() and is_study(paths[0])

        def done(study: bool) -> None:
            if study:
                self._read(paths, chosen)
            else:
                self._on_accepted, self._on_left = self._read, self._leave_check
                self._file_check().check(paths, chosen)
                self._window.centre.show_check(self._file_check())

        self._window.jobs.submit(OPEN, "looking at the files", task, done, self._not_opened)

    def _file_check(self) -> FileCheck:
        if self._check is None:
            from meseta.window.filecheck import FileCheck

            self._check = FileCheck(self._window)
            self._check.accepted.connect(lambda paths, recipe: self._on_accepted(paths, recipe))
            self._check.left.connect(lambda: self._on_left())
        return self._check

    def _leave_check(self) -> None:
        if self._session.traces is None:
            self._window.centre.show_first()
        else:
            self._window.centre.show_spine()

    def open_paths(self, paths: list[str], recipe: Recipe | None = None) -> None:
        """Open files off the window's thread; what is read first is shown while reading goes on."""
        if paths and self.may_leave():
            self._read(paths, recipe or self._session.document.recipe)

    def _read(self, paths: list[str], chosen: Recipe, then: Callable[[], None] | None = None) -> None:
        def done(opened: Opened) -> None:
            self._opened(opened)
            if then is not None:
                then()

        def task(work: Any, part: Callable[[Any], None]) -> Opened:
            return open_paths(paths, chosen, work, part)

        self._window.say(f"opening {Path(paths[0]).name} …")
        self._window.jobs.submit(OPEN, "reading files", task, done, self._not_opened, self._opened_in_part)

    def _opened_in_part(self, opened: Opened) -> None:
        """Show what is read so far; what comes while the last of it is still counted is passed over."""
        session = self._session
        if not session.growing:
            self._show_opened(opened)
        elif not session.pipeline.working:
            session.replace_traces(opened.traces, opened.recipe, growing=True)
        self._window.say(f"{typeset.integer(opened.files_read)} files read")

    def _opened(self, opened: Opened) -> None:
        if self._session.growing:
            self._session.replace_traces(opened.traces, opened.recipe)
        else:
            self._show_opened(opened)
        self._window.recent.add(list(opened.paths))
        traces = opened.traces
        self._window.say(f"{typeset.integer(traces.traces)} traces, {typeset.integer(traces.samples)} samples")

    def _show_opened(self, opened: Opened, place: Place | None = None) -> None:
        self.remember_place()
        if not self._window.follower.follows_into(opened.study):
            self._window.follower.stop()
        self._window.status.complain(None)
        place = place or self._places.recall(opened.paths)
        conditions = ConditionSet() if place is None else place.conditions
        document = Document(opened.recipe, opened.decisions, conditions)
        path = opened.paths[0] if opened.study is not None else ""
        growing = opened.files_read > 0
        self._session.open_traces(
            opened.traces, opened.name, document, study_path=path, derive=opened.derive, growing=growing
        )
        self._window.keeper.open(opened.study, opened.paths)
        if place is not None:
            place.show(self._session)

    def remember_place(self) -> None:
        """Keep where the user is in the open recording, to come back there."""
        self._places.remember(self._window.keeper.paths, Place.of(self._session))

    def _reading_stopped(self) -> None:
        """Go on with what was read where the user stopped the reading."""
        session = self._session
        if session.growing and session.traces is not None and not self._window.jobs.runs(OPEN):
            session.growing = False
            session.states_changed.emit()
            self._window.say(f"reading stopped: {typeset.integer(session.traces.traces)} traces; F5 works them out")

    def _not_opened(self, error: MesetaError) -> None:
        self._session.growing = False
        self._window.status.complain(error)
        box = QMessageBox(QMessageBox.Icon.Warning, "Not opened", error.what, parent=self._window)
        box.setInformativeText("\n".join(part for part in (error.where, error.remedy) if part))
        box.open()

    def do_save(self) -> None:
        """Save into the open study, or ask for a name."""
        if not self._session.study_path:
            self.do_save_as()
            return
        self._window.keeper.save(lambda _: self._saved(self._session.study_path))

    def do_save_as(self) -> None:
        """Ask for a name and write a study."""
        suggested = f"{self._session.name}.h5"
        path, _ = QFileDialog.getSaveFileName(self._window, "Save the study", suggested, "Meseta study (*.h5)")
        if path:
            self.save_to(path if Path(path).suffix else f"{path}.h5")

    def save_to(self, path: str, then: Callable[[], None] | None = None) -> None:
        """Write a study and go on in it; a folder that is followed is followed into that one from then on."""
        still = self._window.follower.still
        analysis, files = self._session.analysis, self._window.keeper.paths
        if analysis is None:
            return

        def task(work: Any, _: Callable[[Any], None]) -> Any:
            from meseta.study import Study, write_study
            from meseta.study.arriving import folders_of

            with still:
                write_study(path, analysis, work, files=files)
            return Study.open(path, folders=folders_of(files))

        def done(study: Any) -> None:
            self._saved_as(study, path)
            if then is not None:
                then()

        self._window.jobs.submit(SAVE, "saving the study", task, done)

    def _saved_as(self, study: Any, path: str) -> None:
        self._session.study_path, self._session.name = path, Path(path).stem
        self._session.derive = Opened(study.traces(), study.recipe, study.decisions, "", (path,), study).derive
        self._window.keeper.open(study, (path,))
        self._window.keeper.forget_recovery()
        self._window.recent.add([path])
        followed = self._window.follower.followed
        if followed is not None:
            self._window.follower.start(followed.folder, path, study)
        self._saved(path)

    def _saved(self, path: str) -> None:
        self._session.undo.setClean()
        self._session.states_changed.emit()
        self._window.say(f"saved in {path}")

    def do_export(self) -> None:
        """Ask for a folder and write the whole result there."""
        parent = QFileDialog.getExistingDirectory(self._window, "Export into an empty folder or an earlier result")
        if parent:
            self.export_to(parent)

    def export_to(self, folder: str) -> None:
        """Write the whole result into a folder."""
        still = self._window.follower.still
        analysis, title, files = self._session.analysis, self._session.name, self._window.keeper.paths
        if analysis is None:
            return

        def task(work: Any, _: Callable[[Any], None]) -> str:
            with still:
                return export_results(analysis, folder, title, files, work)

        self._window.jobs.submit(EXPORT, "exporting", task, lambda path: self._window.say(f"results written to {path}"))

    def export_columns(self, name: str, columns: Mapping[str, npt.NDArray[Any]]) -> None:
        """Ask where, and write columns as CSV."""
        path, _ = QFileDialog.getSaveFileName(self._window, f"Export the {name}", f"{name}.csv", "CSV (*.csv)")
        if not path:
            return

        def task(work: Any, _: Callable[[Any], None]) -> str:
            return write_columns(path, columns, work)

        self._window.jobs.submit(EXPORT, "exporting", task, lambda written: self._window.say(f"written to {written}"))

    def do_save_recipe(self) -> None:
        """Write all settings as TOML."""
        path, _ = QFileDialog.getSaveFileName(self._window, "Save the recipe", "recipe.toml", "Recipe (*.toml)")
        if path:
            self._session.document.recipe.save(path)
            self._window.say(f"recipe written to {path}")

    def do_load_recipe(self) -> None:
        """Take all settings from a TOML file."""
        path, _ = QFileDialog.getOpenFileName(self._window, "Load a recipe", "", "Recipe (*.toml)")
        if path:
            self._session.change_recipe(f"load recipe {Path(path).name}", Recipe.load(path))

    def do_close(self) -> None:
        """Close the recording."""
        if self.may_leave():
            self._leave_open()

    def _leave_open(self) -> None:
        self.remember_place()
        self._window.follower.stop()
        self._window.jobs.cancel()
        self._session.close_traces()
        self._window.keeper.open(None, ())
        self._window.keeper.forget_recovery()

    def do_quit(self) -> None:
        """Close the window."""
        self._window.close()

    def may_leave(self) -> bool:
        """Ask what to do with changes that are not saved; True where the user goes on.

        A study keeps every change in its journal, so leaving it loses nothing and asks nothing.
        """
        session = self._session
        if session.traces is None or session.undo.isClean() or session.study_path:
            return True
        box = QMessageBox(self._window)
        box.setWindowTitle("Not saved")
        box.setText("The recording has changes that are in no study yet.")
        box.setInformativeText("Recordings themselves are never changed; settings, decisions and groups would be lost.")
        buttons = QMessageBox.StandardButton
        box.setStandardButtons(buttons.Discard | buttons.Cancel)
        box.setDefaultButton(buttons.Cancel)
        return bool(box.exec() == buttons.Discard)

    def offer_recovery(self) -> None:
        """Offer what an interrupted session left behind, on the first page."""
        if read_unfinished(self._recovery) is not None:
            self._window.centre.first.offer("recover", "Take up the interrupted session")

    def do_recover(self) -> None:
        """Open again what was open, with what was set and decided."""
        unfinished = read_unfinished(self._recovery)
        if unfinished is None:
            return
        recipe = Recipe.parse(unfinished.recipe, "the interrupted session")
        decisions = Decisions.parse(unfinished.decisions)

        def task(work: Any, _: Callable[[Any], None]) -> Opened:
            return replace(open_paths(unfinished.paths, recipe, work), recipe=recipe, decisions=decisions)

        def done(opened: Opened) -> None:
            self._show_opened(opened, Place.parse(unfinished.place))
            self._session.undo.resetClean()  # what was taken up is in no study yet

        self._window.jobs.submit(OPEN, "reading files", task, done, self._not_opened)
