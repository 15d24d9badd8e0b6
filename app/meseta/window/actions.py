"""Every action of the window in one table: name, menu, keys, when it can be used."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

__all__ = ["ACTIONS", "MENUS", "ActionSpec"]

When = Literal["always", "open", "conditions", "subset", "peak", "following"]

MENUS = ("File", "Edit", "Trace", "Conditions", "Peaks", "Look", "Help")


@dataclass(frozen=True)
class ActionSpec:
    """One action.

    Attributes
    ----------
    key : str
        Name by which views ask for it; the window's method is ``do_<key>``.
    text : str
        As menus show it.
    menu : str
        One of :data:`MENUS`; "-" at the beginning draws a line before it.
    keys : tuple of str
        Shortcuts, the first one is shown.
    when : str
        "always", "open" (traces are open), "conditions" (some are switched on), "subset" (they pick traces),
        "peak" (one is chosen), "following" (a folder is followed).
    bar : str
        Word on the tool bar; empty where it has none.
    help : str
        One sentence.
    """

    key: str
    text: str
    menu: str
    keys: tuple[str, ...] = ()
    when: When = "open"
    bar: str = ""
    help: str = ""
    line_before: bool = False


ACTIONS: tuple[ActionSpec, ...] = (
    ActionSpec("open", "Open files …", "File", ("Ctrl+O",), "always", "Open", "Open recordings or a study."),
    ActionSpec(
        "open_folder", "Open a folder …", "File", ("Ctrl+Shift+O",), "always", help="Open all recordings in a folder."
    ),
    ActionSpec(
        "open_sample",
        "Open the bundled recordings",
        "File",
        (),
        "always",
        help="Small simulated recordings to try everything on.",
    ),
    ActionSpec(
        "follow",
        "Follow a folder …",
        "File",
        ("Ctrl+Shift+F",),
        "always",
        help="Take in recordings as an experiment writes them; the views grow.",
        line_before=True,
    ),
    ActionSpec(
        "go_on_following",
        "Go on following the last folder",
        "File",
        (),
        "always",
        help="Open the study that was followed into last, and take in what has come since.",
    ),
    ActionSpec("stop_following", "Stop following", "File", ("Ctrl+Shift+X",), "following"),
    ActionSpec(
        "left_out",
        "Files left out …",
        "File",
        (),
        "always",
        help="List the files that could not be read, each with what is wrong and what to do.",
    ),
    ActionSpec(
        "save",
        "Save the study",
        "File",
        ("Ctrl+S",),
        "open",
        "Save",
        "Save traces, recipe, decisions and history in one file.",
        True,
    ),
    ActionSpec("save_as", "Save the study as …", "File", ("Ctrl+Shift+S",), "open"),
    ActionSpec(
        "export",
        "Export results …",
        "File",
        ("Ctrl+E",),
        "open",
        "Export",
        "Write tables, figures, report and recipe into a folder.",
        True,
    ),
    ActionSpec(
        "save_recipe",
        "Save the recipe …",
        "File",
        (),
        "open",
        help="Write all settings as TOML, to use with meseta run.",
    ),
    ActionSpec("load_recipe", "Load a recipe …", "File", (), "always", help="Take all settings from a TOML file."),
    ActionSpec("close", "Close the recording", "File", ("Ctrl+W",), "open", line_before=True),
    ActionSpec("quit", "Quit", "File", ("Ctrl+Q",), "always"),
    ActionSpec("undo", "Undo", "Edit", ("Ctrl+Z",), "always"),
    ActionSpec("redo", "Redo", "Edit", ("Ctrl+Shift+Z", "Ctrl+Y"), "always"),
    ActionSpec(
        "find_action",
        "Find an action …",
        "Edit",
        ("Ctrl+Space", "F3"),
        "always",
        "",
        "Type a word of what you want to do.",
        True,
    ),
    ActionSpec("stop", "Stop the work under way", "Edit", ("Escape",), "always"),
    ActionSpec("recompute", "Work out again what is out of date", "Edit", ("F5",), "open"),
    ActionSpec("next", "Next trace", "Trace", ("Right",)),
    ActionSpec("previous", "Previous trace", "Trace", ("Left",)),
    ActionSpec("next_selected", "Next selected trace", "Trace", ("Shift+Right",), "subset"),
    ActionSpec("previous_selected", "Previous selected trace", "Trace", ("Shift+Left",), "subset"),
    ActionSpec("next_far", "A hundredth of the record forward", "Trace", ("Ctrl+Right",)),
    ActionSpec("previous_far", "A hundredth of the record back", "Trace", ("Ctrl+Left",)),
    ActionSpec("first", "First trace", "Trace", ("Ctrl+Home",)),
    ActionSpec("last", "Last trace", "Trace", ("Ctrl+End",)),
    ActionSpec("go_to", "Go to trace …", "Trace", ("Ctrl+G",)),
    ActionSpec(
        "reject",
        "Reject this trace",
        "Trace",
        ("R",),
        "open",
        "Reject",
        "Leave this trace out, whatever the rules say.",
        True,
    ),
    ActionSpec("keep", "Keep this trace", "Trace", ("K",), "open", "Keep", "Keep this trace, whatever the rules say."),
    ActionSpec("undecide", "Leave this trace to the rules", "Trace", ("U",)),
    ActionSpec(
        "event",
        "Mark an event before this trace …",
        "Trace",
        ("E",),
        "open",
        line_before=True,
        help="A new tip, a drop added: it stands on the record strip.",
    ),
    ActionSpec("make_rule", "Make the conditions a rule", "Conditions", ("Ctrl+R",), "conditions"),
    ActionSpec("make_group", "Make a group of the selected traces …", "Conditions", ("Ctrl+Shift+G",), "subset"),
    ActionSpec("toggle_conditions", "Switch all conditions off or on", "Conditions", ("C",), "open"),
    ActionSpec("clear_conditions", "Remove all conditions", "Conditions", ("Ctrl+Backspace",), "conditions"),
    ActionSpec("reject_selected", "Reject the selected traces", "Conditions", ("Shift+R",), "subset", line_before=True),
    ActionSpec(
        "peak_add",
        "Add a peak here",
        "Peaks",
        ("P",),
        "open",
        help="Ask the fit for one more peak where the pointer or the caret is on the conductance axis.",
    ),
    ActionSpec("peak_next", "Choose the next peak up", "Peaks", ("N",), "open"),
    ActionSpec("peak_previous", "Choose the next peak down", "Peaks", ("Shift+N",), "open"),
    ActionSpec("peak_edit", "Edit the chosen peak …", "Peaks", ("F2",), "peak", line_before=True),
    ActionSpec("peak_up", "Move the chosen peak up by a bin", "Peaks", ("Ctrl+Up",), "peak"),
    ActionSpec("peak_down", "Move the chosen peak down by a bin", "Peaks", ("Ctrl+Down",), "peak"),
    ActionSpec("peak_hold", "Hold or free the chosen peak", "Peaks", ("H",), "peak"),
    ActionSpec("peak_hold_width", "Hold or free its width", "Peaks", ("Shift+H",), "peak"),
    ActionSpec("peak_remove", "Remove the chosen peak", "Peaks", ("Del",), "peak"),
    ActionSpec("peak_multiples", "Tie or free positions as multiples", "Peaks", ("T",), "open", line_before=True),
    ActionSpec("peak_ladder", "Tie or free positions behind a series resistance", "Peaks", ("Shift+T",), "open"),
    ActionSpec("peak_widths", "Tie or free relative widths", "Peaks", ("W",), "open"),
    ActionSpec("peak_propose", "Let the peaks be proposed again", "Peaks", (), "open", line_before=True),
    ActionSpec(
        "axis",
        "Linear or logarithmic conductance axis",
        "Look",
        ("L",),
        "always",
        "Log / linear",
        "One switch for all plots.",
    ),
    ActionSpec("whole", "Show the whole of both axes", "Look", ("0",), "open", "Whole"),
    ActionSpec("zoom_in", "Zoom the conductance axis in", "Look", ("+", "="), "open"),
    ActionSpec("zoom_out", "Zoom the conductance axis out", "Look", ("-",), "open"),
    ActionSpec("move_up", "Move up the conductance axis", "Look", ("Alt+Up",), "open"),
    ActionSpec("move_down", "Move down the conductance axis", "Look", ("Alt+Down",), "open"),
    ActionSpec("arrange", "Arrange the window as at first", "Look", (), "always", line_before=True),
    ActionSpec("help", "Help", "Help", ("F1",), "always"),
    ActionSpec("keys", "Keys and mouse", "Help", ("Ctrl+F1",), "always"),
    ActionSpec("about", "About Meseta", "Help", (), "always"),
)
"""All actions in the order of the menus."""
