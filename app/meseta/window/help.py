"""The built-in help: pages of Markdown in the resources, shown in a window of their own."""

from __future__ import annotations

from pathlib import Path

from PySide6.QtCore import Qt, QUrl
from PySide6.QtGui import QDesktopServices, QKeySequence, QShortcut
from PySide6.QtWidgets import (
    QDialog,
    QHBoxLayout,
    QListWidget,
    QPushButton,
    QSplitter,
    QTextBrowser,
    QVBoxLayout,
    QWidget,
)

from meseta.resources import resource

__all__ = ["HelpBrowser", "help_pages"]


def help_pages() -> dict[str, Path]:
    """Return every page by its name, in the order of their titles."""
    folder = resource("help")
    paths = sorted(folder.glob("*.md"), key=lambda path: _title(path).casefold()) if folder.is_dir() else []
    return {path.stem: path for path in paths}


def _title(path: Path) -> str:
    """Return the first heading of a page."""
    with path.open(encoding="utf-8") as lines:
        for line in lines:
            if line.startswith("#"):
                return line.lstrip("# ").strip()
    return path.stem.replace("_", " ")


class HelpBrowser(QDialog):
    """A list of pages and the page."""

    def __init__(self, parent: QWidget) -> None:
        super().__init__(parent)
        self.setWindowTitle("Meseta help")
        self.resize(880, 640)
        self.pages = help_pages()
        self.list, self.page = QListWidget(), QTextBrowser()
        self.list.setAccessibleName("Pages of the help")
        self.page.setAccessibleName("Page of the help")
        self.page.setOpenLinks(False)
        self.page.anchorClicked.connect(self._follow)
        for name, path in self.pages.items():
            self.list.addItem(_title(path))
            self.list.item(self.list.count() - 1).setToolTip(name)
        self.list.setHorizontalScrollBarPolicy(Qt.ScrollBarPolicy.ScrollBarAlwaysOff)
        self.list.currentRowChanged.connect(self._chosen)
        split = QSplitter()
        split.addWidget(self.list)
        split.addWidget(self.page)
        split.setSizes([250, 620])
        close = QPushButton("Close")
        close.clicked.connect(self.close)
        row = QHBoxLayout()
        row.addStretch(1)
        row.addWidget(close)
        column = QVBoxLayout(self)
        column.setContentsMargins(8, 8, 8, 8)
        column.addWidget(split, 1)
        column.addLayout(row)
        QShortcut(QKeySequence("Alt+Left"), self, self.page.backward)

    def open_page(self, name: str) -> None:
        """Show a page, or say that there is none of that name."""
        names = list(self.pages)
        if name in names:
            self.list.setCurrentRow(names.index(name))
            self._chosen(names.index(name))
        else:
            self.page.setMarkdown(f"# {name.replace('_', ' ').capitalize()}\n\nThe help has no page of this name yet.")
        self.show()
        self.raise_()

    def show_html(self, html: str) -> None:
        """Show text made by the window itself, the sheet of keys say."""
        self.page.setFocus()  # a list that gets the focus chooses its first page
        self.show()
        self.raise_()
        self.list.setCurrentRow(-1)  # it is none of the pages
        self.page.setHtml(html)

    def _chosen(self, row: int) -> None:
        if 0 <= row < len(self.pages):
            self.page.setMarkdown(list(self.pages.values())[row].read_text(encoding="utf-8"))

    def _follow(self, link: QUrl) -> None:
        name = Path(link.fileName()).stem
        if link.isRelative() and name in self.pages:
            self.open_page(name)
        elif link.scheme() in ("http", "https"):
            QDesktopServices.openUrl(link)
