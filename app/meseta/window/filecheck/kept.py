"""Kept layouts in the file check: which one is used, how files differ from it, and keeping the answer under a name."""

from __future__ import annotations

from typing import Any

from PySide6.QtCore import Qt
from PySide6.QtWidgets import QComboBox, QGridLayout, QHBoxLayout, QLabel, QLineEdit, QPushButton, QVBoxLayout, QWidget

from meseta.errors import RecipeError
from meseta.intake.meaning.kept_layouts import answered_by, recognised_anew
from meseta.intake.meaning.layout_differences import differences
from meseta.recipe import Recipe
from meseta.recipe.kept_layouts import NO_LAYOUT, KeptLayout
from meseta.recipe.layout_files import with_layout
from meseta.window.filecheck.preview import CheckPicture
from meseta.window.filecheck.remembered import RememberedLayouts
from meseta.window.layouts import emptied
from meseta.window.session import Session

__all__ = ["KEPT_SETTINGS", "KeptLayouts"]

KEPT_SETTINGS = ("use_layout", "layouts")
"""Settings of ``[intake]`` that are changed here and nowhere else in the file check."""

ANY, ANEW, ITS, BEFORE = "any", "anew", "its", "before"
"""Kinds of choices: whichever fits, recognised anew, one of the recipe, one that was kept before."""


