"""The channels of a recording as a table: what each was taken for, why, and another role or unit to choose."""

from __future__ import annotations

from typing import Any

from PySide6.QtCore import Qt
from PySide6.QtWidgets import QComboBox, QGridLayout, QLabel, QLineEdit, QWidget

from meseta.intake import Description
from meseta.recipe.intake import ROLES
from meseta.window.elided import Elided
from meseta.window.layouts import emptied
from meseta.window.session import Session

__all__ = ["ChannelTable"]


class ChannelTable(QWidget):
    """One line a channel."""

    def __init__(self, session: Session) -> None:
        super().__init__()
        self._session = session
        self._grid = QGridLayout(self)
        self._grid.setContentsMargins(0, 0, 0, 0)
        self._grid.setHorizontalSpacing(8)
        self._grid.setVerticalSpacing(4)
        self._grid.setColumnStretch(0, 3)
        self._grid.setColumnStretch(3, 1)
        self._shown: tuple[Any, ...] = ()
        self.roles: dict[str, QComboBox] = {}
        self.units: dict[str, QLineEdit] = {}

    def show_channels(self, description: Description) -> None:
        """Show what the channels were taken for."""
        if description.channels == self._shown:
            return
        self._shown = description.channels
        emptied(self._grid)
        self.roles, self.units = {}, {}
        for column, title in enumerate(("channel", "is", "unit", "because")):
            label = QLabel(title)
            label.setProperty("tone", "quiet")
            self._grid.addWidget(label, 0, column)
        for line, channel in enumerate(description.channels, 1):
            self._add(line, channel)

    def _add(self, line: int, channel: Any) -> None:
        role, unit = QComboBox(), QLineEdit(channel.unit)
        role.addItems([word.replace("_", " ") for word in ROLES])
        role.setCurrentIndex(ROLES.index(channel.role) if channel.role in ROLES else ROLES.index("other"))
        role.setSizeAdjustPolicy(QComboBox.SizeAdjustPolicy.AdjustToMinimumContentsLengthWithIcon)
        role.setMinimumContentsLength(9)
        role.setAccessibleName(f"What {channel.name} is")
        unit.setAccessibleName(f"Unit of {channel.name}")
        unit.setMaximumWidth(72)
        role.activated.connect(lambda _, one=channel: self._change(one))
        unit.editingFinished.connect(lambda one=channel: self._change(one))
        self.roles[channel.name], self.units[channel.name] = role, unit
        sure = f", {channel.confidence:.0%} sure" if channel.confidence else ""
        why = Elided(f"{channel.ground}{sure}" if channel.ground else "not recognised")
        why.setMinimumWidth(44)
        name = Elided(channel.name, tone="")
        name.setMinimumWidth(112)
        for column, widget in enumerate((name, role, unit, why)):
            self._grid.addWidget(
                widget, line, column, Qt.AlignmentFlag.AlignVCenter if column in (1, 2) else Qt.AlignmentFlag(0)
            )

    def _change(self, channel: Any) -> None:
        role = ROLES[self.roles[channel.name].currentIndex()]
        unit = self.units[channel.name].text().strip()
        if role == channel.role and unit == channel.unit:
            return
        settings = self._session.document.recipe.intake
        channels = {name: one.model_dump() for name, one in settings.channels.items()}
        channels[channel.name] = {"role": role, "unit": unit, "scale": channel.scale, "offset": channel.offset}
        self._session.change_setting("intake", "channels", channels, f"{channel.name} to {role}")
