"""What the actions do: one method an action, named ``do_`` and its key."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from PySide6.QtWidgets import QInputDialog, QMessageBox

from meseta import __version__, typeset
from meseta.selection.decisions import Event
from meseta.window.finder import ActionFinder, keys_page
from meseta.window.following.commands import FollowCommands
from meseta.window.groups import with_new_group
from meseta.window.peak_editing import PeakEditor
from meseta.window.session import Span
from meseta.window.views.peaks.dialog import edit_peak

if TYPE_CHECKING:
    from meseta.window.main_window import MainWindow

__all__ = ["Commands"]


class Commands(FollowCommands):
    """The actions of the window."""

    def __init__(self, window: MainWindow, recovery: Path) -> None:
        super().__init__(window, recovery)
        self._off: tuple[bool, ...] = ()
        self._peaks = PeakEditor.of(window.session)

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
        names = traces.identities(rows)
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