class KeptLayouts(QWidget):
    """Says what the files fit, and lets another layout be chosen, the misfit corrected, or the answer kept."""

    def __init__(self, session: Session, remembered: RememberedLayouts) -> None:
        super().__init__()
        self._session, self._remembered = session, remembered
        self._picture: CheckPicture | None = None
        self.choice, self.name = QComboBox(), QLineEdit()
        self.said, self.wrong = QLabel(""), QLabel("")
        self.differences = QVBoxLayout()
        self.keep, self.forget = QPushButton("Keep"), QPushButton("Forget")
        self.correct, self.another, self.use = QPushButton(""), QPushButton("Keep as another layout"), QPushButton("")
        self._lay_out()
        self.choice.activated.connect(self._choose)
        self.keep.clicked.connect(self._keep)
        self.forget.clicked.connect(self._forget)
        self.name.returnPressed.connect(self._keep)
        self.name.textEdited.connect(lambda _: self._complain(""))
        self.correct.clicked.connect(lambda: self._begin_anew(self._misfit_layout()))
        self.another.clicked.connect(lambda: self._begin_anew(""))
        self.use.clicked.connect(self._use_fitting)

    def _lay_out(self) -> None:
        self.name.setPlaceholderText("name, for example rig 2")
        for widget, name in (
            (self.choice, "Kept layout to read these files by"),
            (self.name, "Name to keep the answer under"),
        ):
            widget.setAccessibleName(name)
        self.choice.setSizeAdjustPolicy(QComboBox.SizeAdjustPolicy.AdjustToMinimumContentsLengthWithIcon)
        self.choice.setMinimumContentsLength(12)
        self.forget.setToolTip("Take the layout that is chosen out of this recipe, and propose it no more")
        self.keep.setToolTip("Keep what each channel is under this name: the next files must be like these")
        for label, tone in ((self.said, "quiet"), (self.wrong, "fit")):
            label.setWordWrap(True)
            label.setProperty("tone", tone)
        grid = QGridLayout()
        grid.setContentsMargins(0, 0, 0, 0)
        grid.setHorizontalSpacing(8)
        grid.setVerticalSpacing(4)
        for line, (words, editor) in enumerate((("Read by", self.choice), ("Keep as", self.name))):
            title = QLabel(words)
            title.setBuddy(editor)
            grid.addWidget(title, line, 0)
            grid.addWidget(editor, line, 1)
        grid.addWidget(self.forget, 0, 2)
        grid.addWidget(self.keep, 1, 2)
        grid.setColumnStretch(1, 1)
        buttons = QHBoxLayout()
        for button in (self.correct, self.another, self.use):
            button.setAutoDefault(True)
            button.hide()
            buttons.addWidget(button)
        buttons.addStretch(1)
        self.wrong.hide()
        column = QVBoxLayout(self)
        column.setContentsMargins(0, 0, 0, 0)
        column.setSpacing(4)
        column.addWidget(self.said)
        column.addLayout(self.differences)
        column.addLayout(buttons)
        column.addLayout(grid)
        column.addWidget(self.wrong)

    # -- showing -----------------------------------------------------------------------------------------------------

    @property
    def _recipe(self) -> Recipe:
        return self._session.document.recipe

    def begin(self) -> None:
        """Forget what was typed for other files."""
        self.name.clear()
        self._complain("")

    def show_picture(self, picture: CheckPicture) -> None:
        """Show what the files fit, and how they differ where they do not."""
        self._picture = picture
        self._fill()
        misfit = picture.misfit
        self.keep.setEnabled(bool(picture.described))
        self.correct.setVisible(misfit is not None and bool(misfit.differences))
        self.another.setVisible(misfit is not None)
        self.use.setVisible(bool(picture.fitting))
        if misfit is not None:
            self.correct.setText(f"Correct '{misfit.layout}'")
        if picture.fitting:
            self.use.setText(f"Use '{picture.fitting[0]}'")
        self.said.setText(self._sentence(picture))
        emptied(self.differences)
        for difference in () if misfit is None else misfit.differences:
            label = QLabel(f"? {difference}")
            label.setWordWrap(True)
            label.setProperty("tone", "doubtful")
            label.setTextInteractionFlags(Qt.TextInteractionFlag.TextSelectableByMouse)
            self.differences.addWidget(label)

    def _sentence(self, picture: CheckPicture) -> str:
        fitting = picture.fitting
        before = f" They fit the layout '{fitting[0]}', which was kept before." if fitting else ""
        if picture.misfit is not None:
            if not picture.misfit.differences:
                return f"{picture.misfit.said}. Choose one below."
            return f"{picture.misfit.file} does not fit the layout '{picture.misfit.layout}' any more:{before}"
        if not picture.described:
            return ""
        kept = picture.described[0].kept_layout
        if kept:
            told = " corrected under Channels" if self._recipe.intake.channels else ""
            return f"As the kept layout '{kept}' says{f',{told}' if told else ''}."
        return before.strip() or "Recognised anew. Kept under a name, the answer holds for the next files, too."

    def _fill(self) -> None:
        settings = self._recipe.intake
        kept = [(f"layout '{name}'", (ITS, name)) for name in settings.layouts]
        before = [
            (f"layout '{name}', kept before", (BEFORE, name))
            for name in reversed(self._remembered.entries())
            if name not in settings.layouts
        ]
        entries: list[tuple[str, tuple[str, str]]] = [("whichever kept layout fits", (ANY, ""))] if kept else []
        entries += [*kept, *before, ("what is recognised", (ANEW, ""))]
        self.choice.clear()
        for words, data in entries:
            self.choice.addItem(words, data)
        used = settings.use_layout
        anew = used == NO_LAYOUT or not kept
        current = (ANEW, "") if anew else (ANY, "") if used is None else (ITS, used)
        self.choice.setCurrentIndex([data for _, data in entries].index(current))
        self.forget.setEnabled(current[0] == ITS)

    def _complain(self, text: str) -> None:
        self.wrong.setText(text)
        self.wrong.setVisible(bool(text))

    # -- changing ----------------------------------------------------------------------------------------------------

    def _misfit_layout(self) -> str:
        return "" if self._picture is None or self._picture.misfit is None else self._picture.misfit.layout

    def _choose(self, index: int) -> None:
        kind, name = self.choice.itemData(index)
        if kind == BEFORE:
            self._take(name, self._remembered.entries()[name])
        elif kind != ANEW or self._recipe.intake.layouts:
            used: Any = {ANY: None, ANEW: NO_LAYOUT}.get(kind, name)
            self._session.change_setting("intake", "use_layout", used, "the kept layout to use")

    def _use_fitting(self) -> None:
        if self._picture is not None and self._picture.fitting:
            name = self._picture.fitting[0]
            self._take(name, self._remembered.entries()[name])

    def _take(self, name: str, layout: KeptLayout) -> None:
        """Take a layout that was kept before into the recipe, and use it."""
        recipe = with_layout(self._recipe, name, layout).with_values("intake", use_layout=name)
        self._session.change_recipe(f"use layout {name}", recipe)

    def _begin_anew(self, name: str) -> None:
        """Recognise the files anew; what a layout of that name says of unchanged channels is taken over."""
        if self._picture is None or self._picture.misfit is None:
            return
        recipe = recognised_anew(self._recipe, self._picture.misfit.seen, name)
        self.name.setText(name)
        self.name.setFocus()
        self._session.change_recipe(f"correct layout {name}" if name else "recognise anew", recipe)

    def _forget(self) -> None:
        kind, name = self.choice.currentData()
        if kind != ITS:
            return
        self._remembered.forget(name)
        layouts = {other: one.model_dump() for other, one in self._recipe.intake.layouts.items() if other != name}
        recipe = self._recipe.with_values("intake", layouts=layouts, use_layout=None)
        self._session.change_recipe(f"forget layout {name}", recipe)

    def _keep(self) -> None:
        name = " ".join(self.name.text().split())
        if self._picture is None or not self._picture.described:
            return
        if not name:
            self._complain("Give it a name.")
            return
        layout = self._picture.described[0].form
        try:
            recipe = with_layout(self._recipe, name, layout, answered_by(layout, self._recipe.intake.channels))
        except RecipeError as error:
            self._complain(error.what.removeprefix("[intake] "))
            return
        if self._also_fits(name, layout):
            recipe = recipe.with_values("intake", use_layout=name)
        self._session.change_recipe(f"keep layout {name}", recipe)

    def _also_fits(self, name: str, layout: KeptLayout) -> bool:
        """Return whether files like these fit another layout of the recipe, too: then one must be chosen."""
        pieces = self._picture.described[0].pieces if self._picture is not None else 1
        others = (one for other, one in self._recipe.intake.layouts.items() if other != name)
        return any(not differences(one, layout, pieces) for one in others)
