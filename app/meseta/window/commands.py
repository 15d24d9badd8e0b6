"""What the actions do: one method an action, named ``do_`` and its key."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
from PySide6.QtCore import QObject
from PySide6.QtWidgets import QFileDialog, QInputDialog, QMessageBox

from meseta import __version__, typeset
from meseta.errors import InputError, MesetaError
from meseta.recipe import Recipe
from meseta.resources import sample
from meseta.selection import Decisions, Event
from meseta.window.filecheck import FileCheck
from meseta.window.finder import ActionFinder, keys_page
from meseta.window.groups import with_new_group
from meseta.window.jobs import Channel
from meseta.window.opening import Opened, export_results, open_paths, read_unfinished, write_columns
from meseta.window.peak_editing import PeakEditor
from meseta.window.session import Document, Span
from meseta.window.views.peaks.dialog import edit_peak

if TYPE_CHECKING:
    from meseta.window.main_window import MainWindow

__all__ = ["Commands"]

OPEN = Channel("open")
SAVE = Channel("save")
EXPORT = Channel("export")

SAMPLES = {
    "night_raw.h5": "A night in V-17: one continuous recording of 520 openings",
    "evening_blank_raw.h5": "The evening before: the bare solvent, no molecule",
    "bench_check": "A check of the bench: 20 openings of the metal, one CSV file each",
}


class Commands(QObject):
    """The actions of the window."""

    def __init__(self, window: MainWindow, recovery: Path) -> None:
        super().__init__(window)
        self._window, self._session, self._recovery = window, window.session, recovery
        self._growing = False
        self._off: tuple[bool, ...] = ()
        self._check: FileCheck | None = None
        self._peaks = PeakEditor.of(window.session)

    # -- files -------------------------------------------------------------------------------------------------------

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
                self._file_check().check(paths, chosen)
                self._window.centre.show_check(self._file_check())

        self._window.jobs.submit(OPEN, "looking at the files", task, done, self._not_opened)

    def _file_check(self) -> FileCheck:
        if self._check is None:
            self._check = FileCheck(self._window)
            self._check.accepted.connect(self._read)
            self._check.left.connect(self._leave_check)
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

    def _read(self, paths: list[str], chosen: Recipe) -> None:
        self._growing = False

        def task(work: Any, part: Callable[[Any], None]) -> Opened:
            return open_paths(paths, chosen, work, part)

        self._window.say(f"opening {Path(paths[0]).name} …")
        self._window.jobs.submit(OPEN, "reading files", task, self._opened, self._not_opened, self._opened_in_part)

    def _opened_in_part(self, opened: Opened) -> None:
        self._growing = True
        self._show_opened(opened)

    def _opened(self, opened: Opened) -> None:
        if self._growing and self._session.name == opened.name:
            self._growing = False
            self._session.grow_traces(opened.traces)
            self._window.keeper.open(opened.study, opened.paths)
        else:
            self._show_opened(opened)
        self._window.recent.add(list(opened.paths))
        traces = opened.traces
        self._window.say(f"{typeset.integer(traces.traces)} traces, {typeset.integer(traces.samples)} samples")

    def _show_opened(self, opened: Opened) -> None:
        self._window.status.complain(None)
        document = Document(opened.recipe, opened.decisions)
        path = opened.paths[0] if opened.study is not None else ""
        self._session.open_traces(opened.traces, opened.name, document, study_path=path)
        self._window.keeper.open(opened.study, opened.paths)

    def _not_opened(self, error: MesetaError) -> None:
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

    def save_to(self, path: str) -> None:
        """Write a study and go on in it."""
        analysis = self._session.analysis
        if analysis is None:
            return

        def task(work: Any, _: Callable[[Any], None]) -> Any:
            from meseta.study import Study, write_study

            write_study(path, analysis, work)
            return Study.open(path)

        self._window.jobs.submit(SAVE, "saving the study", task, lambda study: self._saved_as(study, path))

    def _saved_as(self, study: Any, path: str) -> None:
        self._session.study_path, self._session.name = path, Path(path).stem
        self._window.keeper.open(study, (path,))
        self._window.keeper.forget_recovery()
        self._window.recent.add([path])
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
        analysis, title = self._session.analysis, self._session.name
        if analysis is None:
            return

        def task(work: Any, _: Callable[[Any], None]) -> str:
            return export_results(analysis, folder, title, work)

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
            self._opened(opened)
            self._session.go_to(unfinished.current)

        self._window.jobs.submit(OPEN, "reading files", task, done, self._not_opened)

    # -- editing -----------------------------------------------------------------------------------------------------

    def do_undo(self) -> None:
        """Take the last change back."""
        self._session.undo.undo()

    def do_redo(self) -> None:
        """Make the last change again."""
        self._session.undo.redo()

    def do_find_action(self) -> None:
        """Find an action by its name."""
        finder = ActionFinder(list(self._window.actions_by_key.values()), self._window)
        finder.open()

    def do_stop(self) -> None:
        """Stop the work under way."""
        self._window.jobs.cancel()
        self._session.states_changed.emit()

    def do_recompute(self) -> None:
        """Work out again what is out of date."""
        self._session.pipeline.refresh()
        self._session.pipeline.refresh_trace()
        self._session.pipeline.refresh_subset()

    # -- traces ------------------------------------------------------------------------------------------------------

    def do_next(self) -> None:
        """Go to the next trace."""
        self._session.step(1)

    def do_previous(self) -> None:
        """Go to the trace before."""
        self._session.step(-1)

    def do_next_selected(self) -> None:
        """Go to the next selected trace."""
        if self._session.subset is not None:
            self._session.step(1, self._session.subset.mask)

    def do_previous_selected(self) -> None:
        """Go to the selected trace before."""
        if self._session.subset is not None:
            self._session.step(-1, self._session.subset.mask)

    def _far(self) -> int:
        traces = self._session.traces
        return max((0 if traces is None else traces.traces) // 100, 1)

    def do_next_far(self) -> None:
        """Go a hundredth of the record forward."""
        self._session.step(self._far())

    def do_previous_far(self) -> None:
        """Go a hundredth of the record back."""
        self._session.step(-self._far())

    def do_first(self) -> None:
        """Go to the first trace."""
        self._session.go_to(0)

    def do_last(self) -> None:
        """Go to the last trace."""
        if self._session.traces is not None:
            self._session.go_to(self._session.traces.traces - 1)

    def do_go_to(self) -> None:
        """Ask for a trace number and go there."""
        traces = self._session.traces
        if traces is None:
            return
        number, given = QInputDialog.getInt(
            self._window, "Go to trace", "Trace number", max(self._session.current, 0), 0, traces.traces - 1
        )
        if given:
            self._session.go_to(number)

    def decide(self, rows: list[int], keep: bool | None) -> None:
        """Keep or reject traces by hand, or leave them to the rules."""
        session = self._session
        traces = session.traces
        rows = [row for row in rows if traces is not None and 0 <= row < traces.traces]
        if not rows or traces is None:
            return
        names = [traces.identity(row).text() for row in rows]
        decisions = session.document.decisions
        decisions = decisions.without_verdict(names) if keep is None else decisions.with_verdict(names, keep)
        what = f"trace {rows[0]}" if len(rows) == 1 else f"{typeset.integer(len(rows))} traces"
        verb = {True: "keep", False: "reject", None: "leave to the rules:"}[keep]
        session.change_decisions(f"{verb} {what}", decisions)

    def do_reject(self) -> None:
        """Reject the current trace and go on."""
        self.decide([self._session.current], False)

    def do_keep(self) -> None:
        """Keep the current trace."""
        self.decide([self._session.current], True)

    def do_undecide(self) -> None:
        """Leave the current trace to the rules."""
        self.decide([self._session.current], None)

    def do_event(self) -> None:
        """Ask what happened before the current trace, and mark it."""
        session = self._session
        if session.traces is None:
            return
        text, given = QInputDialog.getText(self._window, "Event", f"What happened before trace {session.current}?")
        if given and text.strip():
            event = Event(session.traces.identity(session.current).text(), text.strip())
            session.change_decisions(f"mark the event {text.strip()}", session.document.decisions.with_event(event))

    # -- peaks -------------------------------------------------------------------------------------------------------

    def do_peak_add(self) -> None:
        """Ask for a peak where the pointer or the caret is."""
        self._peaks.add_at_caret()

    def do_peak_next(self) -> None:
        """Choose the next peak up the axis."""
        self._peaks.step(1)

    def do_peak_previous(self) -> None:
        """Choose the next peak down the axis."""
        self._peaks.step(-1)

    def do_peak_edit(self) -> None:
        """Ask for the numbers of the chosen peak."""
        edit_peak(self._peaks, self._peaks.chosen, self._window)

    def do_peak_up(self) -> None:
        """Move the chosen peak up by a bin."""
        self._peaks.nudge(1.0)

    def do_peak_down(self) -> None:
        """Move the chosen peak down by a bin."""
        self._peaks.nudge(-1.0)

    def do_peak_hold(self) -> None:
        """Hold the chosen peak where it stands, or free it."""
        if self._peaks.chosen >= 0:
            self._peaks.hold(self._peaks.chosen, not self._peaks.starts()[self._peaks.chosen].fixed)

    def do_peak_hold_width(self) -> None:
        """Hold the chosen peak's width as it is, or free it."""
        if self._peaks.chosen >= 0:
            self._peaks.hold_width(self._peaks.chosen, not self._peaks.starts()[self._peaks.chosen].fixed_width)

    def do_peak_remove(self) -> None:
        """Take the chosen peak out of the fit."""
        self._peaks.remove(self._peaks.chosen)

    def do_peak_multiples(self) -> None:
        """Tie all positions to multiples of one conductance, or free them."""
        self._peaks.tie("none" if self._peaks.settings.tie == "multiples" else "multiples")

    def do_peak_ladder(self) -> None:
        """Tie all positions to multiples behind one series resistance, or free them."""
        self._peaks.tie("none" if self._peaks.settings.tie == "ladder" else "ladder")

    def do_peak_widths(self) -> None:
        """Make all peaks equally wide relative to their position, or free their widths."""
        self._peaks.equal_widths(not self._peaks.settings.equal_relative_widths)

    def do_peak_propose(self) -> None:
        """Ask for no peaks in particular."""
        self._peaks.forget()

    # -- conditions --------------------------------------------------------------------------------------------------

    def do_make_rule(self) -> None:
        """Add the conditions to the rules of the selection."""
        session = self._session
        rule = session.document.conditions.rule()
        if not rule:
            return
        rules = [*session.document.recipe.selection.rules, rule]
        recipe = session.document.recipe.with_values("selection", rules=rules)
        off = replace(
            session.document.conditions,
            conditions=tuple(replace(one, on=False) for one in session.document.conditions.conditions),
        )
        session.change("make the conditions a rule", replace(session.document, recipe=recipe, conditions=off))
        self._window.docks["rules"].show()
        self._window.docks["rules"].raise_()

    def do_make_group(self) -> None:
        """Ask for a name and make a group of the selected traces."""
        subset = self._session.subset
        if subset is None:
            return
        name, given = QInputDialog.getText(
            self._window, "New group", f"Name of the group of {int(np.count_nonzero(subset.mask))} traces"
        )
        if given and name.strip():
            self.make_group(name.strip())

    def make_group(self, name: str) -> None:
        """Make a group of the selected traces."""
        subset = self._session.subset
        if subset is not None:
            self._session.change_decisions(f"make the group {name}", with_new_group(self._session, name, subset.mask))

    def do_toggle_conditions(self) -> None:
        """Switch all conditions off, or those on again that were."""
        conditions = self._session.document.conditions
        if not conditions.conditions:
            return
        states = tuple(one.on for one in conditions.conditions)
        if any(states):
            self._off, wanted, word = states, (False,) * len(states), "off"
        else:
            wanted = self._off if len(self._off) == len(states) and any(self._off) else (True,) * len(states)
            word = "on"
        changed = tuple(replace(one, on=on) for one, on in zip(conditions.conditions, wanted, strict=True))
        self._session.change_conditions(f"switch all conditions {word}", replace(conditions, conditions=changed))

    def do_clear_conditions(self) -> None:
        """Remove all conditions."""
        conditions = self._session.document.conditions
        self._session.change_conditions("remove all conditions", replace(conditions, conditions=()))

    def do_reject_selected(self) -> None:
        """Reject all selected traces by hand."""
        if self._session.subset is not None:
            self.decide(np.flatnonzero(self._session.subset.mask).tolist(), False)

    # -- looking -----------------------------------------------------------------------------------------------------

    def do_axis(self) -> None:
        """Switch between the linear and the logarithmic conductance axis."""
        session = self._session
        other = "linear" if session.axis == "logarithmic" else "logarithmic"
        session.change_setting("histogram", "axis", other, f"the conductance axis to {other}")

    def do_whole(self) -> None:
        """Show the whole of both axes."""
        self._session.set_span(self._session.default_span())
        self._session.set_drive_span(*self._session.default_drive_span())

    def _zoom(self, factor: float) -> None:
        span = self._session.span
        self._session.set_span(span.zoomed(factor, (span.low + span.high) / 2))

    def do_zoom_in(self) -> None:
        """Zoom the conductance axis in."""
        self._zoom(0.8)

    def do_zoom_out(self) -> None:
        """Zoom the conductance axis out."""
        self._zoom(1.25)

    def _move(self, share: float) -> None:
        span = self._session.span
        self._session.set_span(span.moved(share * (span.high - span.low)))

    def do_move_up(self) -> None:
        """Move up the conductance axis."""
        self._move(0.1)

    def do_move_down(self) -> None:
        """Move down the conductance axis."""
        self._move(-0.1)

    def look_at(self, conductance_g0: float) -> None:
        """Bring a conductance into the middle of the view."""
        session = self._session
        u = float(np.log10(conductance_g0)) if session.axis == "logarithmic" and conductance_g0 > 0 else conductance_g0
        half = min((session.span.high - session.span.low) / 2, 1.0)
        session.set_span(Span(u - half, u + half))

    def do_arrange(self) -> None:
        """Arrange the window as at first."""
        self._window.arrange_as_first()

    # -- help --------------------------------------------------------------------------------------------------------

    def do_help(self) -> None:
        """Show the help."""
        self._window.show_help("window")

    def do_keys(self) -> None:
        """Show the sheet of keys and gestures."""
        self._window.show_help("window")
        if self._window.help is not None:
            self._window.help.show_html(keys_page(list(self._window.actions_by_key.values())))

    def do_about(self) -> None:
        """Say what this is."""
        box = QMessageBox(self._window)
        box.setWindowTitle("About Meseta")
        box.setText(f"Meseta {__version__}")
        box.setInformativeText(
            "From raw recordings of breaking contacts to conductance peaks with honest uncertainties. BSD licence."
        )
        box.open()
