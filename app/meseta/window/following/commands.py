"""The actions on following: begin, go on after a restart, end, list what was left out."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

from PySide6.QtWidgets import QFileDialog, QMessageBox

from meseta.errors import InputError, MesetaError
from meseta.recipe import Recipe
from meseta.window.file_commands import FileCommands
from meseta.window.following.left_out import LeftOut
from meseta.window.opening import Opened

if TYPE_CHECKING:
    from meseta.window.main_window import MainWindow

__all__ = ["FollowCommands"]

STUDIES = "Meseta study (*.h5)"


class FollowCommands(FileCommands):
    """The actions on files and on following."""

    def __init__(self, window: MainWindow, recovery: Path) -> None:
        super().__init__(window, recovery)
        self._left_out: LeftOut | None = None
        follower = window.follower
        follower.made.connect(self._made)
        follower.unsure.connect(self._settle)
        follower.failed.connect(self._not_followed)
        follower.changed.connect(self._refresh_left_out)

    # -- beginning ---------------------------------------------------------------------------------------------------

    def do_follow(self) -> None:
        """Ask for a folder, and for a study where none is open, and take in what is written there."""
        last = self._window.follower.remembered()
        known = self._window.follower.folder_for(self._session.study_path) or ("" if last is None else last.folder)
        folder = QFileDialog.getExistingDirectory(self._window, "Follow a folder", known)
        if not folder:
            return
        path = self._session.study_path or self._study_for(folder)
        if path:
            self.follow(folder, path)

    def _study_for(self, folder: str) -> str:
        """Ask for the study that the recordings go into; nothing where the user does not say."""
        suggested = Path(folder).parent / f"{self._session.name or Path(folder).name}.h5"
        options = QFileDialog.Option(0)
        if self._session.traces is None:  # a study that is there is gone on with
            options = QFileDialog.Option.DontConfirmOverwrite
        path, _ = QFileDialog.getSaveFileName(
            self._window, "The study that recordings are taken into", str(suggested), STUDIES, "", options
        )
        return path if not path or Path(path).suffix else f"{path}.h5"

    def follow(self, folder: str, path: str) -> None:
        """Follow a folder into a study.

        What is open and in no study yet is saved as that study first; else a study that is there is opened, and one
        that is not is made of the first files that are whole.
        """
        session, follower = self._session, self._window.follower
        if session.study_path and Path(session.study_path) == Path(path):
            follower.start(folder, path, self._window.keeper.study)
        elif session.traces is not None and not session.study_path:
            self.save_to(path, lambda: self.follow(folder, path))
        elif Path(path).exists():
            self._read([path], session.document.recipe, lambda: self.follow(folder, path))
        else:
            self._leave_open()
            follower.start(folder, path)

    def do_stop_following(self) -> None:
        """End following; what was taken in stays."""
        self._window.follower.stop()

    def offer_following(self) -> None:
        """Offer on the first page to go on with what was followed when the window ended."""
        last = self._window.follower.remembered()
        if last is not None and last.active:
            self._window.centre.first.offer("go_on_following", f"Go on following {Path(last.folder).name}")

    def do_go_on_following(self) -> None:
        """Follow again what was followed last."""
        last = self._window.follower.remembered()
        if last is None:
            raise InputError("no folder was followed yet", "", "choose File, Follow a folder")
        if self.may_leave():
            if self._session.study_path != last.study:
                self._leave_open()
            self.follow(last.folder, last.study)

    # -- what following brings ---------------------------------------------------------------------------------------

    def _made(self, opened: Opened) -> None:
        self._show_opened(opened)
        self._window.recent.add(list(opened.paths))

    def _settle(self, file: str) -> None:
        """Let the user say how the first file is read, and those like it."""
        check = self._file_check()
        self._on_accepted, self._on_left = self._settled, self._not_settled
        check.check([file], self._session.document.recipe)
        self._window.centre.show_check(check)

    def _settled(self, _: list[str], recipe: Recipe) -> None:
        self._leave_check()
        self._window.follower.agree(recipe)

    def _not_settled(self) -> None:
        self._window.follower.stop()
        self._leave_check()

    def _not_followed(self, error: MesetaError) -> None:
        self._window.status.complain(error)
        box = QMessageBox(QMessageBox.Icon.Warning, "Not followed", error.what, parent=self._window)
        box.setInformativeText("\n".join(part for part in (error.where, error.remedy) if part))
        box.open()

    # -- what was left out -------------------------------------------------------------------------------------------

    def do_left_out(self) -> None:
        """List the files that could not be read."""
        if self._left_out is None:
            self._left_out = LeftOut(self._window)
        self._left_out.show_files(self._errors())
        self._left_out.show()
        self._left_out.raise_()

    def _refresh_left_out(self) -> None:
        if self._left_out is not None and self._left_out.isVisible():
            self._left_out.show_files(self._errors())

    def _errors(self) -> list[MesetaError]:
        traces, followed = self._session.traces, self._window.follower.followed
        read: list[Any] = [] if traces is None else traces.notes.get("bad_files", [])
        errors: list[MesetaError] = [InputError(**one) for one in read]
        return errors + ([] if followed is None else list(followed.bad))
